"""The way across: J1, J2 and J4 together, from rest or from following a part, to rest or to meeting a part.

All joints end at the same time, that of the slowest. To meet a moving part exactly, the time of the meeting is searched:
the shortest T for which a move that ends at time T, in the state that following the part asks for at time T, needs no
longer than T. ruckig stretches the quicker joints to T; where a joint's profile can't be stretched so (a moving end
leaves gaps in the durations it can have) the joint waits at its resting end and moves in its own least time.
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
SETTLED_S = 1e-7
MOST_S = 60.0
SEARCHES, PATIENCE = 60, 40  # after so many steps any meeting will do

TOGETHER, APART_J1, APART_J2 = range(3)  # all joints in time with each other, or one of them in its own least time

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

    def between(self, start: State, end: State, least_s: float = 0.0, shape: int = TOGETHER) -> Way:
        """The quickest move from one state to another that takes no less than least_s; raises MotionFault.

        One of the two states must be at rest. APART_J1, APART_J2: that joint moves in its own least time, next to the
        moving end; it takes another way past what stands there, in the same time.
        """
        trajectory = self._together(start, end, least_s)
        duration = max(least_s, *trajectory.independent_min_durations)
        if shape == TOGETHER and trajectory.duration <= duration + EXACT_S:
            return Way(trajectory.duration, curves_of(trajectory, 0.0, (1.0, 1.0, 1.0)))
        return Way(duration, tuple(self._one(k, start, end, duration, apart=k == shape - 1) for k in range(3)))

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
            needed = max(least_s, least, *self._together(start, end, 0.0).independent_min_durations)
            if needed > MOST_S:
                return None
            spare = wanted - needed
            if 0 <= spare and (spare < SETTLED_S or attempt > PATIENCE):
                return self.between(start, end, wanted, shape)
            wanted = needed if needed == least_s else needed + 0.1 * SETTLED_S
        return None

    def _together(self, start: State, end: State, least_s: float) -> ruckig.Trajectory:
        trajectory = ruckig.Trajectory(3)
        _solve(self._planner, self._ask, start, end, least_s, trajectory)
        return trajectory

    def _one(self, k: int, start: State, end: State, duration: float, apart: bool) -> Curve:
        """One joint, in exactly that time: stretched, or (apart, or where it must) in its least time beside a rest."""
        first, last = (tuple(x[k:k + 1] for x in state) for state in (start, end))
        trajectory = ruckig.Trajectory(1)
        _solve(self._alone, self._asks[k], first, last, duration, trajectory)  # type: ignore[arg-type]
        if not apart and trajectory.duration <= duration + EXACT_S:
            return curves_of(trajectory, 0.0, (1.0,))[0]
        _solve(self._alone, self._asks[k], first, last, 0.0, trajectory)  # type: ignore[arg-type]
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
    if result < 0:
        raise MotionFault(f"no move of J1, J2, J4 from {np.round(start[0], 4)} to {np.round(end[0], 4)} ({result})")
