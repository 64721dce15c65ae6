"""The belt between frames: recorded counts as one smooth motion."""

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pipeline.cell import BeltCell

FloatArray = NDArray[np.float64]

SMOOTHED_S = 0.04  # counts are averaged over this time, so that what follows the belt sees no step in acceleration
SPEED_KNOWN_FROM_S = 0.25  # a controller reads the belt's speed off the latest frames that span this time


class BeltState(NamedTuple):
    """What a controller knows of the belt: travel in mm since counts 0, speed in mm/s."""

    travel_mm: float
    speed_mm_s: float


class Belt:
    """Travel, speed and acceleration of the belt at any time.

    P(t) is the monotone cubic through the recorded counts (Fritsch, Carlson, SIAM J. Numer. Anal. 17, 1980; slopes by
    the harmonic mean of Fritsch, Butland, SIAM J. Sci. Stat. Comput. 5, 1984), with straight ends at the speeds of the
    first and last interval. The travel is P averaged over a short window w,

        p(t) = 1/w * integral of P from t - w/2 to t + w/2,

    which is monotone wherever P is, and has a continuous acceleration p'' = (P'(t + w/2) - P'(t - w/2)) / w. Between
    the times at which either end of the window passes a frame p is a quartic, held by its coefficients, so that travel,
    speed and acceleration are one polynomial and its derivatives.

    times_s (n,) rising, counts (n,) unwrapped. cell None: a still tray, all zero. w is SMOOTHED_S, or the median time
    between frames where that is less. Piece k runs from starts_s[k] (m,) to the next start; there the travel is the sum
    of coefficients[i, k] * (t - starts_s[k])**i (5, m). The first piece reaches back and the last on without end.
    """

    def __init__(self, times_s: ArrayLike, counts: ArrayLike, cell: BeltCell | None) -> None:
        self.times_s = np.array(times_s, dtype=float)
        per_count = cell.mm_per_count if cell else 0.0
        angle = np.radians(cell.heading_deg) if cell else 0.0
        self.moving = cell is not None
        self.heading: FloatArray = np.array([np.cos(angle), np.sin(angle)])
        self.recorded_mm: FloatArray = np.array(counts, dtype=float) * per_count
        still = len(self.times_s) < 2 or not self.moving
        gaps = np.ones(1) if still else np.diff(self.times_s)
        self.speeds_mm_s: FloatArray = np.zeros(1) if still else np.diff(self.recorded_mm) / gaps
        self.smoothed_s = min(SMOOTHED_S, float(np.median(gaps)))
        knots = self.times_s[:1] if still else self.times_s
        at_mm = self.recorded_mm[:1] if still else self.recorded_mm
        self.starts_s, self.coefficients = _averaged(knots, at_mm, self.speeds_mm_s, self.smoothed_s)

    @property
    def fastest_mm_s(self) -> float:
        """The speed that all but a twentieth of the recorded intervals keep below."""
        return float(np.percentile(np.abs(self.speeds_mm_s), 95.0))

    def travel_mm(self, t: ArrayLike) -> FloatArray:
        """Mm along the heading since counts 0, at times t of any shape."""
        s, (c0, c1, c2, c3, c4) = self._at(t)
        return np.asarray(c0 + s * (c1 + s * (c2 + s * (c3 + s * c4))))

    def speed_mm_s(self, t: ArrayLike) -> FloatArray:
        """Time derivative of `travel_mm`."""
        s, (_, c1, c2, c3, c4) = self._at(t)
        return np.asarray(c1 + s * (2 * c2 + s * (3 * c3 + s * 4 * c4)))

    def accel_mm_s2(self, t: ArrayLike) -> FloatArray:
        """Time derivative of `speed_mm_s`."""
        s, (_, _, c2, c3, c4) = self._at(t)
        return np.asarray(2 * c2 + s * (6 * c3 + s * 12 * c4))

    def shift_mm(self, t: ArrayLike) -> FloatArray:
        """(..., 2): how far a thing on the belt has moved since counts 0, in the cell frame, at times t (...)."""
        return self.travel_mm(t)[..., None] * self.heading

    def when(self, travel_mm: float) -> float:
        """The first time, within 1e-9 s, at which the travel has reached travel_mm; inf where it never does."""
        piece = int(np.searchsorted(np.maximum.accumulate(self.coefficients[0]), travel_mm, side="left"))
        if piece == 0 or piece == len(self.starts_s):  # on one of the straight ends
            start, at, speed = self.starts_s[max(piece - 1, 0)], *self.coefficients[:2, max(piece - 1, 0)]
            ahead = travel_mm - at
            return float(start + ahead / speed) if speed > 0 else float(np.inf if ahead > 0 else start)
        start = float(self.starts_s[piece - 1])
        low, high = 0.0, float(self.starts_s[piece]) - start  # since start: far from 0 a clock has no 1e-9 s
        c0, c1, c2, c3, c4 = self.coefficients[:, piece - 1].tolist()
        while high - low > 1e-9:
            s = 0.5 * (low + high)
            if c0 + s * (c1 + s * (c2 + s * (c3 + s * c4))) >= travel_mm:
                high = s
            else:
                low = s
        return start + high

    def known_at(self, t: float) -> BeltState:
        """What a controller knows at time t, with no look ahead in its speed.

        The travel is the encoder's now. The speed is the mean over the latest frames up to t that span
        SPEED_KNOWN_FROM_S (two frames at least); up to the second frame it is the speed the recording starts with.
        """
        if len(self.times_s) < 2 or not self.moving:
            return BeltState(float(self.travel_mm(t)), 0.0)
        last = max(int(np.searchsorted(self.times_s, t, side="right")) - 1, 1)
        first = int(np.searchsorted(self.times_s, self.times_s[last] - SPEED_KNOWN_FROM_S, side="right")) - 1
        first = min(max(first, 0), last - 1)
        way_mm = self.recorded_mm[last] - self.recorded_mm[first]
        return BeltState(float(self.travel_mm(t)), float(way_mm / (self.times_s[last] - self.times_s[first])))

    def _at(self, t: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Time since the start of its piece, and that piece's five coefficients, for each of the times."""
        t = np.asarray(t, dtype=float)
        piece = np.searchsorted(self.starts_s, t, side="right") - 1
        piece = np.maximum(piece, 0)
        return t - self.starts_s[piece], self.coefficients[:, piece]


def monotone_slopes(knots: FloatArray, values: FloatArray) -> FloatArray:
    """Slopes (n,) of the monotone cubic through values (n,) at knots (n,); at both ends that of the end interval.

    Fritsch and Butland (1984), eq. 5: the weighted harmonic mean of both neighbouring secants, 0 where they disagree.
    """
    gaps, secants = np.diff(knots), np.diff(values) / np.diff(knots)
    before, after = secants[:-1], secants[1:]
    weight_before, weight_after = 2 * gaps[1:] + gaps[:-1], gaps[1:] + 2 * gaps[:-1]
    agree = before * after > 0
    mean = np.zeros(len(before))
    total = (weight_before + weight_after)[agree]
    mean[agree] = total / (weight_before[agree] / before[agree] + weight_after[agree] / after[agree])
    return np.concatenate([secants[:1], mean, secants[-1:]])


def _averaged(
    knots: FloatArray, values: FloatArray, speeds: FloatArray, window: float
) -> tuple[FloatArray, FloatArray]:
    """Starts (m,) and coefficients (5, m) of the quartic pieces of the averaged curve."""
    cubic_starts, cubics = _cubic_pieces(knots, values, speeds)
    half = window / 2
    starts = np.sort(np.concatenate([knots[:1] - half - 1.0, knots - half, knots + half]))
    middle = np.append((starts[:-1] + starts[1:]) / 2, starts[-1] + 1.0)
    ahead = _derivatives(cubic_starts, cubics, starts + half, middle + half)
    behind = _derivatives(cubic_starts, cubics, starts - half, middle - half)
    slope = (ahead - behind) / window  # value and three derivatives of p', at each start
    coefficients = np.vstack([np.zeros(len(starts)), slope / np.array([1.0, 2.0, 6.0, 24.0])[:, None]])
    length = np.diff(starts)
    ways = length * _horner(coefficients[1:, :-1], length)
    coefficients[0] = np.cumsum(np.concatenate([values[:1] - speeds[0] * (half + 1.0), ways]))
    return starts, coefficients


def _cubic_pieces(knots: FloatArray, values: FloatArray, speeds: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Starts (n+1,) and coefficients (4, n+1) of P: a straight lead-in, the cubics, a straight lead-out."""
    if len(knots) == 1:
        return knots, np.array([values, [0.0], [0.0], [0.0]])
    gaps, slopes = np.diff(knots), monotone_slopes(knots, values)
    c2 = (3 * speeds - 2 * slopes[:-1] - slopes[1:]) / gaps
    c3 = (slopes[:-1] + slopes[1:] - 2 * speeds) / gaps**2
    inner = np.array([values[:-1], slopes[:-1], c2, c3])
    lead_in = np.array([[values[0] - speeds[0]], [speeds[0]], [0.0], [0.0]])
    lead_out = np.array([values[-1:], speeds[-1:], [0.0], [0.0]])
    return np.concatenate([knots[:1] - 1.0, knots]), np.hstack([lead_in, inner, lead_out])


def _derivatives(starts: FloatArray, cubics: FloatArray, t: FloatArray, inside: FloatArray) -> FloatArray:
    """(4, m): value and three derivatives at t (m,) of the cubic that holds at the times `inside` (m,)."""
    piece = np.maximum(np.searchsorted(starts, inside, side="right") - 1, 0)
    s, (c0, c1, c2, c3) = t - starts[piece], cubics[:, piece]
    return np.array([c0 + s * (c1 + s * (c2 + s * c3)), c1 + s * (2 * c2 + 3 * s * c3), 2 * c2 + 6 * s * c3, 6 * c3])


def _horner(coefficients: FloatArray, s: FloatArray) -> FloatArray:
    c1, c2, c3, c4 = coefficients
    return np.asarray(c1 + s * (c2 + s * (c3 + s * c4)))
