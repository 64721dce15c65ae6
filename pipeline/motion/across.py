"""The way across: J1, J2 and J4 together, from rest or from following a part, to rest or to meeting a part.

All joints end at the same time, that of the slowest. To meet a moving part exactly, the time of the meeting is
searched: the shortest T for which a move that ends at time T, in the state that following the part asks for at time T,
needs no longer than T. ruckig stretches the quicker joints to T; where a joint's profile can't be stretched so (a
moving end leaves gaps in the durations it can have) the joint waits at its resting end and moves in its own least time.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import ruckig
from numpy.typing import NDArray

from pipeline.arm import Arm
from pipeline.motion.curve import Curve, curves_of
from pipeline.motion.flip import flip_time
from pipeline.motion.lift import MotionFault

FloatArray = NDArray[np.float64]
TURNING = [0, 1, 3]
EXACT_S = 1e-11
HAIR_S = 1e-9
SETTLED_S = 1e-7
MOST_S = 60.0
SEARCHES, PATIENCE = 60, 40  # after so many steps any meeting will do

# all joints in time with each other, or one of them in its own least time: next to the resting end, or to the part
TOGETHER, J2_BY_REST, J2_BY_PART, J1_BY_REST, J1_BY_PART = range(5)
SHAPES = (TOGETHER, J2_BY_REST, J2_BY_PART, J1_BY_REST, J1_BY_PART)
_APART = {J2_BY_REST: 1, J2_BY_PART: 1, J1_BY_REST: 0, J1_BY_PART: 0}

State = tuple[FloatArray, FloatArray, FloatArray]  # position, speed, acceleration of J1, J2, J4, each (3,)


@dataclass(frozen=True)
class Way:
    """A way across: how long, and the curves of J1, J2, J4 from time 0."""

    duration: float
    curves: tuple[Curve, ...]


class Across:
    """Moves of J1, J2 and J4 under an arm's limits; singular: how far from 0 J2 must be at a part, rad."""

    def __init__(self, arm: Arm, singular: float) -> None:
        self._singular = singular
        self._limits = np.stack([arm.limits.speed, arm.limits.accel, arm.limits.jerk])[:, TURNING]
        self._planner, self._alone = ruckig.Ruckig(3), ruckig.Ruckig(1)
        self._ask = _asking(3, self._limits)
        self._asks = [_asking(1, self._limits[:, k:k + 1]) for k in range(3)]

    def between(self, start: State, end: State, least_s: float = 0.0, shape: int = TOGETHER,
                part_last: bool = True) -> Way:
        """The quickest move from one state to another that takes no less than least_s; raises MotionFault.

        One of the two states must be at rest; part_last says at which end the part is. Another shape than TOGETHER
        takes another way past what stands there, in the same time where it can.
        """
        trajectory = self._together(start, end, least_s)
        duration = max(least_s, self._least(trajectory, start, end, shape, part_last))
        if shape == TOGETHER and trajectory.duration <= duration + EXACT_S:
            return Way(trajectory.duration, curves_of(trajectory, 0.0, (1.0, 1.0, 1.0)))
        apart = _APART.get(shape, -1)
        curves = [self._one(k, start, end, duration, k == apart) for k in range(3)]
        if shape in (J2_BY_REST, J1_BY_REST):
            curves[apart] = self._by_rest(apart, start, end, part_last)[1](duration)
        return Way(duration, tuple(curves))

    def _least(self, together: ruckig.Trajectory, start: State, end: State, shape: int, part_last: bool) -> float:
        """Least time of a way of some shape."""
        least = max(together.independent_min_durations)
        if shape in (J2_BY_REST, J1_BY_REST):
            least = max(least, self._by_rest(_APART[shape], start, end, part_last)[0])
        return float(least)

    def _by_rest(self, k: int, start: State, end: State, part_last: bool) -> tuple[float, Callable[[float], Curve]]:
        """One joint that makes its way next to its resting end: the least time, and the curve for a longer one.

        Beside the part it stops from, or gathers, the speed of following. A way that ends at the part is one that
        begins there, read backwards.
        """
        here, there = (end, start) if part_last else (start, end)
        position, speed, accel = (float(x[k]) for x in here)
        state = (position, -speed if part_last else speed, accel)
        ask, stop, way = self._asks[k], ruckig.Trajectory(1), ruckig.Trajectory(1)
        ask.control_interface = ruckig.ControlInterface.Velocity
        rest = np.zeros(1)
        first = (np.array([state[0]]), np.array([state[1]]), np.array([state[2]]))
        _solve(self._alone, ask, first, (rest, rest, rest), 0.0, stop)
        ask.control_interface = ruckig.ControlInterface.Position
        stopped = curves_of(stop, 0.0, (1.0,))[0]
        standing = np.array([stopped.state(stopped.end_s)[0]])
        _solve(self._alone, ask, (standing, rest, rest), (there[0][k:k + 1], rest, rest), 0.0, way)

        def curve(duration: float) -> Curve:
            begin = duration - way.duration
            made = Curve.joined([stopped, Curve.held(float(standing[0]), stopped.end_s, begin),
                                 curves_of(way, begin, (1.0,))[0]])
            return made.backwards() if part_last else made

        return stop.duration + way.duration + 2 * EXACT_S, curve

    def meet(self, start: State, from_s: float, target: Callable[[float], State | None],
             least_s: float = 0.0, shape: int = TOGETHER) -> Way | None:
        """The soonest move that starts at from_s and ends in target(from_s + its duration); None where there is none.

        It takes no less than least_s; target is not asked for sooner times.

        target answers None where the part can't be followed. The end is met exactly, no later than SETTLED_S after the
        soonest time it can be. The search is a fixed point: the part is slow against the arm, so each step shrinks the
        error by about their ratio.
        """
        wanted = least_s
        for attempt in range(SEARCHES):
            end = target(from_s + wanted)
            if end is None:
                return None
            least = flip_time(float(start[0][1]), float(end[0][1]), self._singular)
            needed = max(least_s, least, self._least(self._together(start, end, 0.0), start, end, shape, True))
            if needed > MOST_S:
                return None
            spare = wanted - needed
            if spare >= 0 and (spare < SETTLED_S or attempt > PATIENCE):
                return self.between(start, end, wanted, shape)
            wanted = needed if needed == least_s else needed + 0.1 * SETTLED_S
        return None

    def _together(self, start: State, end: State, least_s: float) -> ruckig.Trajectory:
        trajectory = ruckig.Trajectory(3)
        _solve(self._planner, self._ask, start, end, least_s, trajectory)
        return trajectory

    def _one(self, k: int, start: State, end: State, duration: float, apart: bool) -> Curve:
        """One joint, in exactly that time: stretched, or (apart, or where it must) in its least time beside a rest."""
        first, last = ((x[k:k + 1], v[k:k + 1], a[k:k + 1]) for x, v, a in (start, end))
        trajectory = ruckig.Trajectory(1)
        _solve(self._alone, self._asks[k], first, last, duration, trajectory)
        if not apart and trajectory.duration <= duration + EXACT_S:
            return curves_of(trajectory, 0.0, (1.0,))[0]
        _solve(self._alone, self._asks[k], first, last, 0.0, trajectory)
        spare = duration - trajectory.duration
        if spare <= EXACT_S:
            return curves_of(trajectory, 0.0, (1.0,))[0]
        if first[1][0] == 0 and first[2][0] == 0:
            return Curve.joined([Curve.held(float(first[0][0]), 0.0, spare), curves_of(trajectory, spare, (1.0,))[0]])
        moving = curves_of(trajectory, 0.0, (1.0,))[0]
        return Curve.joined([moving, Curve.held(float(last[0][0]), moving.end_s, duration)])


def at_rest(joints: FloatArray) -> State:
    """The state of J1, J2, J4 at rest at (4,) joints."""
    still = np.zeros(3)
    return joints[TURNING], still, still


def _asking(joints: int, limits: FloatArray) -> ruckig.InputParameter:
    ask = ruckig.InputParameter(joints)
    ask.max_velocity, ask.max_acceleration, ask.max_jerk = limits.tolist()
    return ask


def _solve(planner: ruckig.Ruckig, ask: ruckig.InputParameter, start: State, end: State, least_s: float,
           trajectory: ruckig.Trajectory) -> None:
    ask.current_position, ask.current_velocity, ask.current_acceleration = (x.tolist() for x in start)
    ask.target_position, ask.target_velocity, ask.target_acceleration = (x.tolist() for x in end)
    ask.minimum_duration = least_s if least_s > 0 else None
    result = planner.calculate(ask, trajectory)
    if result < 0:  # set-points a rounding apart: a hair more time parts them
        ask.minimum_duration = least_s + HAIR_S
        result = planner.calculate(ask, trajectory)
    if result < 0:
        raise MotionFault(f"no move of J1, J2, J4 from {np.round(start[0], 4)} to {np.round(end[0], 4)} ({result})")
