"""The cycle of a grasp, and whether it may be carried out: limits, singularities, keep-outs and window all along it."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.belt import SMOOTHED_S
from pipeline.grasp import Grasping, Refusal
from pipeline.motion.across import SHAPES, TOGETHER, TURNING
from pipeline.motion.curve import Curve
from pipeline.motion.cycle import Cycle, Hold, Mover, Transfer
from pipeline.motion.flip import BESIDE_S
from pipeline.motion.lift import MotionFault

FloatArray = NDArray[np.float64]
FOLLOWED = 6  # times looked at while the tool is with the part, at least
STEP_S = 0.008  # between postures held against limits and keep-outs
SLACK_S = 0.008
WINDOW_MM = 0.05
ROUNDING = 1e-9


@dataclass(frozen=True)
class Permit:
    """Checks cycles of one gripper of an arm in one cell."""

    mover: Mover
    grasping: Grasping

    def cycle(self, start: FloatArray, free_s: float, hold: Hold, drop_joints: FloatArray, from_mm: float = -np.inf,
              until_s: float = np.inf, holds_on: bool = False) -> Cycle | Refusal:
        """The soonest cycle of a grasp by an arm at rest at start (4,) from free_s on, or why none can be carried out.

        from_mm: how far along the part must be before it is met. The ways to the part and to the slot are tried in
        turn, each for itself. holds_on: see Mover.pick.
        """
        met_from = self.mover.passes(hold, from_mm) if np.isfinite(from_mm) else -np.inf

        def made(out: int, back: int) -> Cycle | Refusal:
            try:
                cycle = self.mover.pick(start, free_s, hold, drop_joints, met_from, (out, back), holds_on)
            except MotionFault as fault:
                return Refusal("joint_limit", str(fault))
            return Refusal("too_late", "the arm can't meet it inside the window") if cycle is None else cycle

        def first_allowed(ways: Iterable[tuple[int, int]],
                          refused: Callable[[Cycle], Refusal | None]) -> tuple[int, Cycle | Refusal]:
            """The first way that is not refused; otherwise why the first one is."""
            failed: Refusal | None = None
            for k, way in enumerate(ways):
                one = made(*way)
                why = one if isinstance(one, Refusal) else self.at_part_refused(one, until_s) or refused(one)
                if why is None:
                    return k, one
                failed = failed or why
                if why.reason != "keepout" and k == 0:
                    break
            return -1, failed or Refusal("too_late", "no way to it")

        out, cycle = first_allowed(((shape, TOGETHER) for shape in SHAPES), self.out_refused)
        if isinstance(cycle, Refusal) or self.back_refused(cycle) is None:
            return cycle
        return first_allowed(((SHAPES[out], shape) for shape in SHAPES), self.back_refused)[1]

    def refused(self, cycle: Cycle, until_s: float = np.inf) -> Refusal | None:
        """Why a cycle may not be carried out, or None. until_s: when the part is taken away."""
        return self.at_part_refused(cycle, until_s) or self.out_refused(cycle) or self.back_refused(cycle)

    def at_part_refused(self, cycle: Cycle, until_s: float = np.inf) -> Refusal | None:
        """The same of window, following and heights: whatever way the arm takes to the part and from it."""
        return (self._window(cycle, until_s) or self._followed(cycle) or self._height(cycle)
                or self._keepouts(cycle, cycle.met_s, cycle.left_s))

    def out_refused(self, cycle: Cycle) -> Refusal | None:
        """The same of the way to the part. A start nearer to a limit than its margin is allowed for."""
        return (self._inside(cycle.out, cycle.start_joints)
                or self._beside(cycle, cycle.met_s - BESIDE_S + SLACK_S, cycle.met_s)
                or self._keepouts(cycle, cycle.depart_s, cycle.met_s))

    def back_refused(self, cycle: Cycle) -> Refusal | None:
        """The same of the way to the slot."""
        return (self._inside(cycle.back, None) or self._beside(cycle, cycle.left_s, cycle.left_s + BESIDE_S - SLACK_S)
                or self._keepouts(cycle, cycle.left_s, cycle.release_end_s))

    def _window(self, cycle: Cycle, until_s: float) -> Refusal | None:
        if cycle.grasp_end_s > until_s:
            return Refusal("too_late", f"gone {cycle.grasp_end_s - until_s:.2f} s before it could be lifted")
        if self.mover.window_mm is None:
            return None
        along = self.mover.belt.travel_mm(np.array([cycle.grasp_start_s, cycle.grasp_end_s]))
        along = along + cycle.hold.at_mm @ self.mover.belt.heading
        first, last = self.mover.window_mm
        if along.min() < first - WINDOW_MM:
            return Refusal("too_late", f"would be gripped {first - along.min():.1f} mm before the window")
        if along.max() > last + WINDOW_MM:
            return Refusal("too_late", f"would be gripped {along.max() - last:.1f} mm after the window's end")
        return None

    def _followed(self, cycle: Cycle) -> Refusal | None:
        t = np.linspace(cycle.met_s, cycle.left_s, FOLLOWED + int((cycle.left_s - cycle.met_s) / STEP_S))
        joints = self.mover.joints_on(cycle.hold, t)
        if not np.isfinite(joints).all():
            return Refusal("out_of_reach", "leaves the reach of the arm while it is followed")
        if np.abs(np.diff(joints[:, 0])).max() > np.pi:
            return Refusal("joint_limit", "J1 would have to turn back by a whole turn while it follows the part")
        joints[:, 2] = self.mover.joints(cycle, t)[:, 2]
        singular = self._singular(joints)
        if singular is not None:
            return singular
        over = _over(joints.min(axis=0), joints.max(axis=0), self.grasping.lower, self.grasping.upper)
        if over is not None:
            return over
        belt, limits = self.mover.belt, self.mover.arm.limits
        speed, accel = self.mover.arm.follow(joints, belt.speed_mm_s(t)[:, None] * belt.heading,
                                             belt.accel_mm_s2(t)[:, None] * belt.heading)
        # where frames come faster than the belt is smoothed one count is a large step: the jerk is then averaged
        apart = 1 if belt.smoothed_s >= SMOOTHED_S else FOLLOWED
        jerk = (accel[apart:] - accel[:-apart]) / (apart * (t[1] - t[0]))
        fast = ((np.abs(speed) / limits.speed).max(), (np.abs(accel) / limits.accel).max(),
                (np.abs(jerk) / limits.jerk).max(initial=0.0))
        if max(fast) > 1:
            return Refusal("joint_limit", f"following the belt would ask {100 * max(fast):.0f} % of a joint's limits")
        return None

    def _singular(self, joints: FloatArray) -> Refusal | None:
        bend = np.abs(joints[:, 1])
        if bend.min() < self.grasping.singular or bend.max() > np.pi - self.grasping.singular:
            return Refusal("joint_limit", "comes too near the stretched or folded arm beside the part")
        return None

    def _beside(self, cycle: Cycle, first_s: float, last_s: float) -> Refusal | None:
        """The same for a while before the part is met, or after it is left."""
        return self._singular(self.mover.joints(cycle, np.linspace(first_s, last_s, 9)))

    def _inside(self, curves: tuple[Curve, ...], start: FloatArray | None) -> Refusal | None:
        """A way across stays inside the limits less margins."""
        extremes = np.array([curve.extremes()[:2] for curve in curves])
        lower, upper = self.grasping.lower[TURNING], self.grasping.upper[TURNING]
        if start is not None:
            lower, upper = np.minimum(lower, start[TURNING]), np.maximum(upper, start[TURNING])
        low, high = (np.insert(x, 2, 0.0) for x in (extremes[:, 0], extremes[:, 1]))
        return _over(low, high, np.insert(lower, 2, -1.0), np.insert(upper, 2, 1.0))

    def _height(self, cycle: Cycle) -> Refusal | None:
        t = np.unique(np.concatenate([cycle.height.start_s, np.linspace(cycle.depart_s, cycle.release_end_s, 48)]))
        j3 = self.mover.joints(cycle, t)[:, 2]
        lower = min(float(self.grasping.lower[2]), float(cycle.start_joints[2]))
        upper = max(float(self.grasping.upper[2]), float(cycle.start_joints[2]))
        if j3.min() >= lower - 1e-6 and j3.max() <= upper + 1e-6:
            return None
        wrong, limit = (j3.min(), lower) if j3.min() < lower - 1e-6 else (j3.max(), upper)
        return Refusal("joint_limit", f"J3 would need {wrong:.1f} mm, limit less margin {limit:.1f}")

    def _keepouts(self, cycle: Cycle, first_s: float, last_s: float) -> Refusal | None:
        if not self.grasping.cell.keepouts:
            return None
        return self._near(self.mover.joints(cycle, _times(first_s, last_s)))

    def transfer_refused(self, way: Transfer) -> Refusal | None:
        """Why a way without a part may not be taken, or None."""
        return self._near(self.mover.transfer_joints(way, _times(way.depart_s, way.end_s)))

    def set_down_refused(self, way: Transfer) -> Refusal | None:
        """The same of a way from slot to slot, which has to keep J3's limits as well."""
        j3 = self.mover.transfer_joints(way, _times(way.depart_s, way.end_s))[:, 2]
        if j3.min() < self.grasping.lower[2] - 1e-6 or j3.max() > self.grasping.upper[2] + 1e-6:
            return Refusal("joint_limit", f"J3 would go from {j3.min():.1f} to {j3.max():.1f} mm")
        return self.transfer_refused(way)

    def _near(self, joints: FloatArray) -> Refusal | None:
        if not self.grasping.cell.keepouts:
            return None
        near = self.grasping.keepouts.near(joints)
        worst = int(near.gap_mm.argmin())
        if near.gap_mm[worst] >= 0:
            return None
        name = self.grasping.keepouts.names[near.keepout[worst]]
        return Refusal("keepout", f"would enter {name or 'a keep-out'} by {-near.gap_mm[worst]:.1f} mm on the way")


def _times(first: float, last: float) -> FloatArray:
    return np.linspace(first, last, int((last - first) / STEP_S) + 2)


def _over(low: FloatArray, high: FloatArray, lower: FloatArray, upper: FloatArray) -> Refusal | None:
    """The worst of the joints that would leave their limits."""
    over = np.maximum(lower - low, high - upper)
    if (over <= ROUNDING).all():
        return None
    over[2] *= np.pi / 180  # a millimetre weighs as a degree
    j = int(over.argmax())
    wrong, limit = (high[j], upper[j]) if high[j] > upper[j] + ROUNDING else (low[j], lower[j])
    scale, unit = (1.0, "mm") if j == 2 else (180 / np.pi, "deg")
    told = f"J{j + 1} would need {wrong * scale:.1f} {unit}, limit less margin {limit * scale:.1f}"
    return Refusal("joint_limit", told)
