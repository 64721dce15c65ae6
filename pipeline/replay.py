"""The replay: the clock, what is known when, what the arm does, what becomes of each part.

With several grippers a pick may begin a trip of several (see `pipeline.trip`), at a tray with those that its order says
(see `pipeline.tray_trips`) or with the parts nearest by.
"""

import gc
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from cameras.recording import Recording
from pipeline.arm import Arm, gripper_arms
from pipeline.belt import Belt
from pipeline.cell import Cell
from pipeline.follow import Part
from pipeline.grasp import Grasping, Refusal
from pipeline.legs import Legs
from pipeline.motion.across import SHAPES
from pipeline.motion.cycle import Cycle, Mover, Transfer
from pipeline.permit import Permit
from pipeline.places import Filling, Place
from pipeline.policy import Arrival, Nearest, Picked, Policy
from pipeline.scene import Scene, SceneBuilder
from pipeline.tray_trips import TrayTrips
from pipeline.trip import Chosen, Pick, Trip, alone, closed, held_on
from pipeline.watch import Watch

FloatArray = NDArray[np.float64]
LEAST_SCORE = 0.5
MOST_TRIES = 24  # grasps tried at one moment before the arm waits for news
NEWS_S = 1e-6
RETRY_S, MOST_RETRIES = 0.1, 100
NEAR_MM = 60.0  # so near a ready pose the arm stays where it is


@dataclass(frozen=True)
class Run:
    """A whole replay. fates: for each part the Refusal it was missed for, or None where it was picked."""

    parts: tuple[Part, ...]
    picks: tuple[Pick, ...]
    fates: tuple[Refusal | None, ...]
    order: str
    mover: Mover
    start_s: float
    end_s: float
    home: Transfer | None
    decide_s: tuple[float, ...]
    notes: tuple[str, ...] = ()
    waits: tuple[Transfer, ...] = ()


@dataclass(frozen=True)
class Setting:
    """All that stays the same while orders are tried: cell, recording, its parts, and what follows from them.

    outlines: of each kind, (k, 2) mm in the grip frame or the radius of a disc. grasping: of the first gripper;
    graspings: of each.
    """

    cell: Cell
    recording: Recording
    parts: tuple[Part, ...]
    outlines: Mapping[str, FloatArray | float]
    least_score: float = LEAST_SCORE
    belt: Belt = field(init=False)
    mover: Mover = field(init=False)
    grasping: Grasping = field(init=False)
    graspings: tuple[Grasping, ...] = field(init=False)
    legs: Legs = field(init=False)

    def __post_init__(self) -> None:
        """Work out what follows."""
        arm = Arm(self.cell.arm, self.cell.tool)
        belt = Belt(self.recording.times_s, self.recording.counts, self.cell.belt)
        grippers = gripper_arms(self.cell.arm, self.cell.tool)
        mover, places = Mover(self.cell, arm, belt, grippers), tuple(Place.of(place) for place in self.cell.places)
        graspings = tuple(Grasping(self.cell, one, places, k) for k, one in enumerate(grippers))
        for name, value in (("belt", belt), ("mover", mover), ("grasping", graspings[0]), ("graspings", graspings),
                            ("legs", Legs(mover))):
            object.__setattr__(self, name, value)
        self._time_lifts()

    def _time_lifts(self) -> None:
        """Work out the lifts between all heights the arm will rest at, so that no decision waits for one."""
        grips = {self.cell.surface_mm + (part.grasp_mm if grip.grasp_mm is None else grip.grasp_mm)
                 for part in self.cell.parts.values() for grip in self.grasping.grips(part)}
        rests = {round(float(z), 6) for place in self.grasping.places.values() for z in place.slots_mm[:, 2]}
        rests.add(round(float(self.mover.arm.forward(self.mover.arm.home)[2]), 6))
        for rest in sorted(rests):
            for grip in sorted(grips):
                self.legs.time_lifts(rest, grip)


