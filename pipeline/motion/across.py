"""The way across: J1, J2 and J4 together, from rest or from following a part, to rest or to meeting a part.

Each way is one jerk-limited ruckig move with all joints in time with each other. To meet a moving part exactly, the
time of the meeting is searched: the shortest T for which a move that ends at time T, in the state that following the
part asks for at time T, needs no longer than T.
"""

from collections.abc import Callable

import numpy as np
import ruckig
from numpy.typing import NDArray

from pipeline.arm import Arm
from pipeline.motion.curve import Curve, curves_of
from pipeline.motion.lift import MotionFault

FloatArray = NDArray[np.float64]
TURNING = [0, 1, 3]
EXACT_S = 1e-11
SEARCHES = 60

State = tuple[FloatArray, FloatArray, FloatArray]  # position, speed, acceleration of J1, J2, J4, each (3,)


class Across:
    """Moves of J1, J2 and J4 under an arm's limits."""

    def __init__(self, arm: Arm) -> None:
        self._planner = ruckig.Ruckig(3)
        self._ask = ruckig.InputParameter(3)
        self._ask.max_velocity = arm.limits.speed[TURNING].tolist()
        self._ask.max_acceleration = arm.limits.accel[TURNING].tolist()
        self._ask.max_jerk = arm.limits.jerk[TURNING].tolist()

    def between(self, start: State, end: State, least_s: float = 0.0) -> ruckig.Trajectory:
        """The quickest move from one state to another that takes no less than least_s; raises MotionFault."""
        ask = self._ask
        ask.current_position, ask.current_velocity, ask.current_acceleration = (x.tolist() for x in start)
        ask.target_position, ask.target_velocity, ask.target_acceleration = (x.tolist() for x in end)
        ask.minimum_duration = least_s if least_s > 0 else None
        trajectory = ruckig.Trajectory(3)
        result = self._planner.calculate(ask, trajectory)
        if result < 0:
            raise MotionFault(f"no move of J1, J2, J4 from {np.round(start[0], 4)} to {np.round(end[0], 4)} ({result})")
        return trajectory

    def meet(self, start: State, from_s: float, target: Callable[[float], State | None]) -> ruckig.Trajectory | None:
        """The soonest move that starts at from_s and ends in target(from_s + its duration); None where there is none.

        target answers None where the part can't be followed. Position at the end is exact to the speed of the part
        times EXACT_S. The search is a fixed point: the part is slow against the arm, so each step shrinks the error
        by about their ratio; where a joint can't make some durations the next possible one is taken.
        """
        wanted = 0.0
        for _ in range(SEARCHES):
            end = target(from_s + wanted)
            if end is None:
                return None
            trajectory = self.between(start, end, wanted)
            if trajectory.duration - wanted < EXACT_S:
                return trajectory
            wanted = trajectory.duration
        return None

    def arrive(self, start: State, at_s: float, target: Callable[[float], State | None]) -> ruckig.Trajectory | None:
        """The quickest move that ends in target(at_s), whenever it has to start; None where there is none."""
        end = target(at_s)
        return None if end is None else self.between(start, end)


def at_rest(joints: FloatArray) -> State:
    """The state of J1, J2, J4 at rest at (4,) joints."""
    still = np.zeros(3)
    return joints[TURNING], still, still


def across_curves(trajectory: ruckig.Trajectory, start_s: float) -> tuple[Curve, ...]:
    """Curves of J1, J2, J4 of a move that starts at start_s."""
    return curves_of(trajectory, start_s, (1.0, 1.0, 1.0))
