"""Legs: when the arm would have set a part down, for every grasp, after every other, at any time it may start.

A leg goes from rest at one slot (or wherever the arm is) to a part, with it, and to rest at its own slot. It depends on
when it starts, since the part moves: the times are worked out at points of the part's lane, for the belt at the speed
it is known to have, from the same tables and closed forms as the motion itself.
"""

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pipeline.belt import BeltState
from pipeline.motion.across import TURNING
from pipeline.motion.cycle import Mover
from pipeline.motion.flip import flip_time
from pipeline.motion.lift import Lift
from pipeline.move_time import rest_to_moving_kernel, rest_to_moving_most

FloatArray = NDArray[np.float64]
STILL_MM_S = 1.0  # below this speed a belt is planned for as standing
START_TIMES = 96
LEAST_STEP_S = 0.04
HAIR_S = 1e-9


@dataclass(frozen=True)
class Nodes:
    """g grasps to choose from, of n parts.

    part (g,): row of the part. lane (g, m, 4): joints on the part at m points, usable (g, m); ahead_mm (g, m): how much
    farther along than now the part is there. drop (g, 4): joints at the slot. hold_mm, drop_mm (g,): tip heights.
    enters_mm, leaves_mm (g,): how far ahead of now the window begins and ends for the part. until_s (g,): when it is
    taken away (inf: never).
    """

    part: NDArray[np.int64]
    lane: FloatArray
    usable: NDArray[np.bool_]
    ahead_mm: FloatArray
    drop: FloatArray
    hold_mm: FloatArray
    drop_mm: FloatArray
    enters_mm: FloatArray
    leaves_mm: FloatArray
    until_s: FloatArray

    def __len__(self) -> int:
        return len(self.part)


@dataclass(frozen=True)
class LegTimes:
    """contact, finish (a, g, k): when the part is gripped and when the arm is free again, for legs begun at start_s
    (k,) from each of a places: row 0 where the arm is now, row start_of[b] where grasp b ends. inf: can't be had.
    """

    start_s: FloatArray
    start_of: NDArray[np.int64]
    contact: FloatArray
    finish: FloatArray