def replay(setting: Setting, policy: Policy, name: str, horizon: int,
           tick: Callable[[float], None] = lambda now: None, at_once: int = 1) -> Run:
    """Replay a recording under one policy. tick is told the time the replay has come to.

    at_once: most parts the arm holds together; no more than there are grippers.
    """
    return _Clock(setting, policy, name, horizon, tick, at_once).run()


def replay_ahead(setting: Setting, policy: Policy, name: str, horizon: int,
                 tick: Callable[[float], None] = lambda now: None) -> Run:
    """Replay under a policy that looks ahead; where arrival picks more parts or weight, its run, and a note in it."""
    ahead = replay(setting, policy, name, horizon, tick)
    if len(ahead.picks) == len(setting.parts):
        return ahead
    plain = replay(setting, Arrival(), name, horizon)
    if _worth(setting, plain) <= _worth(setting, ahead) + 1e-9 and len(plain.picks) <= len(ahead.picks):
        return ahead
    note = (f"by {name} {len(ahead.picks)} parts of weight {_worth(setting, ahead):g} would be picked, by arrival "
            f"{len(plain.picks)} of {_worth(setting, plain):g}: this run is by arrival")
    return replace(plain, notes=(note,))


def replay_trips(setting: Setting, policies: Sequence[Policy], name: str, horizon: int, single: Run) -> Run:
    """Replay with all grippers, by the first of the policies that picks all no later than `single` (the run with the
    first gripper alone), otherwise by the best one; where `single` does better, that run, and a note in it.

    Better is more weight, then more parts; and, of a tray, an earlier end.
    """
    many = len(setting.graspings)
    runs = list[Run]()
    for policy in policies:
        runs.append(replay(setting, policy, name, horizon, at_once=many))
        if len(runs[-1].picks) == len(setting.parts) and _last_s(runs[-1]) <= _last_s(single):
            break
    trips = max(runs, key=lambda run: (_worth(setting, run), len(run.picks), -_last_s(run)))
    enough = _worth(setting, trips) >= _worth(setting, single) - 1e-9 and len(trips.picks) >= len(single.picks)
    more = len(trips.picks) > len(single.picks)
    if enough and (more or setting.cell.belt is not None or _last_s(trips) <= _last_s(single)):
        return _with_gap(trips, policies)
    note = (f"with {many} grippers {_told(setting, trips)} would be picked, with the first one alone "
            f"{_told(setting, single)}: this run is with the first one alone")
    return _with_gap(replace(single, notes=(*single.notes, note)), policies)


def _with_gap(run: Run, policies: Sequence[Policy]) -> Run:
    """The run, and in its notes how much sooner a tray could have been empty at most, where that is known."""
    for one in (policy for policy in policies if isinstance(policy, TrayTrips)):
        bound = one.bound(run.picks)
        if np.isfinite(bound):
            gap = (_last_s(run) - bound) / (_last_s(run) - one.planned_s)
            note = (f"no trips into the same slots, with the grippers in turn, end before {bound:.2f} s: a gap of "
                    f"{100 * gap:.1f} % at most")
            return replace(run, notes=(*run.notes, note))
    return run


def _told(setting: Setting, run: Run) -> str:
    return f"{len(run.picks)} parts of weight {_worth(setting, run):g} by {_last_s(run):.2f} s"


def _last_s(run: Run) -> float:
    """When the last part is set down."""
    return max((pick.release_end_s for pick in run.picks), default=np.inf)


def _worth(setting: Setting, run: Run) -> float:
    return sum(setting.cell.parts[pick.part.kind].weight for pick in run.picks)


@contextmanager
def _uncollected() -> Iterator[None]:
    """Leave garbage until the arm moves: to look through all that an hour's run keeps takes longer than to decide."""
    was = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was:
            gc.enable()


