"""The pose, kind and side of a thing from its sightings: what was known after each of them, outliers left out."""

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

OUTLIER_SIGMAS = 4.0  # a sighting further than this from the middle of its fellows is left out,
OUTLIER_MM = 0.3  # with this much more for what their sigmas do not tell
OUTLIER_RAD = math.radians(1.0)
UNRECOGNISED_VOTE = 0.5  # a sighting not recognised votes as much as one recognised with this score
MIDDLE_OF = 64  # the middle is the median of up to this many; beyond, the estimate before
PRIOR_PAIRS = 4.0  # weight, in sightings, of the belief that sigmas tell the scatter of sightings


@dataclass(frozen=True)
class Estimates:
    """What was known of its thing after each of n sightings, which are sorted by thing and then time.

    xy_mm (n, 2), yaw_rad (n,), kind (n,), side (n,): codes, score (n,).
    used (n,) bool: whether the sighting's place counts in its thing's last estimate; used_yaw: its yaw.
    """

    xy_mm: FloatArray
    yaw_rad: FloatArray
    kind: IntArray
    side: IntArray
    score: FloatArray
    used: NDArray[np.bool_]
    used_yaw: NDArray[np.bool_]


def estimate(start: IntArray, kind: IntArray, side: IntArray, xy_mm: FloatArray, yaw_rad: FloatArray,
             sigma_mm: FloatArray, sigma_rad: FloatArray, score: FloatArray, turns: IntArray) -> Estimates:
    """Running estimates over sightings; those of thing p are start[p] to start[p + 1].

    kind (n,): index to turns, 0 not recognised; side (n,): 0 not known, 1, 2. turns (kinds,): yaws that look alike, 0
    all. Kind and side are voted with the scores; the pose is the mean, weighted by 1 / sigma^2, of the sightings of
    that kind that lie near their median (place) or mean direction modulo the symmetry (yaw; Mardia, Jupp, Directional
    Statistics, 2000, section 2.2).
    """
    n = len(kind)
    made = Estimates(np.empty((n, 2)), np.empty(n), np.empty(n, np.int64), np.empty(n, np.int64), np.empty(n),
                     np.zeros(n, np.bool_), np.zeros(n, np.bool_))
    _run(start, kind, side, np.ascontiguousarray(xy_mm), yaw_rad, sigma_mm, sigma_rad, score, turns, made.xy_mm,
         made.yaw_rad, made.kind, made.side, made.score, made.used, made.used_yaw)
    return made


def merged_sigma(start: IntArray, residual: FloatArray, sigma: FloatArray, used: NDArray[np.bool_]) -> FloatArray:
    """(things,) predicted standard deviation of the mean of each thing's used sightings.

    residual (n, axes): sighting less estimate; sigma (n,). What sightings of one thing disagree by, over all things, is
    the share of the predicted variance that more sightings average out; the rest they have in common, and it stays.
    """
    thing = np.repeat(np.arange(len(start) - 1), np.diff(start))
    weight = np.where(used, 1 / sigma**2, 0.0)
    used_of = np.maximum(np.bincount(thing, used, len(start) - 1), 1.0)
    spare = residual.shape[1] * float((used_of - 1).sum())
    share = (float((weight[:, None] * residual**2).sum()) + PRIOR_PAIRS) / (spare + PRIOR_PAIRS)
    total = np.bincount(thing, weight, len(start) - 1)
    total = np.where(total > 0, total, np.minimum.reduceat(1 / sigma**2, start[:-1]) if len(thing) else total)
    return np.asarray(np.sqrt(share / total + max(1 - share, 0.0) * used_of / total))


@njit("float64(float64)", cache=True)
def _wrapped(angle: float) -> float:
    """The angle in [-pi, pi]."""
    return math.atan2(math.sin(angle), math.cos(angle))


@njit("UniTuple(float64, 2)(int64[::1], float64[:, ::1], float64[::1], float64, float64, boolean[::1])", cache=True)
def _place(chosen: IntArray, xy: FloatArray, sigma: FloatArray, x: float, y: float,
           used: NDArray[np.bool_]) -> tuple[float, float]:
    """Weighted mean of the chosen sightings that lie near (x, y); marks them as used."""
    weight, sum_x, sum_y = 0.0, 0.0, 0.0
    for i in chosen:
        far = math.hypot(xy[i, 0] - x, xy[i, 1] - y)
        used[i] = len(chosen) < 3 or far <= OUTLIER_SIGMAS * sigma[i] + OUTLIER_MM
        if used[i]:
            w = 1 / sigma[i] ** 2
            weight, sum_x, sum_y = weight + w, sum_x + w * (xy[i, 0] - x), sum_y + w * (xy[i, 1] - y)
    if weight == 0:
        return x, y
    return x + sum_x / weight, y + sum_y / weight