class Legs:
    """Leg times of one arm along one belt."""

    def __init__(self, mover: Mover) -> None:
        self.mover = mover
        limits = mover.arm.limits
        self._limits = np.stack([limits.speed[TURNING], limits.accel[TURNING], limits.jerk[TURNING]])
        self._lifts: dict[tuple[float, float], int] = {}
        self._tables = np.zeros((0, 3, 1))

    def time_lifts(self, rest_mm: float, grip_mm: float) -> None:
        """Work out the lifts between a height of rest and one of gripping ahead of their first use."""
        self._table(rest_mm, grip_mm)
        self._table(grip_mm, rest_mm)

    def times(self, start: FloatArray, now: float, nodes: Nodes, belt: BeltState, later: bool) -> LegTimes:
        """Leg times for an arm at rest at start (4,) from now on; without `later` only those that begin now, here."""
        span = self._span(nodes, belt.speed_mm_s)
        step = max(span / START_TIMES, LEAST_STEP_S)
        start_s = np.linspace(now, now + step * START_TIMES, START_TIMES + 1) if later else np.full(1, now)
        places, start_of = np.unique(np.round(nodes.drop, 9), axis=0, return_inverse=True)
        starts = np.concatenate([start[None], places]) if later else start[None]
        out = self._lifts_between(self.mover.arm.forward(starts)[:, 2], nodes.hold_mm, there=True)
        back = np.array([self._table(*pair) for pair in zip(nodes.hold_mm, nodes.drop_mm, strict=True)], np.int64)
        lane, usable, t_at, still = self._passing(nodes, now, belt.speed_mm_s)
        speed = self._lane_speeds(lane, 0.0 if still else belt.speed_mm_s)
        moves = max(belt.speed_mm_s, STILL_MM_S)
        opens = np.full(len(nodes), now) if still else now + nodes.enters_mm / moves
        closes = nodes.until_s if still else np.minimum(nodes.until_s, now + nodes.leaves_mm / moves)
        if still:  # a standing part outside the window can't be had
            closes = np.where((nodes.enters_mm > 0) | (nodes.leaves_mm < 0), -np.inf, closes)
        contact, finish = (np.empty((len(starts), len(nodes), len(start_s))) for _ in range(2))
        rests, passed, slots = (np.ascontiguousarray(joints[..., TURNING]) for joints in (starts, lane, nodes.drop))
        _leg_times(
            rests, passed, slots, speed, usable, _firsts(nodes), t_at, out, back, opens, closes, self._tables,
            self._limits, self.mover.motion.grasp_s, self.mover.motion.release_s, self.mover.singular, still, start_s,
            contact, finish,
        )  # fmt: skip
        return LegTimes(start_s, start_of + 1, contact, finish)

    def still(self, rests: FloatArray, holds: FloatArray, hold_mm: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Legs where nothing moves: s from leaving each rest (a, 4) to contact with each hold (b, 4), tip at hold_mm
        (b,): (a, b); and from contact until the arm is free at each rest: (b, a). inf: can't be had."""
        motion, back = self.mover.motion, self._still(rests, holds, hold_mm, there=False)
        return self.from_rest(rests, holds, hold_mm), np.ascontiguousarray(back.T) + motion.grasp_s + motion.release_s

    def from_rest(self, rests: FloatArray, ends: FloatArray, end_mm: FloatArray) -> FloatArray:
        """(a, b) s from rest at rests (a, 4) to ends (b, 4), tip at end_mm (b,), where nothing moves."""
        return self._still(rests, ends, end_mm, there=True)

    def _still(self, rests: FloatArray, ends: FloatArray, end_mm: FloatArray, there: bool) -> FloatArray:
        """(a, b) s between rest at rests (a, 4) and ends (b, 4), there or back, without dwells."""
        lifts = self._lifts_between(self.mover.arm.forward(rests)[:, 2], end_mm, there)
        joints = np.ascontiguousarray(rests[:, TURNING]), np.ascontiguousarray(ends[:, TURNING])
        legs: FloatArray = _still_legs(*joints, lifts, self._tables, self._limits, self.mover.singular)
        return legs

    def _span(self, nodes: Nodes, speed: float) -> float:
        """How far ahead legs may begin: until the last part has left its window."""
        if speed < STILL_MM_S:
            return 4.0 * (int(nodes.part.max()) + 1)
        return float(np.clip(nodes.leaves_mm.max() / speed, 0.5, 120.0))

    def _passing(self, nodes: Nodes, now: float, speed: float):  # type: ignore[no-untyped-def]
        """Lanes with the time each point is passed; for a standing part the one point where it is."""
        if nodes.lane.shape[1] > 1 and speed >= STILL_MM_S:
            return nodes.lane, nodes.usable, now + nodes.ahead_mm / speed, False
        if nodes.lane.shape[1] == 1:
            return nodes.lane, nodes.usable, np.full((len(nodes), 1), now), True
        at = (nodes.ahead_mm <= 0).sum(axis=1) - 1
        at = np.clip(at, 0, nodes.lane.shape[1] - 2)
        row = np.arange(len(nodes))
        before, after = nodes.ahead_mm[row, at], nodes.ahead_mm[row, at + 1]
        share = np.clip(-before / (after - before), 0, 1)[:, None]
        lane = nodes.lane[row, at] * (1 - share) + nodes.lane[row, at + 1] * share
        usable = nodes.usable[row, at] & nodes.usable[row, at + 1]
        return lane[:, None], usable[:, None], np.full((len(nodes), 1), now), True

    def _lane_speeds(self, lane: FloatArray, speed: float) -> FloatArray:
        """(g, m, 3) speeds of J1, J2, J4 on the lanes."""
        if speed == 0:
            return np.zeros((*lane.shape[:2], 3))
        velocity = np.zeros(4)
        velocity[:2] = speed * self.mover.belt.heading
        return np.ascontiguousarray(self.mover.arm.rates(lane, velocity)[..., TURNING])

    def _lifts_between(self, rest_mm: FloatArray, hold_mm: FloatArray, there: bool) -> NDArray[np.int64]:
        """Rows (a, b) of the tables of the lifts from each height of rest (a,) to each on a part (b,), or back."""
        rests, rest = np.unique(np.round(rest_mm, 6), return_inverse=True)
        grips, grip = np.unique(np.round(hold_mm, 6), return_inverse=True)
        rows = np.array([[self._table(*((z, g) if there else (g, z))) for g in grips] for z in rests], np.int64)
        return np.ascontiguousarray(rows[rest][:, grip])

    def _table(self, from_mm: float, to_mm: float) -> int:
        """Row of the tables of the lift between two heights."""
        key = (round(float(from_mm), 6), round(float(to_mm), 6))
        if key not in self._lifts:
            lift: Lift = self.mover.lift(*key)
            row = np.stack([lift.table.across_s, lift.table.rise_s, lift.table.total_s])
            self._tables = np.concatenate([self._tables.reshape(-1, *row.shape), row[None]])
            self._lifts[key] = len(self._tables) - 1
        return self._lifts[key]


def _firsts(nodes: Nodes) -> NDArray[np.int64]:
    """The first grasp (g,) that is on the part in the same way as each: the way to it takes as long."""
    seen: dict[tuple[bytes, ...], int] = {}
    ways = zip(nodes.hold_mm, nodes.lane, nodes.usable, nodes.ahead_mm, strict=True)
    return np.array([seen.setdefault(tuple(one.tobytes() for one in way), b) for b, way in enumerate(ways)], np.int64)


@njit("UniTuple(float64, 2)(float64[:, ::1], float64)", cache=True)
def _lift_times(table: FloatArray, across: float) -> tuple[float, float]:
    """Time to the gate and of the whole lift that is above the gates for `across`."""
    spans = table[0]
    n = len(spans)
    if across >= spans[n - 1]:
        return table[1, n - 1], table[2, n - 1] + across - spans[n - 1]
    k = np.searchsorted(spans, across)
    if k == 0:
        return table[1, 0], table[2, 0]
    width = spans[k] - spans[k - 1]
    share = (across - spans[k - 1]) / width if width > 0 else 1.0
    return (table[1, k - 1] + share * (table[1, k] - table[1, k - 1]),
            table[2, k - 1] + share * (table[2, k] - table[2, k - 1]))


@njit("float64(float64[::1], float64[::1], float64[::1], float64[:, ::1], float64)", cache=True)
def _across(start: FloatArray, end: FloatArray, speed: FloatArray, limits: FloatArray, singular: float) -> float:
    """Least time from rest at start (3,) to a part at end (3,) with a speed (3,). The joint that may take longest is
    looked at first; the others mostly can't take as long."""
    most, slowest = (0.0, 0.0, 0.0), 0
    for j in range(3):
        way = end[j] - start[j]
        if not (abs(speed[j]) <= limits[0, j] and np.isfinite(way)):
            return np.inf
        this = rest_to_moving_most(way, speed[j], limits[0, j], limits[1, j], limits[2, j])
        most = (this if j == 0 else most[0], this if j == 1 else most[1], this if j == 2 else most[2])
        if this > most[slowest]:
            slowest = j
    longest = flip_time(start[1], end[1], singular)
    for turn in range(3):
        j = (slowest + turn) % 3
        if most[j] > longest - HAIR_S:
            needed = rest_to_moving_kernel(end[j] - start[j], speed[j], limits[0, j], limits[1, j], limits[2, j])
            if not needed <= 1e9:
                return np.inf
            longest = max(longest, needed)
    return longest


@njit(
    "float64(float64[:, ::1], float64[:, ::1], boolean[::1], float64[::1], float64[::1], float64, float64[:, ::1], "
    "float64[:, ::1], float64, float64, float64)",
    cache=True,
)
def _carry(
    lane: FloatArray, speed: FloatArray, usable: NDArray[np.bool_], t_at: FloatArray, slot: FloatArray,
    contact: float, table: FloatArray, limits: FloatArray, grasp_s: float, release_s: float, singular: float,
) -> float:  # fmt: skip
    """From contact to the end of release."""
    m = len(t_at)
    joints, back = np.empty(3), np.empty(3)
    rise = table[1, -1]
    for _ in range(2):  # a short way across shortens the lift, which moves where the part is left
        left = contact + grasp_s + rise
        k, share = 0, 0.0
        if m > 1:
            k = min(max(int(np.searchsorted(t_at, left)) - 1, 0), m - 2)
            share = min(max((left - t_at[k]) / (t_at[k + 1] - t_at[k]), 0.0), 1.0)
            if not (usable[k] and usable[k + 1]):
                return np.inf
        for j in range(3):
            ahead = lane[k + 1, j] - lane[k, j] if m > 1 else 0.0
            joints[j] = lane[k, j] + share * ahead
            faster = speed[k + 1, j] - speed[k, j] if m > 1 else 0.0
            back[j] = -(speed[k, j] + share * faster)
        across = _across(slot, joints, back, limits, singular)  # read backwards: from the part to rest over the slot
        rise, total = _lift_times(table, across)
    return grasp_s + total + release_s


@njit("float64[:, ::1](float64[:, ::1], float64[:, ::1], int64[:, ::1], float64[:, :, ::1], float64[:, ::1], float64)",
      cache=True, nogil=True)  # fmt: skip
def _still_legs(
    rests: FloatArray, holds: FloatArray, lift: NDArray[np.int64], tables: FloatArray, limits: FloatArray,
    singular: float,
) -> FloatArray:
    """(a, b) s of the lift between each rest and each hold, one way or the other."""
    legs, speed = np.full(lift.shape, np.inf), np.zeros(3)
    for a in range(len(rests)):
        for b in range(len(holds)):
            across = _across(rests[a], holds[b], speed, limits, singular)
            if across < np.inf:
                legs[a, b] = _lift_times(tables[lift[a, b]], across)[1]
    return legs


@njit("boolean(float64[::1], int64, float64, boolean)", cache=True)
def _past(t_at: FloatArray, k: int, start: float, still: bool) -> bool:
    """Whether a part has passed point k and the next one too before any leg can begin."""
    return not still and k + 1 < len(t_at) and t_at[k + 1] < start


@njit(
    "void(float64[:, ::1], float64[:, :, ::1], float64[:, ::1], float64[:, :, ::1], boolean[:, ::1], int64[::1], "
    "float64[:, ::1], int64[:, ::1], int64[::1], float64[::1], float64[::1], float64[:, :, ::1], float64[:, ::1], "
    "float64, float64, float64, boolean, float64[::1], float64[:, :, ::1], float64[:, :, ::1])",
    cache=True,
    nogil=True,
)
def _leg_times(
    starts: FloatArray, lane: FloatArray, slot: FloatArray, speed: FloatArray, usable: NDArray[np.bool_],
    first: NDArray[np.int64], t_at: FloatArray, out: NDArray[np.int64], back: NDArray[np.int64], opens: FloatArray,
    closes: FloatArray, tables: FloatArray, limits: FloatArray, grasp_s: float, release_s: float, singular: float,
    still: bool, start_s: FloatArray, contact: FloatArray, finish: FloatArray,
) -> None:  # fmt: skip
    """Fill contact and finish (a, g, k)."""
    g, m = t_at.shape
    carry, ways = np.empty(m), np.full((2, g, len(starts), m), np.nan)  # ways: when each departs and arrives
    for b in range(g):
        for k in range(m):
            carry[k] = np.inf
            if usable[b, k] and not _past(t_at[b], k, start_s[0], still):
                carry[k] = _carry(lane[b], speed[b], usable[b], t_at[b], slot[b], t_at[b, k], tables[back[b]], limits,
                                  grasp_s, release_s, singular)
        for a in range(len(starts)):
            departs, arrives = ways[0, first[b], a], ways[1, first[b], a]
            for k in range(m):
                if first[b] == b and usable[b, k] and not _past(t_at[b], k, start_s[0], still):
                    across = _across(starts[a], lane[b, k], speed[b, k], limits, singular)
                    rise, total = _lift_times(tables[out[a, b]], across)
                    departs[k] = t_at[b, k] - across - rise
                    arrives[k] = departs[k] + total
            point = 0
            for i in range(len(start_s)):
                at = np.inf
                if still:
                    if usable[b, 0]:
                        at = start_s[i] + arrives[0] - departs[0]
                else:
                    while point < m and not departs[point] >= start_s[i]:
                        point += 1
                    if point < m:
                        at = arrives[point]
                        if point > 0 and departs[point - 1] < start_s[i]:
                            share = (start_s[i] - departs[point - 1]) / (departs[point] - departs[point - 1])
                            at = arrives[point - 1] + share * (arrives[point] - arrives[point - 1])
                at = max(at, opens[b])
                contact[a, b, i] = finish[a, b, i] = np.inf
                if at + grasp_s <= closes[b]:
                    k = 0
                    if m > 1:
                        k = min(max(int(np.searchsorted(t_at[b], at)) - 1, 0), m - 2)
                        share = min(max((at - t_at[b, k]) / (t_at[b, k + 1] - t_at[b, k]), 0.0), 1.0)
                        rest = carry[k] + share * (carry[k + 1] - carry[k])
                    else:
                        rest = carry[0]
                    if rest < np.inf:
                        contact[a, b, i] = at
                        finish[a, b, i] = at + rest