class _Clock:
    """The run of one replay."""

    def __init__(self, setting: Setting, policy: Policy, name: str, horizon: int,
                 tick: Callable[[float], None], at_once: int) -> None:
        self.set, self.policy, self.name, self.horizon, self.tick = setting, policy, name, horizon, tick
        self.watch = Watch(setting.cell, setting.recording, setting.belt, setting.parts)
        used = setting.graspings[:at_once]
        self.builders = [SceneBuilder(setting.cell, self.watch, grasping, setting.legs, setting.outlines,
                                      setting.least_score) for grasping in used]
        self.permits = tuple(Permit(setting.mover, grasping) for grasping in used)
        self.filling = Filling(tuple(setting.grasping.places.values()))
        self.further = (policy if setting.cell.belt else Nearest()).choose  # a tray's order is one of single picks
        self.trips = policy if isinstance(policy, TrayTrips) else None
        if self.trips:
            self.further, self.trips.filling = self.trips.further, self.filling
        self.arm = setting.grasping.arm
        self.joints = np.array(self.arm.home)
        self.waits: list[Transfer] = []
        self.picks: list[Pick] = []
        self.tried: dict[int, Refusal] = {}
        self.decide_s: list[float] = []
        self.turned_down = False
        self.free_s = -np.inf

    def run(self) -> Run:
        """From the first frame until nothing is left to pick."""
        now = float(self.watch.known_s[0])
        start = float(self.set.recording.times_s[0])
        tries = 0  # since anything new was known or done
        while np.isfinite(now) and tries < MOST_RETRIES:
            self.tick(now)
            one = self._decide(now, self.joints, now)
            for gripper in range(1, len(self.permits)):  # what the first can't have now, another may
                one = one or (None if self.turned_down else self._decide(now, self.joints, now, gripper))
            pick = one.pick if one else None
            news, later = self.watch.next_news(now), self.watch.next_frame(now)
            tries = 0 if pick or np.isfinite(later) else tries + 1
            idle = pick is None and not self.turned_down and np.isfinite(later)
            wait = self._get_ready(now) if idle else None
            if wait is not None:
                now = wait.end_s
            elif one is None or pick is None:  # what can't be had now may be had a little farther on
                now = min(later, now + RETRY_S) if self.turned_down else later
            elif pick.cycle.depart_s > news + NEWS_S:  # nothing is under way yet: decide anew with what comes
                now = min(news, now + RETRY_S) if self.turned_down else news
            else:
                now = self._carry_out(one)
        last = max(float(self.set.recording.times_s[-1]), self.free_s)
        return Run(self.set.parts, tuple(self.picks), self._fates(), self.name, self.set.mover, start, last,
                   self._home(), tuple(self.decide_s), waits=tuple(self.waits))

    def _get_ready(self, now: float) -> Transfer | None:
        """Go and wait near where the next part will be. (For a part that is known the arm waits where it is.)"""
        ready = self._ready_pose()
        if ready is None or np.hypot(*(self.arm.forward(self.joints)[:2] - self.arm.forward(ready)[:2])) < NEAR_MM:
            return None
        for shape in SHAPES:
            way = self.set.mover.transfer(self.joints, now, ready, shape)
            if self.permits[0].transfer_refused(way) is None:
                self.waits.append(way)
                self.joints = way.end_joints
                return way
        return None

    def _ready_pose(self) -> FloatArray | None:
        """Joints over the place where the next part is likely to be gripped; None where that can't be said."""
        at = self.watch.expected_mm()
        if not np.isfinite(at).all():
            return None
        motion = self.set.cell.motion
        height = max(motion.travel_mm, motion.clear_height_mm)
        return self.set.grasping.above(at, height, self.arm.home)

    @_uncollected()
    def _decide(self, now: float, start: FloatArray, free_s: float, gripper: int = 0) -> Chosen | None:
        """The next pick as it would be carried out from rest at start (4,), from what is known now."""
        banned: set[tuple[int, int]] = set()
        self.turned_down = False
        begun = time.perf_counter()
        for _ in range(MOST_TRIES):
            scene, picked = self._chosen(now, start, gripper, banned)
            if scene is None or picked is None:
                break
            one, hold, drop_joints, drop_pose = scene.grasp(picked.node)
            spent = time.perf_counter() - begun
            asked = free_s, scene.met_from_mm(picked.node), float(self.watch.until_s[one.row])
            cycle = self.permits[gripper].cycle(start, asked[0], hold, drop_joints, *asked[1:])
            if isinstance(cycle, Cycle):
                self.decide_s.append(spent)
                self.turned_down = bool(banned)
                pick = Pick(one.part, now, cycle, one.place, one.slot, drop_pose, picked, len(scene.candidates), spent)
                return Chosen(pick, scene.grip(picked.node), *asked)
            if gripper == 0:
                self.tried[one.row] = cycle
            banned |= scene.alike(picked.node)
        self.turned_down = bool(banned)
        return None

    def _chosen(self, now: float, start: FloatArray, gripper: int,
                banned: set[tuple[int, int]]) -> tuple[Scene | None, Picked | None]:
        """What there is to choose from, and what is chosen; of a tray's order in trips what is next, if that can be."""
        scene, picked = None, None
        for only in (self.trips.wanted(gripper), ()) if self.trips else ((),):
            scene = self.builders[gripper].scene(now, start, self.filling, self.horizon, banned, only)
            picked = (self.further if gripper else self.policy.choose)(scene.choice) if scene else None
            if picked is not None:
                break
        return scene, picked

    def _carry_out(self, one: Chosen) -> float:
        """Let the pick happen, and those that follow before anything is set down; the time the arm is free again."""
        trip: Trip | None = alone(one)
        while trip is not None:
            done, last = trip, trip.chosen[-1].pick
            self.filling.fill(last.place)
            self.watch.gripped[last.part.number - 1] = True
            trip = self._longer(trip) if last.gripper + 1 < len(self.permits) else None
        self.picks += done.picks
        self.joints, self.free_s = done.end_joints, done.end_s
        return self.free_s

    def _longer(self, trip: Trip) -> Trip | None:
        """The trip with another pick before anything is set down; None where there is none, or it loses by it."""
        gripper = trip.chosen[-1].pick.gripper + 1
        kept = held_on(trip.chosen[-1], self.permits[gripper - 1])
        if kept is None:
            return None
        cycle = kept.pick.cycle
        after = self._decide(cycle.grasp_end_s, cycle.end_joints, cycle.release_end_s, gripper)
        longer = closed((*trip.chosen[:-1], kept, after), self.permits) if after else None
        return longer if longer and (self.trips or longer.rate >= trip.rate) else None

    def _fates(self) -> tuple[Refusal | None, ...]:
        picked = {pick.part.number for pick in self.picks}
        return tuple(None if part.number in picked else self._missed(k) for k, part in enumerate(self.set.parts))

    def _missed(self, k: int) -> Refusal:
        part = self.set.parts[k]
        if not part.kind:
            return Refusal("unknown", "not one of the taught parts")
        if part.side == "down":
            return Refusal("wrong_side", "lies on its wrong side")
        if part.score < self.set.least_score:
            return Refusal("low_score", f"score {part.score:.2f}, asked for {self.set.least_score:.2f}")
        refusal = self.builders[0].refusals.get(k) or self.builders[0].crowded.get(k)
        if refusal is not None:
            return refusal
        tried = self.tried.get(k)
        if tried is not None and tried.reason == "keepout":
            return tried
        return Refusal("too_late", tried.detail if tried else "left the window while the arm was busy with others")

    def _home(self) -> Transfer | None:
        """The way home after the last pick; None where there is none past the keep-outs."""
        if not self.picks:
            return None
        free = max([self.free_s, *(way.end_s for way in self.waits)])
        ways = (self.set.mover.home(self.joints, free, shape) for shape in SHAPES)
        return next((way for way in ways if self.permits[0].transfer_refused(way) is None), None)
