"""Touches: marks seen at a pixel and touched with the tool tip, as points of the moment of the image."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.columns import read_columns
from cameras.faults import InputFault, printable

FloatArray = NDArray[np.float64]
_COLUMNS = {"u_px": float, "v_px": float, "counts": int, "x_mm": float, "y_mm": float, "z_mm": float,
            "touch_counts": int}  # fmt: skip
_FARTHEST = 1e6  # px, mm: beyond it a number is a slip of the pen


@dataclass(frozen=True)
class Carriage:
    """What moves the marks between image and touch: millimetres a count, along `heading_rad` in the cell frame."""

    heading_rad: float
    mm_per_count: float
    counts_modulus: int | None = None

    def travel_mm(self, seen: NDArray[np.int64], touched: NDArray[np.int64]) -> FloatArray:
        """(n,) how far the belt ran from the image to the touch; forward where the counter rolls over."""
        steps = touched - seen
        if self.counts_modulus:
            steps = steps % self.counts_modulus if self.mm_per_count > 0 else -(-steps % self.counts_modulus)
        return np.asarray(steps * self.mm_per_count, dtype=np.float64)


@dataclass(frozen=True)
class Touches:
    """n marks. line (n,): rows of the file.  pixels (n, 2): where each was seen.

    points (n, 3): where it was in the cell frame at that moment, mm.  travel_mm (n,): how far it was carried from
    there until it was touched.
    """

    line: NDArray[np.int64]
    pixels: FloatArray
    points: FloatArray
    travel_mm: FloatArray


def read_touches(
    path: str | Path, belt: Carriage | None = None, camera: str = "", image_size_px: tuple[int, int] | None = None
) -> Touches:
    """Read a touches file; with `camera` only the rows of that camera, where the file has such a column.

    Raises InputFault for a file that will not do, pixels outside the image where its size is given, and touches after
    the belt moved where there is no belt.
    """
    path = Path(path)
    table = read_columns(path, _COLUMNS, {"camera": str})
    kept = np.ones(len(table["line"]), dtype=bool)
    if "camera" in table:
        names = sorted(set(map(str, table["camera"])))
        if not camera and len(names) > 1:
            raise InputFault(path, "camera", f"touches of {len(names)} cameras", "say whose with --camera")
        kept = table["camera"] == (camera or names[0]) if names else kept
        if not kept.any():
            raise InputFault(path, "camera", f"no touch of camera {printable(camera)!r}", "name another with --camera")
    line, seen, touched = (table[name][kept].astype(np.int64) for name in ("line", "counts", "touch_counts"))
    numbers = {name: table[name][kept].astype(np.float64) for name, kind in _COLUMNS.items() if kind is float}
    for name, values in numbers.items():
        if (np.abs(values) > _FARTHEST).any():
            at = int(np.argmax(np.abs(values) > _FARTHEST))
            raise InputFault(path, f"line {line[at]}, {name}", f"{values[at]:g} is out of all bounds", "correct it")
    pixels = np.column_stack([numbers["u_px"], numbers["v_px"]])
    if image_size_px is not None:
        outside = ((pixels < -0.5) | (pixels > np.array(image_size_px) - 0.5)).any(axis=1)
        if outside.any():
            at, (width, height) = int(np.argmax(outside)), image_size_px
            raise InputFault(path, f"line {line[at]}", f"the pixel lies outside an image of {width} x {height}",
                             "correct it, or give the lens file of this camera")
    points = np.column_stack([numbers["x_mm"], numbers["y_mm"], numbers["z_mm"]])
    travel = np.zeros(len(line))
    if belt is not None:
        travel = belt.travel_mm(seen, touched)
        points[:, 0] -= travel * np.cos(belt.heading_rad)
        points[:, 1] -= travel * np.sin(belt.heading_rad)
    elif (seen != touched).any():
        at = int(np.argmax(seen != touched))
        raise InputFault(path, f"line {line[at]}, touch_counts", "differs from counts, but the cell has no belt",
                         "add [belt] to the cell, or make them equal")
    return Touches(line, pixels, points, travel)
