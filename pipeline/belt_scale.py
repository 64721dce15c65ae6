"""The belt's heading and scale from marks touched at several places along it."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.columns import read_columns
from cameras.confidence import radius_95
from cameras.faults import InputFault, printable

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
_COUNT_SIGMA = 12**-0.5  # a counter is right to half a count either way
_GATE = 5.0  # standard deviations of the other touches
_MOST_LEFT_OUT = 0.2  # of the touches
_FLOOR_MM = 1e-6


@dataclass(frozen=True)
class BeltMarks:
    """n touches of marks.

    line (n,): rows of the file; mark (n,): 0.. for each mark; counts (n,): unwrapped; points (n, 2): touched, mm.
    """

    line: NDArray[np.int64]
    mark: NDArray[np.int64]
    counts: FloatArray
    points: FloatArray


@dataclass(frozen=True)
class BeltScale:
    """The way the belt runs and mm per count (negative where the counter falls), with their standard errors.

    along_mm, across_mm (n,): residuals of the touches along and to the left of the heading; kept (n,): False for one
    left out as bad.  sigma_mm: standard deviation of one coordinate of a touch.  freedom: degrees of freedom.
    longest_mm: the farthest that any mark was followed.
    """

    heading_rad: float
    mm_per_count: float
    heading_error_rad: float
    mm_per_count_error: float
    along_mm: FloatArray
    across_mm: FloatArray
    kept: BoolArray
    sigma_mm: float
    freedom: int
    longest_mm: float

    @property
    def heading_deg(self) -> float:
        """The heading in degrees, in [0, 360)."""
        return float(np.degrees(self.heading_rad) % 360.0)

    def drift_95_mm(self, carry_mm: float) -> float:
        """What scale and heading put a part off, 95 %, once the belt has carried it so far."""
        along, across = self.mm_per_count_error / self.mm_per_count * carry_mm, self.heading_error_rad * carry_mm
        return float(radius_95(np.diag([along**2, across**2]), self.freedom))


def read_marks(path: str | Path, counts_modulus: int | None = None) -> BeltMarks:
    """Read a file of belt touches; a mark's counts are unwrapped in the order of its rows, by the shortest steps.

    So a counter that rolls over must not run on by half its modulus from one touch of a mark to the next.
    Raises InputFault for a file that will not do.
    """
    path = Path(path)
    table = read_columns(path, {"mark": str, "counts": int, "x_mm": float, "y_mm": float})
    if len(table["line"]) == 0:
        raise InputFault(path, "", "no touches", "touch marks at several places along the belt")
    names, mark = np.unique(table["mark"], return_inverse=True)
    counts = table["counts"].astype(np.float64)
    for number, name in enumerate(names):
        rows = np.flatnonzero(mark == number)
        if len(rows) < 2:
            raise InputFault(path, f"line {table['line'][rows[0]]}", f"mark {printable(name)!r} is touched once",
                             "touch each mark at two places or more")
        if counts_modulus:
            steps = (np.diff(counts[rows]) + counts_modulus / 2) % counts_modulus - counts_modulus / 2
            counts[rows[1:]] = counts[rows[0]] + np.cumsum(steps)
    points = np.column_stack([table["x_mm"], table["y_mm"]]).astype(np.float64)
    return BeltMarks(table["line"].astype(np.int64), mark.astype(np.int64), counts, points)


def fit_belt(marks: BeltMarks, file: str | Path = "touches") -> BeltScale:
    """Heading and scale by total least squares over all marks, a few bad touches left out.

    Raises InputFault, naming `file`, for touches that determine no line or lie on none.
    """
    kept = np.ones(len(marks.mark), dtype=bool)
    found = _fitted(marks, kept, file)
    while (~kept).sum() < int(_MOST_LEFT_OUT * len(kept)):
        worst = int(np.argmax(np.where(kept, np.hypot(found.along_mm, found.across_mm), 0.0)))
        without = kept.copy()
        without[worst] = False
        if found.freedom <= 3 or (np.bincount(marks.mark[without], minlength=marks.mark.max() + 1) < 2).any():
            break
        better = _fitted(marks, without, file)
        if np.hypot(better.along_mm[worst], better.across_mm[worst]) <= _GATE * better.sigma_mm:
            break
        found, kept = better, without
    if found.sigma_mm > 0.05 * found.longest_mm:
        raise InputFault(file, "", f"the marks lie {found.sigma_mm:.1f} mm off any one heading and scale",
                         "check counts, their modulus, and which touch is of which mark")
    return found


def _fitted(marks: BeltMarks, kept: BoolArray, file: str | Path) -> BeltScale:
    """One direction through the middles of all marks in (counts, x, y), by total least squares.

    Golub and Van Loan (1980): counts and positions both carry errors, so distances are taken across the line, with
    counts scaled until their error is as large as that of x and y.
    """
    many = np.bincount(marks.mark[kept]).astype(np.float64)
    middle = np.column_stack([np.bincount(marks.mark[kept], values[kept]) / many
                              for values in (marks.counts, *marks.points.T)])[marks.mark]
    steps, moved = marks.counts - middle[:, 0], marks.points - middle[:, 1:]
    freedom = 2 * int(kept.sum()) - 2 * len(many) - 2
    squares = float(steps[kept] @ steps[kept])
    if freedom < 1 or squares == 0:
        raise InputFault(file, "", "too few touches along the belt",
                         "touch two marks or more, each at 3 places or more")
    per_count = steps[kept] @ moved[kept] / squares
    for _ in range(3):
        off = moved - steps[:, None] * per_count
        sigma = max(float(np.sqrt((off[kept] ** 2).sum() / freedom)), _FLOOR_MM)
        size = sigma / _COUNT_SIGMA
        first = np.linalg.svd(np.column_stack([size * steps, moved])[kept], full_matrices=False)[2][0]
        per_count = size * first[1:] / first[0]
    # touches of a mark stand in the order they were made, so that the belt ran from the first to the last
    rising = sum(np.sign(np.diff(marks.counts[marks.mark == k])).sum() for k in range(len(many))) >= 0
    scale = float(np.linalg.norm(per_count)) * (1.0 if rising else -1.0)
    along = per_count / scale
    off = (moved - steps[:, None] * per_count) @ np.array([along, [-along[1], along[0]]]).T
    # a touch left out counts for no middle, so its residual is that of a forecast
    error = sigma / np.sqrt(squares)
    longest = abs(scale) * max(float(np.ptp(steps[kept & (marks.mark == k)])) for k in range(len(many)))
    heading = float(np.arctan2(along[1], along[0]))
    return BeltScale(heading, scale, error / abs(scale), error, off[:, 0], off[:, 1], kept, sigma, freedom, longest)
