"""The trade's 25-300-25 mm cycle: 25 mm up, 300 mm across, 25 mm down, and back (common practice, no source)."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.arm import TURN, Arm
from pipeline.cell import Cell
from pipeline.motion.across import Across, at_rest
from pipeline.motion.cycle import lift_limits
from pipeline.motion.lift import Lift
from pipeline.move_time import move_time

Floats = NDArray[np.float64]

LIFT_MM, ACROSS_MM = 25.0, 300.0
OUT_MM = np.arange(50.0, 1000.0, 10.0)  # how far before the arm the line across may lie


@dataclass(frozen=True, eq=False)
class TradeCycle:
    """The cycle where this arm does it quickest: on a line square to its base x axis, J3 about mid-stroke, yaw kept."""

    out_mm: float  # from J1 to the line
    corners: Floats  # (4, 4) joints: down and up at one end, up and down at the other
    sequence_s: float  # there and back, each of the six moves from rest to rest


def overlapped_s(cell: Cell, arm: Arm, cycle: TradeCycle) -> float:
    """The same cycle, there and back, with the tip going over the upper corners without stopping at them.

    It moves sideways only at the upper corners' height or above, and rests only at the lower ones.
    """
    heights = arm.forward(cycle.corners)[:, 2]
    across = Across(arm, 0.0)
    total = 0.0
    for start, end in ((0, 3), (3, 0)):
        way = across.between(at_rest(cycle.corners[start]), at_rest(cycle.corners[end]))
        top = float(heights[start]) + LIFT_MM
        lift = Lift(float(heights[start]), float(heights[end]), top, top, top, lift_limits(cell, arm))
        total += lift.total_s(way.duration)
    return total


def trade_cycle(arm: Arm) -> TradeCycle | None:
    """The quickest cycle inside the joint limits; None where the arm can't reach 300 mm across or lift by 25."""
    ends = np.array([[0.0, -ACROSS_MM / 2], [0.0, ACROSS_MM / 2]])
    c, s = np.cos(arm.base_yaw), np.sin(arm.base_yaw)
    xy = (np.array([1.0, 0.0]) * OUT_MM[:, None])[:, None] + ends  # (d, 2, 2) in the base frame
    tips = np.zeros((len(OUT_MM), 2, 4))
    tips[..., :2] = arm.base_mm[:2] + xy @ np.array([[c, s], [-s, c]])
    tips[..., 3] = arm.base_yaw + arm.tool_yaw
    joints = np.moveaxis(arm.inverse(tips), 2, 1)  # (d, elbow, end, 4)
    turns = np.where(np.isfinite(joints[..., 3]), np.round((joints[:, :, :1, 3] - joints[..., 3]) / TURN), 0.0)
    up, down = arm.with_j4_turn(joints, turns), arm.with_j4_turn(joints, turns)
    middle = (arm.limits.lower[2] + arm.limits.upper[2]) / 2
    lead = arm.lead * arm.sense[3] * (up[..., 3] - up[:, :, :1, 3])  # keeps both ends level
    for posture, height in ((up, LIFT_MM / 2), (down, -LIFT_MM / 2)):
        posture[..., 2] = middle + arm.sense[2] * (height - lead)
    corners = np.stack([down[:, :, 0], up[:, :, 0], up[:, :, 1], down[:, :, 1]], axis=2)  # (d, elbow, 4, 4)
    inside = ((corners >= arm.limits.lower) & (corners <= arm.limits.upper)).all(axis=(2, 3))
    times = 2 * move_time(arm, corners[:, :, :-1], corners[:, :, 1:]).sum(axis=-1)
    times = np.where(inside, times, np.inf)
    best = np.unravel_index(int(np.argmin(times)), times.shape)
    if not np.isfinite(times[best]):
        return None
    return TradeCycle(float(OUT_MM[best[0]]), corners[best], float(times[best]))
