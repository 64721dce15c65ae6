"""Changing the elbow on the way: the arm passes the stretched pose, which it must not do beside a part."""

import numpy as np
from numba import njit

BESIDE_S = 0.13  # before a part is met and after it is left the arm still counts as at the part


@njit("float64(float64, float64, float64)", cache=True)
def flip_time(away: float, at_part: float, singular: float) -> float:
    """Least time of a way between J2 away from a part and J2 at it, so that it is stretched away from the part only.

    J2 in rad; singular: its least distance from 0 at a part. 0 where the elbow stays; inf where J2 is too small at the
    part. On a stretched move J2 goes at a nearly even speed, so the share of the way up to the singular zone is the
    share of the time.
    """
    if away * at_part >= 0:
        return 0.0
    room = abs(at_part) - singular
    if room <= 0:
        return np.inf
    return BESIDE_S * (abs(away) + abs(at_part)) / room
