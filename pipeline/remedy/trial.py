"""Trials: would one part have been picked, had the cell been another?

A trial shares the run's recording, parts and picks, and asks the same functions as the replay. The part is tried alone:
by an arm that waits at home, or by one that fits it in between the picks as they were made.
"""

from dataclasses import dataclass, field, replace
from itertools import islice

import numpy as np
from numpy.typing import NDArray

from pipeline.arm import gripper_arms
from pipeline.cell import Cell
from pipeline.follow import Known, Part
from pipeline.grasp import Grasping, Holds, Refusal
from pipeline.legs import Legs
from pipeline.motion.cycle import Cycle, Hold, Mover, lift_limits
from pipeline.neighbours import NEAR_MM, ROOM_MM, Neighbours
from pipeline.permit import Permit
from pipeline.places import Filling, Place
from pipeline.replay import Run, Setting
from pipeline.scene import SceneBuilder
from pipeline.watch import Watch

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
MOST_GRASPS = 4  # of a part are tried, the quickest first
MOST_FRAMES = 8  # at which a part is tried alone
MOST_MOMENTS = 4  # are tried for one part
MOST_REPLANNED = 12  # picks may be put off by one that is fitted in
CAUGHT_UP_S = 1e-6
QUICK = 0.8  # of the run's shortest cycle: a cycle hardly takes less
ROUGHLY_S = 0.1


class OutOfTrials(Exception):
    """No more cycles may be worked out: remedies must not take long."""


@dataclass(frozen=True)
class Moment:
    """The arm at rest at joints (4,), free from free_s on, after so many picks."""

    joints: FloatArray
    free_s: float
    after: int


@dataclass(frozen=True)
class _Tried:
    """What follows from a changed cell."""

    grasping: Grasping
    permit: Permit
    neighbours: Neighbours
    holds: dict[int, Holds | Refusal] = field(default_factory=dict)

    def holds_of(self, k: int) -> Holds | Refusal:
        """The ways to be on part k."""
        if k not in self.holds:
            part = self.neighbours.parts[k]
            self.holds[k] = self.grasping.holds(part.kind, part.xy_mm, part.yaw_rad)
        return self.holds[k]


