"""A trip: up to as many picks as the tool has grippers, then as many parts set down, the last picked first.

Gripper by gripper the arm picks on as long as that gives no fewer parts a second, over the trip so far, than setting
down what it holds. It is decided at the end of each grasp, from what is known then: up to there both ways are the same.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pipeline.follow import Part
from pipeline.grasp import Drops
from pipeline.motion.across import SHAPES, TURNING
from pipeline.motion.cycle import Cycle, Transfer
from pipeline.motion.lift import MotionFault
from pipeline.permit import Permit
from pipeline.policy import Picked

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class SetDown:
    """How a part picked earlier in a trip is set down: the way from the slot before. Its times in s."""

    way: Transfer
    across_s: float
    there_s: float
    release_start_s: float
    release_end_s: float

    @property
    def edges(self) -> tuple[float, float, float, float, float]:
        """When it departs, is over the gate, over the slot, at the slot, and done."""
        return self.way.depart_s, self.across_s, self.there_s, self.release_start_s, self.release_end_s


@dataclass(frozen=True)
class Pick:
    """One pick as it was carried out, and the choice that led to it. set_down: where the part was not released at the
    end of its own cycle, but after later ones."""

    part: Part
    decided_s: float
    cycle: Cycle
    place: str
    slot: int
    place_pose: FloatArray
    picked: Picked
    looked_at: int
    decide_s: float
    set_down: SetDown | None = None

    @property
    def gripper(self) -> int:
        """Index of the gripper that holds the part."""
        return self.cycle.hold.gripper

    @property
    def place_joints(self) -> FloatArray:
        """Joints (4,) at the slot."""
        return self.set_down.way.end_joints if self.set_down else self.cycle.end_joints

    @property
    def there_s(self) -> float:
        """When the gripper is over the slot."""
        return (self.set_down or self.cycle).there_s

    @property
    def release_start_s(self) -> float:
        """When the part is let go."""
        return (self.set_down or self.cycle).release_start_s

    @property
    def release_end_s(self) -> float:
        """When the arm may leave the slot."""
        return (self.set_down or self.cycle).release_end_s

    @property
    def busy_s(self) -> float:
        """How long the arm moves for this part, from departing to it; without what it does for others meanwhile."""
        down = self.set_down
        busy = self.cycle.release_end_s - self.cycle.depart_s
        return busy if down is None else busy + down.release_end_s - down.way.depart_s


@dataclass(frozen=True)
class Chosen:
    """A pick, which of its kind's grips it uses, and what its cycle was asked to keep (see Permit.cycle)."""

    pick: Pick
    grip: int
    free_s: float
    from_mm: float
    until_s: float


@dataclass(frozen=True)
class Trip:
    """Picks in their order, as chosen and with how each is set down. end_joints (4,): where the arm rests after it."""

    chosen: tuple[Chosen, ...]
    picks: tuple[Pick, ...]
    end_joints: FloatArray

    @property
    def end_s(self) -> float:
        """When the arm is free again."""
        return self.picks[0].release_end_s

    @property
    def rate(self) -> float:
        """Parts a second, from the first departure on."""
        return len(self.picks) / (self.end_s - self.picks[0].cycle.depart_s)


def alone(one: Chosen) -> Trip:
    """The trip of one pick."""
    return Trip((one,), (one.pick,), one.pick.cycle.end_joints)


def closed(chosen: tuple[Chosen, ...], permits: tuple[Permit, ...]) -> Trip | None:
    """The trip after whose last pick the parts held are set down; None where there is no way to a slot.

    Nor where a slot would be filled before the place is emptied, which it is after the last of its slots.
    """
    last = chosen[-1].pick
    if any(one.pick.place == last.place and one.pick.slot > last.slot for one in chosen[:-1]):
        return None
    picks, joints, free_s = [last], last.cycle.end_joints, last.cycle.release_end_s
    for one in reversed(chosen[:-1]):
        permit = permits[one.pick.gripper]
        drops = permit.grasping.drops(one.pick.part.kind, one.grip, one.pick.place, one.pick.slot)
        down = _set_down(joints, free_s, drops, (permit, permits[picks[-1].gripper]))
        if down is None:
            return None
        joints, free_s = down.way.end_joints, down.release_end_s
        picks.append(replace(one.pick, set_down=down, place_pose=permit.grasping.arm.forward(joints)))
    return Trip(chosen, tuple(reversed(picks)), joints)


def trips_of(picks: Sequence[Pick]) -> list[tuple[Pick, ...]]:
    """The picks of a run, in turn, by trips: one ends with the pick that is set down at the end of its own cycle."""
    trips, trip = list[tuple[Pick, ...]](), list[Pick]()
    for pick in picks:
        trip.append(pick)
        if pick.set_down is None:
            trips.append(tuple(trip))
            trip = []
    return trips


def held_on(one: Chosen, permit: Permit) -> Chosen | None:
    """The same pick, after which the arm keeps the part and comes to rest near where it was; None where it can't."""
    cycle = one.pick.cycle
    ready = permit.mover.ready_after(cycle)
    if not np.isfinite(ready).all():
        return None
    kept = permit.cycle(cycle.start_joints, one.free_s, cycle.hold, ready, one.from_mm, one.until_s, holds_on=True)
    if not isinstance(kept, Cycle) or kept.grasp_end_s != cycle.grasp_end_s:
        return None
    return replace(one, pick=replace(one.pick, cycle=kept))


def _set_down(joints: FloatArray, free_s: float, drops: Drops, permits: tuple[Permit, Permit]) -> SetDown | None:
    """The way from rest at joints (4,) to the nearest of the ways to stand at a slot, allowed both grippers."""
    mover = permits[0].mover
    speed = mover.arm.limits.speed[TURNING]
    away = (np.abs(drops.joints - joints)[:, TURNING] / speed).max(axis=1)
    end = drops.joints[int(away.argmin())]
    for shape in SHAPES:
        try:
            way = mover.transfer(joints, free_s, end, shape)
        except MotionFault:
            continue
        if all(permit.set_down_refused(way) is None for permit in permits):
            across, there = float(way.across[0].start_s[0]), max(curve.end_s for curve in way.across)
            return SetDown(way, across, there, way.end_s, way.end_s + mover.motion.release_s)
    return None
