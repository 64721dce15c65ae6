"""The belt's heading and scale from marks touched at several places along it."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.columns import read_columns
from cameras.faults import InputFault, printable

FloatArray = NDArray[np.float64]
_COUNT_SIGMA = 12**-0.5  # a counter is right to half a count either way


@dataclass(frozen=True)
class BeltMarks:
    """n touches of marks. line (n,): rows of the file; mark (n,): 0.. for each mark; counts (n,): unwrapped.

    points (n, 2): where it was touched, mm.
    """

    line: NDArray[np.int64]
    mark: NDArray[np.int64]
    counts: FloatArray
    points: FloatArray
    names: tuple[str, ...]


@dataclass(frozen=True)
class BeltScale:
    """Heading and mm per count with their standard errors.

    along_mm, across_mm (n,): residuals of the touches along and across the heading.
    """

    heading_rad: float
    mm_per_count: float
    heading_error_rad: float
    mm_per_count_error: float
    along_mm: FloatArray
    across_mm: FloatArray
    freedom: int

    @property
    def heading_deg(self) -> float:
        """The heading in degrees, in [0, 360)."""
        return float(np.degrees(self.heading_rad) % 360.0)


def read_marks(path: str | Path, counts_modulus: int | None = None) -> BeltMarks:
    """Read a file of belt touches; each mark's counts are unwrapped in the order of its rows.

    Raises InputFault for a file that will not do.
    """
    path = Path(path)
    table = read_columns(path, {"mark": str, "counts": int, "x_mm": float, "y_mm": float})
    names, mark = np.unique(table["mark"], return_inverse=True)
    counts = table["counts"].astype(np.float64)
    for number, name in enumerate(names):
        rows = np.flatnonzero(mark == number)
        if len(rows) < 2:
            raise InputFault(path, f"line {table['line'][rows[0]]}", f"mark {printable(name)!r} is touched once",
                             "touch each mark at two places or more")
        steps = np.diff(counts[rows])
        if counts_modulus:
            steps = (steps + counts_modulus / 2) % counts_modulus - counts_modulus / 2
            counts[rows] = counts[rows[0]] + np.concatenate([[0.0], np.cumsum(steps)])
    points = np.column_stack([table["x_mm"], table["y_mm"]]).astype(np.float64)
    return BeltMarks(table["line"].astype(np.int64), mark.astype(np.int64), counts, points, tuple(map(str, names)))


def fit_belt(marks: BeltMarks) -> BeltScale:
    """Heading and scale by total least squares: one direction through the middles of all marks in (counts, x, y).

    Golub and Van Loan (1980): counts and positions both carry errors, so distances are taken across the line, with
    counts scaled until their error is as large as that of x and y.
    """
    count = np.bincount(marks.mark).astype(np.float64)
    steps = marks.counts - (np.bincount(marks.mark, marks.counts) / count)[marks.mark]
    middle = np.column_stack([np.bincount(marks.mark, values) / count for values in marks.points.T])
    moved = marks.points - middle[marks.mark]
    freedom = 2 * len(steps) - 2 * len(count) - 2
    per_count = steps @ moved / (steps @ steps)
    sigma = 0.0
    for _ in range(3):
        sigma = max(float(np.sqrt(((moved - steps[:, None] * per_count) ** 2).sum() / max(freedom, 1))), 1e-6)
        scaled = np.column_stack([steps * (sigma / _COUNT_SIGMA), moved])
        first = np.linalg.svd(scaled, full_matrices=False)[2][0]
        per_count = first[1:] / first[0] * (sigma / _COUNT_SIGMA)
    scale = float(np.linalg.norm(per_count))
    along = per_count / scale
    off = moved - steps[:, None] * per_count
    error = sigma / float(np.sqrt(steps @ steps))
    return BeltScale(float(np.arctan2(along[1], along[0])), scale, error / scale, error, off @ along,
                     off @ np.array([-along[1], along[0]]), freedom)
