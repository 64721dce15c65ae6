"""A taught part: outline and inner edges in its grip frame, at their heights. Kept as plain, versioned JSON."""

import json
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cameras.faults import InputFault, printable

FloatArray = NDArray[np.float64]
FORMAT = 1
MOST_BYTES = 8 * 1024 * 1024
MOST_POINTS = 4000
MOST_CONTOURS = 6


@dataclass(frozen=True)
class Contour:
    """Edge points of one height. Arrays are read-only.

    points_mm (n, 2) in the grip frame.  normals (n, 2): unit vectors across the edge, outward for the outline.
    steps (n,): grey levels gained along the normal when taught.  height_mm above the surface, known to
    height_sigma_mm.
    """

    points_mm: FloatArray
    normals: FloatArray
    steps: FloatArray
    height_mm: float
    height_sigma_mm: float

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for array in (self.points_mm, self.normals, self.steps):
            array.flags.writeable = False


@dataclass(frozen=True)
class Model:
    """What a part of one kind looks like, right side up. Millimetres, grip frame (the tool tip at the origin).

    outline_mm (k, 2): its plan as a polygon, counter-clockwise.  outline: points along it; their height is that where
    it faces away from the camera: there a wall's top is seen.  facing_height_mm, facing_sigma_mm: where it faces the
    camera, down to the wall's foot.  inner: edges inside the outline.  height_mm: of the top face.  away (2,): how far
    a point was seen displaced for each millimetre of height when taught.  yaw_rad: its yaw then.
    shift_mm (2,): how far, in the cell frame, light from one side makes its edges appear beside where they are.
    turns: how many yaws look alike, 0 for all.  proposed_turns: what the outline alone suggests.  side_told: whether
    up can be told from down.  mirrored_alike: whether the outline is its own mirror image.
    """

    part: str
    height_mm: float
    turns: int
    proposed_turns: int
    side_told: bool
    mirrored_alike: bool
    outline_mm: FloatArray
    outline: Contour
    facing_height_mm: float
    facing_sigma_mm: float
    away: FloatArray
    yaw_rad: float
    shift_mm: FloatArray
    inner: tuple[Contour, ...]

    def __post_init__(self) -> None:
        """Make the polygon read-only."""
        self.outline_mm.flags.writeable = False
        self.away.flags.writeable = False
        self.shift_mm.flags.writeable = False

    @property
    def radius_mm(self) -> float:
        """Distance of the outline's farthest point from the grip point."""
        return float(np.max(np.linalg.norm(self.outline_mm, axis=1)))

    def as_json(self) -> str:
        """The model as the text of its file."""
        document = {
            "format": FORMAT, "part": self.part, "height_mm": self.height_mm, "turns": self.turns,
            "proposed_turns": self.proposed_turns, "side_told": self.side_told, "mirrored_alike": self.mirrored_alike,
            "outline_mm": np.round(self.outline_mm, 3).tolist(), "shift_mm": np.round(self.shift_mm, 4).tolist(),
            "yaw_rad": round(self.yaw_rad, 5), "away": np.round(self.away, 5).tolist(),
            "facing_height_mm": round(self.facing_height_mm, 3), "facing_sigma_mm": round(self.facing_sigma_mm, 3),
            "outline": _packed(self.outline), "inner": [_packed(one) for one in self.inner],
        }  # fmt: skip
        return json.dumps(document, separators=(",", ":"), allow_nan=False) + "\n"


def _packed(contour: Contour) -> dict[str, Any]:
    table = np.column_stack([contour.points_mm, contour.normals, contour.steps])
    return {"height_mm": round(contour.height_mm, 3), "height_sigma_mm": round(contour.height_sigma_mm, 3),
            "x_y_nx_ny_step": np.round(table, 3).tolist()}


def load_model(path: str | Path) -> Model:
    """Read and check a model file. Raises InputFault for anything but a whole, finite, sensible model."""
    path = Path(path)
    try:
        if path.stat().st_size > MOST_BYTES:
            raise InputFault(path, "", "larger than 8 MB", "teach the part again")
        raw = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise InputFault(path, "", "no such file", "write it with `sanderling teach`") from None
    except (OSError, ValueError, RecursionError) as error:
        raise InputFault(path, "", f"not a JSON file ({printable(error)})", "teach the part again") from None
    return _Reader(path).model(raw)


