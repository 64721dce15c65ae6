"""The error budget: what lens, plane map, belt, time stamp and finding each put a part off at the gripper."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from cameras.camera import CameraMap, load_camera
from cameras.confidence import PER_SIGMA_95, radius_95
from cameras.faults import InputFault
from cameras.field import field_of
from cameras.sightings import Sightings
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
    """One source of error at the gripper: standard deviations along and across the belt, and of yaw.

    given: whether anything is known of it; what is not is counted as nothing.
    """

    source: str
    along_mm: float
    across_mm: float
    yaw_rad: float = 0.0
    given: bool = True

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
    """What each source adds for one kind of part, their sum, and what its grip tolerates (None: not said).

    round: the yaw of the part means nothing.
    """

    part: str
    lines: tuple[BudgetLine, ...]
    tolerance_mm: float | None = None
    tolerance_deg: float | None = None
    round: bool = False

    @property
    def total(self) -> BudgetLine:
        """All sources together; they are independent, so variances add."""
        along, across, yaw = (float(np.sqrt(sum(getattr(line, name) ** 2 for line in self.lines)))
                              for name in ("along_mm", "across_mm", "yaw_rad"))
        return BudgetLine("sum", along, across, yaw)

    @property
    def missing(self) -> tuple[str, ...]:
        """Sources that nothing is known of."""
        return tuple(line.source for line in self.lines if not line.given)

    @property
    def told(self) -> bool:
        """Whether anything is said of what the grip tolerates."""
        return self.tolerance_mm is not None or (self.tolerance_deg is not None and not self.round)

    @property
    def met(self) -> bool:
        """Whether 95 % of the grips keep within what is tolerated."""
        total = self.total
        return ((self.tolerance_mm is None or total.within_mm <= self.tolerance_mm)
                and (self.tolerance_deg is None or self.round or total.within_deg <= self.tolerance_deg))

    def rows(self) -> list[tuple[str, str, str]]:
        """The table: source, 95 % of mm, 95 % of degrees; then the sum and what is tolerated."""
        shown = [(line.source, f"{line.within_mm:.3f}", self._deg(line.within_deg)) if line.given
                 else (line.source, "not given", "") for line in (*self.lines, self.total)]  # fmt: skip
        if self.told:
            mm = "" if self.tolerance_mm is None else f"{self.tolerance_mm:.3f}"
            shown.append(("tolerated", mm, "" if self.tolerance_deg is None else self._deg(self.tolerance_deg)))
        return shown

    def _deg(self, value: float) -> str:
        return "-" if self.round else f"{value:.3f}"

    def document(self) -> dict[str, Any]:
        """The budget as a JSON object; null: not given, or without meaning. met is null where nothing is tolerated."""
        def within(line: BudgetLine) -> dict[str, Any]:
            return {"source": line.source, "within_mm": round(line.within_mm, 4) if line.given else None,
                    "within_deg": round(line.within_deg, 4) if line.given and not self.round else None}

        return {"lines": [within(line) for line in self.lines], "sum": within(self.total),
                "tolerance_mm": self.tolerance_mm, "tolerance_deg": self.tolerance_deg,
                "met": self.met if self.told else None}


def error_budget(
    part: str,
    doubt: MapDoubt,
    *,
    finding_mm: float | None,
    finding_rad: float = 0.0,
    carry_mm: float = 0.0,
    scale_error: float | None = None,
    heading_error_rad: float | None = None,
    speed_mm_s: float | None = None,
    time_error_s: float | None = None,
    tolerance_mm: float | None = None,
    tolerance_deg: float | None = None,
    round_part: bool = False,
) -> ErrorBudget:
    """The budget of one kind of part. All errors are standard deviations and taken as independent and Gaussian;
    None: not known.

    finding: of one coordinate and of yaw, as the finder foretells them.  carry_mm: belt travel from image to gripper.
    scale_error: of mm per count, as a share of it.  speed_mm_s, time_error_s: of the belt, of an image's time stamp.
    """
    known = time_error_s is not None and speed_mm_s is not None
    lines = [
        BudgetLine("lens", doubt.lens_mm, doubt.lens_mm, doubt.lens_rad),
        BudgetLine("plane map", doubt.plane_mm, doubt.plane_mm, doubt.plane_rad),
        BudgetLine(f"belt scale over {carry_mm:.0f} mm", (scale_error or 0.0) * carry_mm, 0.0,
                   given=scale_error is not None),
        BudgetLine(f"heading over {carry_mm:.0f} mm", 0.0, (heading_error_rad or 0.0) * carry_mm,
                   given=heading_error_rad is not None),
        BudgetLine("time stamp" + (f" at {speed_mm_s:.0f} mm/s" if speed_mm_s is not None else ""),
                   (time_error_s or 0.0) * (speed_mm_s or 0.0), 0.0, given=known),
        BudgetLine("finding", finding_mm or 0.0, finding_mm or 0.0, finding_rad, given=finding_mm is not None),
    ]  # fmt: skip
    return ErrorBudget(part, tuple(lines), tolerance_mm, tolerance_deg, round_part)


def budgets_of(cell: Cell, cameras: Mapping[str, CameraMap], seen: Sightings | None = None,
               speed_mm_s: float | None = None) -> list[ErrorBudget]:
    """A budget for each kind of part that was seen, or for all where nothing has been seen yet; none without a map.

    Of several cameras that counts which is least sure. speed_mm_s: the belt's, at its fastest.
    """
    belt, made = cell.belt, []
    carry_mm = longest_carry_mm(cell, list(cameras.values()))
    stamps = [one for one in (cell.camera(name).time_error_s for name in cameras) if one is not None]
    scale = heading = None
    if belt is not None and belt.mm_per_count_error is not None:
        scale = belt.mm_per_count_error / abs(belt.mm_per_count)
    if belt is not None and belt.heading_error_deg is not None:
        heading = float(np.radians(belt.heading_error_deg))
    for kind, part in cell.parts.items():
        own = np.zeros(0, bool) if seen is None else seen.kind == kind
        if not cameras or (seen is not None and not own.any()):
            continue
        doubts = [map_doubt(camera, cell.surface_mm + part.height_mm) for camera in cameras.values()]
        budget = error_budget(
            kind, max(doubts, key=lambda one: np.hypot(one.lens_mm, one.plane_mm)),
            finding_mm=None if seen is None else float(np.median(seen.sigma_mm[own])),
            finding_rad=0.0 if seen is None else float(np.median(seen.sigma_rad[own])),
            carry_mm=carry_mm, scale_error=scale, heading_error_rad=heading,
            speed_mm_s=speed_mm_s, time_error_s=max(stamps) if stamps else None, tolerance_mm=part.grip_tolerance_mm,
            tolerance_deg=part.grip_tolerance_deg, round_part=part.turns == 0,
        )  # fmt: skip
        made.append(budget if belt else replace(budget, lines=(*budget.lines[:2], budget.lines[-1])))
    return made


def maps_at_hand(cell: Cell, names: Iterable[str]) -> dict[str, CameraMap]:
    """The maps of those of the cameras whose calibration can be read; "" is the first one."""
    found = {}
    for name in names:
        try:
            named = cell.camera(name).calibration
            if named is not None:
                found[name] = load_camera(cell.beside(named))
        except InputFault:
            continue
    return found


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
