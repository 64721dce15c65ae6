"""How long a move takes: one axis, time-optimal under speed, acceleration and jerk limits, in closed form.

A change of speed dv whose acceleration starts and ends at zero lasts (Biagiotti, Melchiorri, Trajectory Planning for
Automatic Machines and Robots, 2008, section 3.4, double S velocity profile)

    (1)  ramp(dv) = dv / a + a / j   where dv j >= a2, the acceleration limit is reached
    (2)             2 sqrt(dv / j)   where it is not

and carries the axis its mean speed times as far. A move is two such ramps with a stretch at full speed between. An
infinite jerk gives the trapezoidal profile. Any units, as long as they agree: mm or rad.
"""

import numpy as np
from numba import njit, vectorize
from numpy.typing import ArrayLike, NDArray

from pipeline.arm import Arm

Floats = NDArray[np.float64]
MOST_STEPS = 200  # of the root search; about ten are used


def move_time(arm: Arm, joints_from: ArrayLike, joints_to: ArrayLike) -> Floats:
    """Seconds (...) from rest to rest between joints (..., 4), rad and mm: what the slowest joint needs.

    A joint can always take longer, so the joints end together at no cost.
    """
    way = np.asarray(joints_to, np.float64) - np.asarray(joints_from, np.float64)
    limits = arm.limits
    return np.asarray(_axis_time(way, limits.speed, limits.accel, limits.jerk).max(axis=-1))


def axis_time(distance: ArrayLike, speed: ArrayLike, accel: ArrayLike, jerk: ArrayLike) -> Floats:
    """Seconds from rest to rest over a distance (its sign does not matter); all arguments broadcast."""
    return np.asarray(_axis_time(distance, speed, accel, jerk))


def rest_to_moving_time(
    distance: ArrayLike, end_speed: ArrayLike, speed: ArrayLike, accel: ArrayLike, jerk: ArrayLike
) -> Floats:
    """Least seconds from rest to a point at a signed distance, passed at a signed end speed with no acceleration.

    Read backwards it is the time from that speed to rest. NaN where the end speed is above the limit. All arguments
    broadcast.

    Time-optimal control of three integrators switches the jerk twice: towards a point farther than one ramp
    carries, the speed passes a peak above the end speed; towards a nearer one, the axis first backs off.
    """
    return np.asarray(rest_to_moving_kernel(distance, end_speed, speed, accel, jerk))


@njit("float64(float64, float64, float64)", cache=True)
def _ramp(change: float, accel: float, jerk: float) -> float:
    """Duration of a change of speed, equations (1) and (2)."""
    if change * jerk >= accel * accel:
        return float(change / accel + accel / jerk)
    return float(2 * np.sqrt(change / jerk))


@vectorize(["float64(float64, float64, float64, float64)"], cache=True)  # type: ignore[no-untyped-call, untyped-decorator]
def _axis_time(distance: float, speed: float, accel: float, jerk: float) -> float:
    way = abs(distance)
    if way == 0.0:
        return 0.0
    full = _ramp(speed, accel, jerk)
    if way >= speed * full:
        return float(way / speed + full)
    rise = accel / jerk  # of the acceleration; the peak speed solves way = peak (peak / accel + rise)
    if way >= 2 * accel * rise * rise:
        return float(rise + np.sqrt(rise * rise + 4 * way / accel))
    return float(4 * np.cbrt(way / (2 * jerk)))


@njit("UniTuple(float64, 2)(float64, float64, float64, float64, float64)", cache=True)
def _two_ramps(root: float, end: float, side: float, accel: float, jerk: float) -> tuple[float, float]:
    """Way and time from rest over a peak speed to the end speed.

    The peak lies root2 above the end speed (side 1) or root2 below zero (side -1): in the root both are smooth.
    """
    extra = root * root
    peak = end + extra if side > 0 else -extra
    first, second = _ramp(abs(peak), accel, jerk), _ramp(abs(peak - end), accel, jerk)
    return peak * first / 2 + (peak + end) * second / 2, first + second


@vectorize(["float64(float64, float64, float64, float64, float64)"], cache=True)  # type: ignore[no-untyped-call, untyped-decorator]
def rest_to_moving_kernel(distance: float, end_speed: float, speed: float, accel: float, jerk: float) -> float:
    """`rest_to_moving_time` of one axis, for loops that are compiled themselves."""
    way, end = (distance, end_speed) if end_speed >= 0 else (-distance, -end_speed)
    if not (end <= speed and np.isfinite(way)):
        return float(np.nan)
    direct = _ramp(end, accel, jerk)
    side = 1.0 if way >= end * direct / 2 else -1.0
    low, high = 0.0, np.sqrt(speed - end if side > 0 else speed)
    far, duration = _two_ramps(high, end, side, accel, jerk)
    if side * (way - far) >= 0:
        return float(duration + side * (way - far) / speed)
    root = high / 2
    below, above = side * (end * direct / 2 - way), side * (far - way)  # the way is monotone in the root
    for step in range(MOST_STEPS):
        root = high - above * (high - low) / (above - below)
        if step % 3 == 2 or not low < root < high:
            root = (low + high) / 2
        if not low < root < high:
            break
        excess = side * (_two_ramps(root, end, side, accel, jerk)[0] - way)
        if excess < 0:
            low, below = root, excess
        else:
            high, above = root, excess
        if excess == 0 or high - low <= 1e-15 * high:
            break
    return float(_two_ramps(root, end, side, accel, jerk)[1])


@njit("float64(float64, float64, float64, float64, float64)", cache=True)
def rest_to_moving_most(distance: float, end_speed: float, speed: float, accel: float, jerk: float) -> float:
    """No less than `rest_to_moving_kernel`, in a tenth of its time: come to rest where one ramp leads to the end."""
    way, end = (distance, end_speed) if end_speed >= 0 else (-distance, -end_speed)
    direct = _ramp(end, accel, jerk)
    return float(_axis_time(way - end * direct / 2, speed, accel, jerk) + direct)