@njit("float64(int64[::1], float64[::1], float64[::1], int64, float64, boolean[::1])", cache=True)
def _direction(chosen: IntArray, yaw: FloatArray, sigma: FloatArray, turns: int, reference: float,
               used: NDArray[np.bool_]) -> float:
    """Weighted mean yaw modulo 2 pi / turns of the chosen sightings near their mean direction, nearest `reference`."""
    if turns == 0:
        return reference
    east, north = 0.0, 0.0
    for i in chosen:
        w = 1 / sigma[i] ** 2
        east, north = east + w * math.cos(turns * yaw[i]), north + w * math.sin(turns * yaw[i])
    middle, weight, total = math.atan2(north, east), 0.0, 0.0
    for i in chosen:
        off = _wrapped(turns * yaw[i] - middle)
        used[i] = len(chosen) < 3 or abs(off) <= turns * (OUTLIER_SIGMAS * sigma[i] + OUTLIER_RAD)
        if used[i]:
            w = 1 / sigma[i] ** 2
            weight, total = weight + w, total + w * off
    if weight > 0:
        middle += total / weight
    return reference + _wrapped(middle - turns * reference) / turns


@njit("float64(int64[::1], float64[::1], float64[::1])", cache=True)
def _mean(chosen: IntArray, values: FloatArray, sigma: FloatArray) -> float:
    """Mean of the chosen sightings' values, weighted by 1 / sigma^2."""
    weight, total = 0.0, 0.0
    for i in chosen:
        w = 1 / sigma[i] ** 2
        weight, total = weight + w, total + w * values[i]
    return total / weight


@njit("int64[::1](int64[::1], int64, int64, int64)", cache=True)
def _of_kind(kind: IntArray, best: int, first: int, last: int) -> IntArray:
    """The sightings from first to last that are of the kind `best`."""
    return first + np.flatnonzero(kind[first : last + 1] == best)


_SIGNATURE = ("void(int64[::1], int64[::1], int64[::1], float64[:, ::1], float64[::1], float64[::1], float64[::1], "
              "float64[::1], int64[::1], float64[:, ::1], float64[::1], int64[::1], int64[::1], float64[::1], "
              "boolean[::1], boolean[::1])")


@njit(_SIGNATURE, cache=True)
def _run(start: IntArray, kind: IntArray, side: IntArray, xy: FloatArray, yaw: FloatArray, sigma_mm: FloatArray,
         sigma_rad: FloatArray, score: FloatArray, turns: IntArray, out_xy: FloatArray, out_yaw: FloatArray,
         out_kind: IntArray, out_side: IntArray, out_score: FloatArray, used: NDArray[np.bool_],
         used_yaw: NDArray[np.bool_]) -> None:
    """`estimate`, into its outputs."""
    for p in range(len(start) - 1):
        votes, sides, best = np.zeros(len(turns)), np.zeros(3), -1
        for j in range(start[p], start[p + 1]):
            votes[kind[j]] += max(score[j], 1e-6) if kind[j] > 0 else UNRECOGNISED_VOTE
            if side[j] > 0:
                sides[side[j]] += max(score[j], 1e-6)
            before = best
            if best < 0 or votes[kind[j]] > votes[best]:
                best = kind[j]
            chosen = _of_kind(kind, best, start[p], j)
            x, y, reference = out_xy[j - 1, 0], out_xy[j - 1, 1], out_yaw[j - 1]
            if len(chosen) <= MIDDLE_OF or best != before:
                x, y = np.median(xy[chosen, 0]), np.median(xy[chosen, 1])
            if best != before:
                reference = yaw[chosen[0]]
            out_kind[j], out_side[j], out_score[j] = best, np.argmax(sides), _mean(chosen, score, sigma_mm)
            out_xy[j] = _place(chosen, xy, sigma_mm, x, y, used)
            out_yaw[j] = _direction(chosen, yaw, sigma_rad, turns[best], reference, used_yaw)
        for i in range(start[p], start[p + 1]):
            if kind[i] != best:
                used[i] = used_yaw[i] = False
