"""The error budget: what lens, plane map, belt, time stamp and finding each put a part off at the gripper."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from cameras.camera import CameraMap
from cameras.confidence import PER_SIGMA_95, radius_95
from cameras.field import field_of
from pipeline.cell import Cell


@dataclass(frozen=True)
class MapDoubt:
    """Standard deviations that a plane map adds over its field (root mean square): of one coordinate and of a yaw.

    Of them `lens` is what the lens file leaves open, `plane` what the touches do once the lens is given.
    """

    lens_mm: float
    plane_mm: float
    lens_rad: float
    plane_rad: float


@dataclass(frozen=True)
class BudgetLine:
    """One source of error at the gripper: standard deviations along and across the belt, and of yaw."""

    source: str
    along_mm: float
    across_mm: float
    yaw_rad: float = 0.0

    @property
    def within_mm(self) -> float:
        """Radius that holds 95 % of the errors."""
        return float(radius_95(np.diag([self.along_mm**2, self.across_mm**2])))

    @property
    def within_deg(self) -> float:
        """Half of the range of yaw that holds 95 % of the errors."""
        return float(np.degrees(PER_SIGMA_95 * self.yaw_rad))


@dataclass(frozen=True)
class ErrorBudget:
    """What each source adds for one kind of part, their sum, and what its grip tolerates (None: not said)."""

    part: str
    lines: tuple[BudgetLine, ...]
    tolerance_mm: float | None = None
    tolerance_deg: float | None = None

    @property
    def total(self) -> BudgetLine:
        """All sources together; they are independent, so variances add."""
        along, across, yaw = (float(np.sqrt(sum(getattr(line, name) ** 2 for line in self.lines)))
                              for name in ("along_mm", "across_mm", "yaw_rad"))
        return BudgetLine("sum", along, across, yaw)

    @property
    def met(self) -> bool:
        """Whether 95 % of the grips keep within what is tolerated."""
        total = self.total
        return ((self.tolerance_mm is None or total.within_mm <= self.tolerance_mm)
                and (self.tolerance_deg is None or total.within_deg <= self.tolerance_deg))

    def rows(self) -> list[tuple[str, str, str]]:
        """The table: source, 95 % of mm, 95 % of degrees; then the sum and what is tolerated."""
        shown = [(line.source, f"{line.within_mm:.3f}", f"{line.within_deg:.3f}") for line in (*self.lines, self.total)]
        if self.tolerance_mm is not None or self.tolerance_deg is not None:
            mm, deg = ("" if limit is None else f"{limit:.3f}" for limit in (self.tolerance_mm, self.tolerance_deg))
            shown.append(("tolerated", mm, deg))
        return shown


def error_budget(
    part: str,
    doubt: MapDoubt,
    *,
    finding_mm: float,
    finding_rad: float = 0.0,
    carry_mm: float = 0.0,
    scale_error: float = 0.0,
    heading_error_rad: float = 0.0,
    speed_mm_s: float = 0.0,
    time_error_s: float = 0.0,
    tolerance_mm: float | None = None,
    tolerance_deg: float | None = None,
) -> ErrorBudget:
    """The budget of one kind of part. All errors are standard deviations and taken as independent and Gaussian.

    finding: of one coordinate and of yaw, as the finder foretells them.  carry_mm: belt travel from image to gripper.
    scale_error: of mm per count, as a share of it.  speed_mm_s, time_error_s: of the belt, of an image's time stamp.
    """
    lines = (
        BudgetLine("lens", doubt.lens_mm, doubt.lens_mm, doubt.lens_rad),
        BudgetLine("plane map", doubt.plane_mm, doubt.plane_mm, doubt.plane_rad),
        BudgetLine(f"belt scale and heading over {carry_mm:.0f} mm", scale_error * carry_mm,
                   heading_error_rad * carry_mm),
        BudgetLine(f"time stamp at {speed_mm_s:.0f} mm/s", time_error_s * speed_mm_s, 0.0),
        BudgetLine("finding", finding_mm, finding_mm, finding_rad),
    )  # fmt: skip
    return ErrorBudget(part, lines, tolerance_mm, tolerance_deg)


def map_doubt(camera: CameraMap, height_mm: float) -> MapDoubt:
    """How unsure a map is at a height (z in the cell frame), over the whole field."""
    points = field_of(camera, height_mm).points_mm.reshape(-1, 2)
    points = points[np.isfinite(points).all(axis=1)]
    given = camera.lens_known()

    def over_field(one: CameraMap) -> tuple[float, float]:
        return (float(np.mean(one.sigma_mm(points, height_mm) ** 2)),
                float(np.mean(one.yaw_sigma_rad(points, height_mm) ** 2)))

    (whole_mm, whole_rad), (plane_mm, plane_rad) = over_field(camera), over_field(given)
    return MapDoubt(max(whole_mm - plane_mm, 0.0) ** 0.5, plane_mm**0.5, max(whole_rad - plane_rad, 0.0) ** 0.5,
                    plane_rad**0.5)


def longest_carry_mm(cell: Cell, cameras: Sequence[CameraMap]) -> float:
    """Belt travel from where a part is first seen to where it may last be gripped; 0 for a tray."""
    if cell.belt is None or cell.belt.window_mm is None or not cameras:
        return 0.0
    heading = np.radians(cell.belt.heading_deg)
    along = np.array([np.cos(heading), np.sin(heading)])
    first = min(float(np.nanmin(field_of(camera, cell.surface_mm).points_mm @ along)) for camera in cameras)
    return max(cell.belt.window_mm[1] - first, 0.0)