class Trials:
    """The trials of one run; `left` is how many cycles may still be worked out."""

    def __init__(self, setting: Setting, run: Run, most: int) -> None:
        self.set, self.run, self.left = setting, run, most
        self.watch = Watch(setting.cell, setting.recording, setting.belt, setting.parts)
        self.xyyaw = np.array([[*part.xy_mm, part.yaw_rad] for part in setting.parts]).reshape(-1, 3)
        self.gone_s = np.full(len(setting.parts), np.inf)
        for pick in run.picks:
            self.gone_s[pick.part.number - 1] = pick.cycle.grasp_end_s
        self._shortest_s = min((pick.cycle.release_end_s - pick.cycle.depart_s for pick in run.picks), default=0.0)
        self._lifts = lift_limits(setting.cell, setting.mover.arm)

    def alone(self, cell: Cell, k: int, spared: frozenset[int] = frozenset()) -> bool:
        """Whether the arm, waiting at home, picks part k in that cell; spared: rows of parts that are not there.

        Decided as the replay decides, at some of its frames.
        """
        tried, home, until = self._tried(cell), np.array(self.set.mover.arm.home), self.passed_s(k)
        around = [other for other in self.around(k, until).tolist() if other not in spared and self._near(k, other)]
        parts = (self.set.parts[k], *(_never_picked(self.set.parts[other]) for other in around))
        watch = Watch(cell, self.set.recording, self.set.belt, parts)
        builder = SceneBuilder(cell, watch, tried.grasping, Legs(tried.permit.mover), self.set.outlines,
                               self.set.least_score)
        filling = Filling(tuple(tried.grasping.places.values()))
        known = self.watch.known_s
        frames = known[(known >= watch.first_s[0]) & (known <= max(until, watch.first_s[0]))]
        for now in frames[:: max(len(frames) // MOST_FRAMES, 1)].tolist():
            self._count()
            scene = builder.scene(now, home, filling, 1, set())
            if 0 in builder.refusals:
                return False
            if scene is None:
                continue
            _, finish = scene.choice.next_ones()
            for node in np.argsort(finish, kind="stable")[:MOST_GRASPS].tolist():
                if not np.isfinite(finish[node]):
                    break
                one, hold, drop_joints, _ = scene.grasp(node)
                cycle = self._cycle(tried, Moment(home, now, 0), hold, drop_joints, scene.met_from_mm(node),
                                    float(watch.until_s[one.row]))
                if isinstance(cycle, Cycle):
                    return True
        return False

    def fitted_in(self, cell: Cell, k: int) -> tuple[Moment, Cycle] | None:
        """When the arm picks part k in that cell and makes all picks of the run as well; None: never.

        Of these moments the one at which the part is gripped soonest.
        """
        tried = self._tried(cell)
        window = tried.permit.mover.window_mm
        last_s = np.inf if window is None else self.set.belt.when(window[1] - float(self.watch.along_mm[k]))
        moments = self._moments(k, min(last_s, float(self.watch.until_s[k])))
        spare = (one for one in moments if self._spare(one, one.free_s + QUICK * self._shortest_s, window))
        for moment in islice(spare, MOST_MOMENTS):
            cycle = self._gripped(tried, k, moment, self.around(k, moment.free_s))
            if cycle is not None and self._spare(moment, cycle.release_end_s, window) and self._goes_on(
                    tried, moment, cycle):
                return moment, cycle
        return None

    def around(self, k: int, at_s: float) -> IntArray:
        """Rows of what lies around part k, in its tray or on the belt, at a time."""
        there = (self.watch.first_s <= at_s) & (self.gone_s > at_s) & (self.watch.until_s == self.watch.until_s[k])
        there[k] = False
        return np.flatnonzero(there)

    def passed_s(self, k: int) -> float:
        """When part k leaves the window or is taken away; no later than the run's end."""
        window = self.set.mover.window_mm
        leaves = np.inf if window is None else self.set.belt.when(window[1] - float(self.watch.along_mm[k]))
        return min(leaves, float(self.watch.until_s[k]), self.run.end_s)

    def room(self, cell: Cell, k: int, others: IntArray) -> tuple[Holds, FloatArray, IntArray] | None:
        """Holds of part k, the room each has beside the others (h, p), and the nearest jaws; None without a hold."""
        tried, part = self._tried(cell), self.set.parts[k]
        holds = tried.holds_of(k)
        if isinstance(holds, Refusal):
            return None
        return holds, *tried.neighbours.room(k, part.xy_mm, holds, others, self.xyyaw[others])

    def _tried(self, cell: Cell) -> _Tried:
        arm = gripper_arms(cell.arm, cell.tool)[0]
        mover = Mover(cell, arm, self.set.belt)
        if lift_limits(cell, arm) == self._lifts:  # else worked out anew, which takes a while
            mover.lift = self.set.mover.lift
        grasping = Grasping(cell, arm, tuple(Place.of(place) for place in cell.places))
        return _Tried(grasping, Permit(mover, grasping), Neighbours(self.set.parts, self.set.outlines, grasping))

    def _moments(self, k: int, last_s: float) -> list[Moment]:
        """When the arm came to rest, from the last time before part k was known on, until last_s."""
        picks = [pick.cycle for pick in self.run.picks]
        rests = [Moment(np.array(self.set.mover.arm.home), float(self.watch.known_s[0]), 0)]
        rests += [Moment(cycle.end_joints, cycle.release_end_s, n) for n, cycle in enumerate(picks, 1)]
        ends = [cycle.release_end_s for cycle in picks] + [np.inf]
        known = float(self.watch.first_s[k])
        return [Moment(rest.joints, max(rest.free_s, known), rest.after) for rest in rests
                if ends[rest.after] > known and rest.free_s < last_s]

    def _spare(self, moment: Moment, free_s: float, window: tuple[float, float] | None) -> bool:
        """Whether the picks after a moment have time enough, by and large, for an arm that is free only at free_s."""
        before = moment.free_s
        for pick in self.run.picks[moment.after:moment.after + MOST_REPLANNED]:
            late = free_s - max(pick.cycle.depart_s, before)
            if late <= 0:
                return True
            leaves = float(self.watch.until_s[pick.part.number - 1])
            if window is not None:
                leaves = min(leaves, self.set.belt.when(window[1] - float(self.watch.along_mm[pick.part.number - 1])))
            if pick.cycle.grasp_end_s + late > leaves + ROUGHLY_S:
                return False
            free_s, before = pick.cycle.release_end_s + late, pick.cycle.release_end_s
        return True

    def _gripped(self, tried: _Tried, k: int, moment: Moment, others: IntArray) -> Cycle | None:
        """The cycle by which the arm picks part k from a moment on."""
        part = self.set.parts[k]
        holds = tried.holds_of(k)
        if isinstance(holds, Refusal):
            return None
        room, _ = tried.neighbours.room(k, part.xy_mm, holds, others, self.xyyaw[others])
        roomy = room.min(axis=1, initial=np.inf) >= ROOM_MM
        for place in tried.grasping.cell.parts[part.kind].places:
            slot = self._next_slot(tried.grasping.places[place], moment)
            if slot is None:
                continue
            grasps = tried.grasping.pairs(part.kind, holds, place, slot)
            able = np.flatnonzero(roomy[grasps.hold])
            for row in able[np.argsort(grasps.carry_s[able], kind="stable")][:MOST_GRASPS].tolist():
                hold = int(grasps.hold[row])
                cycle = self._cycle(tried, moment, holds.holds[hold], grasps.drop_joints[row],
                                    holds.met_from_mm(hold), float(self.watch.until_s[k]))
                if isinstance(cycle, Cycle):
                    return cycle
        return None

    def _next_slot(self, place: Place, moment: Moment) -> int | None:
        """The slot of a place that is next after so many picks; None where the run leaves none over."""
        places, slots = [pick.place for pick in self.run.picks], len(place.slots_mm)
        if not place.endless and places.count(place.name) >= slots:
            return None
        return places[:moment.after].count(place.name) % slots

    def _goes_on(self, tried: _Tried, moment: Moment, cycle: Cycle) -> bool:
        """Whether the picks after a moment can all be made after this cycle too, each no later than its part allows."""
        for n, pick in enumerate(self.run.picks[moment.after:]):
            if n == MOST_REPLANNED:
                return False
            begin = max(cycle.release_end_s, pick.decided_s)
            again = self._cycle(tried, Moment(cycle.end_joints, begin, 0), pick.cycle.hold, pick.cycle.end_joints,
                                -np.inf, float(self.watch.until_s[pick.part.number - 1]))
            if isinstance(again, Refusal):
                return False
            if again.release_end_s <= pick.cycle.release_end_s + CAUGHT_UP_S:
                return True
            cycle = again
        return True

    def _cycle(self, tried: _Tried, moment: Moment, hold: Hold, drop_joints: FloatArray, from_mm: float,
               until_s: float) -> Cycle | Refusal:
        self._count()
        return tried.permit.cycle(moment.joints, moment.free_s, hold, drop_joints, from_mm, until_s)

    def _count(self) -> None:
        if not self.left:
            raise OutOfTrials
        self.left -= 1

    def _near(self, k: int, other: int) -> bool:
        return bool(np.hypot(*(self.xyyaw[k, :2] - self.xyyaw[other, :2])) < NEAR_MM)


def _never_picked(part: Part) -> Part:
    """The part as one seen too poorly to be picked: it lies in the way and no more."""
    known = part.known
    return replace(part, score=0.0, known=Known(known.row, known.xy_mm, known.yaw_rad, known.kind, known.side,
                                                np.zeros(len(known.row))))
