"""A rule for trays and tools with several grippers: all parts that lie there are ordered in trips, once."""

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.follow import Part
from pipeline.grasp import Grasping, Refusal
from pipeline.legs import Legs
from pipeline.motion.cycle import ABOVE_MM, quill
from pipeline.places import Filling
from pipeline.policy import Choice, Picked, nearest_of
from pipeline.trip import Pick, trips_of
from pipeline.trip_order import FAR_S, TripLegs, TripOrder, trip_order

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
AHEAD = 3  # trips whose parts are looked at first
LEG_S = 1e-3  # legs' times and the motion agree to so much


@dataclass(frozen=True)
class _Ways:
    """Joints (w, 4) and heights (w,) of the ways to be somewhere, and the first one (n+1,) of each of n things."""

    joints: FloatArray
    z_mm: FloatArray
    begins: IntArray


class TrayTrips:
    """Takes the next part of the order, by the grasp done soonest.

    numbers: of the parts ordered last, at planned_s; order: their order.
    """

    def __init__(self, graspings: Sequence[Grasping], legs: Legs, parts: Sequence[Part],
                 budget_ms: float | None = None) -> None:
        self.graspings, self.legs, self.budget_ms = graspings, legs, budget_ms
        self.parts = {part.number: part for part in parts}
        self.filling = Filling(tuple(graspings[0].places.values()))
        self.numbers: tuple[int, ...] = ()
        self.order: TripOrder | None = None
        self.planned_s = -np.inf
        self._trips: list[list[int]] = []
        self._begun = 0
        self._trip: list[int] = []

    def choose(self, choice: Choice) -> Picked | None:
        """The first part of the next trip, see Policy."""
        if not set(choice.numbers.tolist()) <= set(self.numbers):
            self._plan(choice)
        for k, trip in enumerate(self._trips):
            picked = _first_able(choice, trip)
            if picked is not None:
                self._begun = k
                self._trip = [*trip, *(number for one in self._trips[:k] for number in one)]
                return picked
        return None

    def further(self, choice: Choice) -> Picked | None:
        """The next part of the trip that was begun, or one that an earlier trip had to leave; None: it is to end."""
        return _first_able(choice, self._trip)

    def wanted(self, gripper: int) -> frozenset[int]:
        """Numbers of the parts that come next for a gripper; empty before anything is ordered."""
        coming = self._trips[self._begun : self._begun + AHEAD]
        return frozenset(self._trip if gripper else [number for trip in coming for number in trip])

    def bound(self, picks: Sequence[Pick]) -> float:
        """When no trips that bring these parts into these slots end sooner, in s; -inf where that isn't known.

        In all of them the first part of a trip is held by the first gripper, the second by the next.
        """
        mine = {pick.part.number for pick in picks} == set(self.numbers)
        usual = all(pick.gripper == k for trip in trips_of(picks) for k, pick in enumerate(trip))
        if self.order is None or not (mine and usual) or any(pick.place != self._place(pick.part) for pick in picks):
            return -np.inf
        return self.planned_s + self.order.bound_s - 2 * LEG_S * len(picks)

    def _place(self, part: Part) -> str:
        return self.graspings[0].cell.parts[part.kind].places[0]

    def _plan(self, choice: Choice) -> None:
        seen = {int(number) for number in choice.numbers}
        rows = {self.parts[number].first_row for number in seen}
        others = {part.number for part in self.parts.values() if part.first_row in rows and self._for_others(part)}
        self.numbers, self.planned_s = tuple(sorted(seen | others)), choice.now_s
        legs = trip_legs(self.graspings, self.legs, [self.parts[number] for number in self.numbers],
                         choice.start, self.filling)
        self.order = trip_order(legs, self.budget_ms)
        self._begun, self._trips = 0, [[self.numbers[k] for k in trip] for trip in self.order.trips]

    def _for_others(self, part: Part) -> bool:
        """Whether a part is one that the first gripper can't have, but another can."""
        if part.kind not in self.graspings[0].cell.parts or part.side == "down":
            return False
        refused = [isinstance(one.holds(part.kind, part.xy_mm, part.yaw_rad), Refusal) for one in self.graspings]
        return refused[0] and not all(refused)


def _first_able(choice: Choice, numbers: Sequence[int]) -> Picked | None:
    """The first of these parts that can be had, by the grasp done soonest."""
    left = set(choice.numbers.tolist())
    return next((one for number in numbers if number in left and (one := nearest_of(choice, number))), None)


