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
MIDDLE_OF = 64  # the middle is that of up to this many; every further one is held against the estimate before it
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


@njit("UniTuple(float64, 3)(int64[::1], float64[:, ::1], float64[::1], boolean[::1])", cache=True)
def _place(chosen: IntArray, xy: FloatArray, sigma: FloatArray, used: NDArray[np.bool_]) -> tuple[float, float, float]:
    """Weighted mean and weight of the chosen sightings that lie near their median; marks them as used."""
    x, y = np.median(xy[chosen, 0]), np.median(xy[chosen, 1])
    weight, sum_x, sum_y = 0.0, 0.0, 0.0
    for i in chosen:
        far = math.hypot(xy[i, 0] - x, xy[i, 1] - y)
        used[i] = len(chosen) < 3 or far <= OUTLIER_SIGMAS * sigma[i] + OUTLIER_MM
        if used[i]:
            w = 1 / sigma[i] ** 2
            weight, sum_x, sum_y = weight + w, sum_x + w * (xy[i, 0] - x), sum_y + w * (xy[i, 1] - y)
    if weight == 0:
        return x, y, 0.0
    return x + sum_x / weight, y + sum_y / weight, weight


@njit("UniTuple(float64, 2)(int64[::1], float64[::1], float64[::1], int64, float64, boolean[::1])", cache=True)
def _direction(chosen: IntArray, yaw: FloatArray, sigma: FloatArray, turns: int, reference: float,
               used: NDArray[np.bool_]) -> tuple[float, float]:
    """Weighted mean yaw, and weight, of the chosen sightings near their mean direction; the yaw nearest `reference`."""
    if turns == 0:
        return reference, 0.0
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
    return reference + _wrapped(middle - turns * reference) / turns, weight


@njit("UniTuple(float64, 2)(int64[::1], float64[::1], float64[::1])", cache=True)
def _mean(chosen: IntArray, values: FloatArray, sigma: FloatArray) -> tuple[float, float]:
    """Mean of the chosen sightings' values, weighted by 1 / sigma^2, and the weight."""
    weight, total = 0.0, 0.0
    for i in chosen:
        w = 1 / sigma[i] ** 2
        weight, total = weight + w, total + w * values[i]
    return total / weight, weight


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
        votes, many, sides, best = np.zeros(len(turns)), np.zeros(len(turns), np.int64), np.zeros(3), -1
        x = y = turned = mean = weight = weight_yaw = weight_all = 0.0
        for j in range(start[p], start[p + 1]):
            votes[kind[j]] += max(score[j], 1e-6) if kind[j] > 0 else UNRECOGNISED_VOTE
            many[kind[j]] += 1
            if side[j] > 0:
                sides[side[j]] += max(score[j], 1e-6)
            before = best
            if best < 0 or votes[kind[j]] > votes[best]:
                best = kind[j]
            if best != before or many[best] <= MIDDLE_OF:
                chosen = start[p] + np.flatnonzero(kind[start[p] : j + 1] == best)
                turned = turned if best == before else yaw[chosen[0]]
                x, y, weight = _place(chosen, xy, sigma_mm, used)
                turned, weight_yaw = _direction(chosen, yaw, sigma_rad, turns[best], turned, used_yaw)
                mean, weight_all = _mean(chosen, score, sigma_mm)
            elif kind[j] == best:
                w = 1 / sigma_mm[j] ** 2
                weight_all += w
                mean += w / weight_all * (score[j] - mean)
                used[j] = math.hypot(xy[j, 0] - x, xy[j, 1] - y) <= OUTLIER_SIGMAS * sigma_mm[j] + OUTLIER_MM
                if used[j]:
                    weight += w
                    x, y = x + w / weight * (xy[j, 0] - x), y + w / weight * (xy[j, 1] - y)
                off = _wrapped(turns[best] * (yaw[j] - turned)) / max(turns[best], 1)
                used_yaw[j] = turns[best] > 0 and abs(off) <= OUTLIER_SIGMAS * sigma_rad[j] + OUTLIER_RAD
                if used_yaw[j]:
                    weight_yaw += 1 / sigma_rad[j] ** 2
                    turned += off / sigma_rad[j] ** 2 / weight_yaw
            out_xy[j, 0], out_xy[j, 1], out_yaw[j], out_score[j] = x, y, turned, mean
            out_kind[j], out_side[j] = best, np.argmax(sides)
        for i in range(start[p], start[p + 1]):
            if kind[i] != best:
                used[i] = used_yaw[i] = False