class _Reader:
    """The parts of a model file, each checked as it is taken."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def fault(self, place: str, fault: str) -> InputFault:
        return InputFault(self.path, place, fault, "teach the part again")

    def model(self, raw: Any) -> Model:
        if not isinstance(raw, dict) or raw.get("format") != FORMAT:
            raise self.fault("format", f"not a taught part of format {FORMAT}")
        inner = raw.get("inner")
        if not isinstance(inner, list) or len(inner) > MOST_CONTOURS:
            raise self.fault("inner", f"not a list of up to {MOST_CONTOURS} contours")
        part = raw.get("part")
        if not isinstance(part, str) or not part or len(part) > 200:
            raise self.fault("part", "not a name")
        return Model(
            part=part,
            height_mm=self.number(raw, "height_mm", 0.0, 1000.0),
            turns=int(self.number(raw, "turns", 0, 360)),
            proposed_turns=int(self.number(raw, "proposed_turns", 0, 360)),
            side_told=self.flag(raw, "side_told"), mirrored_alike=self.flag(raw, "mirrored_alike"),
            outline_mm=self.table(raw, "outline_mm", "outline_mm", 2, 3),
            outline=self.contour(raw.get("outline"), "outline", 8),
            facing_height_mm=self.number(raw, "facing_height_mm", -1000.0, 1000.0),
            facing_sigma_mm=self.number(raw, "facing_sigma_mm", 0.0, 1000.0),
            shift_mm=self.table({"shift_mm": [raw.get("shift_mm")]}, "shift_mm", "shift_mm", 2, 1)[0],
            yaw_rad=self.number(raw, "yaw_rad", -1000.0, 1000.0),
            away=self.table({"away": [raw.get("away")]}, "away", "away", 2, 1)[0],
            inner=tuple(self.contour(one, f"inner[{k}]", 1) for k, one in enumerate(inner)),
        )  # fmt: skip

    def number(self, raw: dict[str, Any], key: str, least: float, most: float, place: str = "") -> float:
        value = raw.get(key)
        if isinstance(value, bool) or not isinstance(value, int | float) or not least <= value <= most:
            raise self.fault(place + key, f"not a number from {least:g} to {most:g}")
        return float(value)

    def flag(self, raw: dict[str, Any], key: str) -> bool:
        value = raw.get(key)
        if not isinstance(value, bool):
            raise self.fault(key, "neither true nor false")
        return value

    def table(self, raw: dict[str, Any], key: str, place: str, columns: int, least: int) -> FloatArray:
        rows = raw.get(key)
        if not isinstance(rows, list) or not least <= len(rows) <= MOST_POINTS:
            raise self.fault(place, f"not a list of {least} to {MOST_POINTS} rows")
        for row in rows:
            if not isinstance(row, list) or len(row) != columns or not all(_is_number(value) for value in row):
                raise self.fault(place, f"a row that is not {columns} finite numbers below 10 m")
        return np.array(rows, dtype=np.float64)

    def contour(self, raw: Any, place: str, least: int) -> Contour:
        if not isinstance(raw, dict):
            raise self.fault(place, "missing")
        table = self.table(raw, "x_y_nx_ny_step", f"{place}.x_y_nx_ny_step", 5, least)
        normals = table[:, 2:4].copy()
        lengths = np.linalg.norm(normals, axis=1)
        if np.any(np.abs(lengths - 1.0) > 0.01):
            raise self.fault(place, "normals that are not of length 1")
        return Contour(
            table[:, :2].copy(), normals / lengths[:, None], table[:, 4].copy(),
            self.number(raw, "height_mm", -1000.0, 1000.0, f"{place}."),
            self.number(raw, "height_sigma_mm", 0.0, 1000.0, f"{place}."),
        )  # fmt: skip


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value) \
        and abs(value) < 10_000.0  # fmt: skip