def trip_legs(graspings: Sequence[Grasping], legs: Legs, parts: Sequence[Part], start: FloatArray,
              filling: Filling) -> TripLegs:
    """Least times of still parts by several grippers, for an arm at rest at start (4,)."""
    kinds = [graspings[0].cell.parts[part.kind] for part in parts]
    names = sorted({kind.places[0] for kind in kinds})
    queue = np.array([names.index(kind.places[0]) for kind in kinds])
    first = np.concatenate([[0], np.cumsum(np.bincount(queue))[:-1]])
    motion, holds = legs.mover.motion, [_holds(one, parts) for one in graspings]
    stands = [_stands(one, parts, names, queue, filling) for one in graspings]
    here = _Ways(start[None], legs.mover.arm.forward(start[None])[:, 2], np.array([0, 1]))
    begin, back = _least(legs, here, holds[0]), _least(legs, stands[0], holds[0])
    carry = [_least(legs, hold, stand) + motion.grasp_s + motion.release_s
             for hold, stand in zip(holds, stands, strict=True)]
    on = [_on(legs, one, other) for one, other in itertools.pairwise(holds)]
    down = [_least(legs, other, one) + motion.release_s for one, other in itertools.pairwise(stands)]
    n = len(parts)
    return TripLegs(queue, first, begin[0], back, np.array(on).reshape(-1, n, n), np.array(carry),
                    np.array(down).reshape(-1, n, n))


def _least(legs: Legs, ends: _Ways, others: _Ways) -> FloatArray:
    """Least s from rest at each of a things to contact at each of b others (a, b)."""
    least = np.full((len(ends.begins) - 1, len(others.begins) - 1), FAR_S)
    rows, columns = np.diff(ends.begins) > 0, np.diff(others.begins) > 0
    if rows.any() and columns.any():
        times = legs.from_rest(ends.joints, others.joints, others.z_mm)
        lines = np.minimum.reduceat(times, ends.begins[:-1][rows], axis=0)
        least[np.ix_(rows, columns)] = np.minimum.reduceat(lines, others.begins[:-1][columns], axis=1)
    return np.asarray(np.minimum(least, FAR_S))


def _on(legs: Legs, holds: _Ways, others: _Ways) -> FloatArray:
    """(n, n) s from contact with a part that is kept to contact with another: the arm comes to rest above the first."""
    motion, joints, mover = legs.mover.motion, holds.joints.copy(), legs.mover
    height = max(motion.travel_mm, motion.clear_height_mm) + ABOVE_MM
    joints[:, 2] = quill(mover.arm, height, joints[:, 3])
    ready = _Ways(joints, np.full(len(joints), height), holds.begins)
    lows = np.unique(np.round(holds.z_mm, 6)).tolist()
    lift_s = min((mover.lift(low, round(height, 6), True).total_s(0.0) for low in lows), default=0.0)
    return np.minimum(_least(legs, ready, others) + motion.grasp_s + lift_s, FAR_S)


def _holds(grasping: Grasping, parts: Sequence[Part]) -> _Ways:
    found = [grasping.holds(part.kind, part.known.xy_mm[-1], float(part.known.yaw_rad[-1])) for part in parts]
    joints = [np.zeros((0, 4)) if isinstance(one, Refusal) else one.joints[one.usable[:, 0], 0] for one in found]
    every = np.concatenate(joints)
    return _Ways(every, grasping.arm.forward(every)[:, 2], _begins(joints))


def _stands(grasping: Grasping, parts: Sequence[Part], names: Sequence[str], queue: IntArray,
            filling: Filling) -> _Ways:
    ways = []
    for k, name in enumerate(names):
        kinds = sorted({part.kind for part, q in zip(parts, queue, strict=True) if q == k})
        grips = [(kind, grip) for kind in kinds for grip in range(len(grasping.grips(grasping.cell.parts[kind])))]
        slots = filling.coming(name, int((queue == k).sum()))
        ways += [np.concatenate([grasping.drops(kind, grip, name, slot).joints for kind, grip in grips])
                 for slot in slots] + [np.zeros((0, 4))] * (int((queue == k).sum()) - len(slots))
    joints = np.concatenate(ways)
    return _Ways(joints, grasping.arm.forward(joints)[:, 2], _begins(ways))


def _begins(ways: Sequence[FloatArray]) -> IntArray:
    return np.concatenate([[0], np.cumsum([len(one) for one in ways])])
