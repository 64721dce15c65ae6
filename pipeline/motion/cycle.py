"""One pick from rest to rest: to a moving part, with it, and on to its slot.

    depart   lift up, across as soon as the gate is passed, until the part is met in position, speed and acceleration
    met      down on the part while moving with it
    grasp    contact, dwell moving with it, then straight up, still moving with it
    left     across to the slot while the tip goes over the gate, then straight down
    release  contact at rest, dwell

The joints that turn and the tip's height are planned apart and meet at the gates; J3 follows from height and J4.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from pipeline.arm import Arm
from pipeline.belt import Belt
from pipeline.cell import Cell
from pipeline.motion.across import TOGETHER, TURNING, Across, State, Way, at_rest
from pipeline.motion.curve import Curve
from pipeline.motion.flip import flip_time
from pipeline.motion.lift import Lift, LiftLimits

FloatArray = NDArray[np.float64]
SETTLED_S = 1e-7
SETTLING = 40
LEAST_SPARE = 0.2
STOP_S, ABOVE_MM = 0.05, 0.01  # an arm that holds on stops so soon after leaving a part, so far above the gate


@dataclass(frozen=True)
class Hold:
    """A gripper on a part: tip (x, y at counts 0, yaw), height in the cell frame, elbow and whole turns of J4."""

    at_mm: FloatArray
    yaw: float
    z_mm: float
    elbow: int
    turn: int
    gripper: int = 0


@dataclass(frozen=True)
class Cycle:
    """A pick as it is carried out. Times in s; joints (4,) rad and mm; curves of J1, J2, J4 and of the tip's height.

    Where the arm holds the part and goes on to another one, it ends at rest above the gate: release takes no time.
    """

    hold: Hold
    depart_s: float
    across_s: float
    met_s: float
    grasp_start_s: float
    grasp_end_s: float
    left_s: float
    there_s: float
    release_start_s: float
    release_end_s: float
    start_joints: FloatArray
    end_joints: FloatArray
    out: tuple[Curve, ...]
    back: tuple[Curve, ...]
    height: Curve


@dataclass(frozen=True)
class Transfer:
    """A way from rest to rest without a part: curves of J1, J2, J4 and of the tip's height."""

    depart_s: float
    end_s: float
    across: tuple[Curve, ...]
    height: Curve
    end_joints: FloatArray


class Mover:
    """Motion of one arm in one cell, along one belt. grippers: the arm with its tip at each of them; else the tool's.

    A gripper's place changes which joints bring it to a pose, not how joints move, nor how high the tip is.
    """

    def __init__(self, cell: Cell, arm: Arm, belt: Belt, grippers: tuple[Arm, ...] = ()) -> None:
        self.arm, self.belt, self.motion = arm, belt, cell.motion
        self.grippers = grippers or (arm,)
        self.window_mm = cell.belt.window_mm if cell.belt else None
        self.singular = float(np.radians(cell.motion.singularity_deg))
        self.across = Across(arm, self.singular)
        self._lift_limits = lift_limits(cell, arm)
        self.lift = lru_cache(maxsize=512)(self._lift)

    def _lift(self, from_mm: float, to_mm: float, stays_up: bool = False) -> Lift:
        clear = self.motion.clear_height_mm
        return Lift(from_mm, to_mm, clear, clear if stays_up else max(clear, to_mm + self.motion.approach_mm),
                    self.motion.travel_mm, self._lift_limits)

    def lift_from(self, joints: FloatArray, to_mm: float) -> Lift:
        """The lift from rest at joints (4,) to a height."""
        return self.lift(round(float(self.arm.forward(joints)[2]), 6), round(to_mm, 6))

    def joints_on(self, hold: Hold, t: FloatArray) -> FloatArray:
        """Joints (n, 4) that keep the tool on the part at times t (n,); NaN where it is out of reach."""
        poses = np.empty((len(t), 4))
        poses[:, :2] = hold.at_mm + self.belt.shift_mm(t)
        poses[:, 2], poses[:, 3] = hold.z_mm, hold.yaw
        arm = self.grippers[hold.gripper]
        return turned(arm, arm.inverse(poses)[:, hold.elbow], hold.yaw, hold.turn)

    def ready_after(self, cycle: Cycle) -> FloatArray:
        """Joints (4,) at rest above the gate where the arm stops soon after it has left the part; NaN out of reach."""
        ready: FloatArray = self.joints_on(cycle.hold, np.array([cycle.left_s + STOP_S]))[0]
        ready[2] = quill(self.arm, max(self.motion.travel_mm, self.motion.clear_height_mm) + ABOVE_MM, ready[3])
        return ready

    def state_on(self, hold: Hold, t: float) -> State | None:
        """Position, speed and acceleration of J1, J2, J4 while the tool is on the part; None out of reach."""
        joints = self.joints_on(hold, np.array([t]))[0]
        speed, accel = self.arm.follow(joints, float(self.belt.speed_mm_s(t)) * self.belt.heading,
                                       float(self.belt.accel_mm_s2(t)) * self.belt.heading)
        state = joints[TURNING], speed[TURNING], accel[TURNING]
        limits = self.arm.limits
        if not np.isfinite(np.concatenate(state)).all():
            return None
        if (np.abs(state[1]) >= limits.speed[TURNING]).any() or (np.abs(state[2]) >= limits.accel[TURNING]).any():
            return None
        return state

    def pick(self, start: FloatArray, free_s: float, hold: Hold, place_joints: FloatArray, met_from_s: float = -np.inf,
             shapes: tuple[int, int] = (TOGETHER, TOGETHER), holds_on: bool = False) -> Cycle | None:
        """The soonest pick of a part by an arm at rest at start (4,) from free_s on; None where it can't be met.

        met_from_s: the part is met no sooner. shapes: of the ways to the part and to the slot, see Across.between.
        holds_on: the part is kept in the gripper, and place_joints are above the gate.
        Raises MotionFault where ruckig refuses a move.
        """
        lift = self.lift_from(start, hold.z_mm)
        enters = -np.inf if self.window_mm is None else self.passes(hold, self.window_mm[0])
        soonest = max(met_from_s, enters - lift.fall_s)
        if soonest == np.inf:
            return None  # the belt never brings it that far
        meeting = self._waited_for(start, free_s, (soonest, enters), hold, lift, shapes[0])
        if meeting is None:
            meeting = self._meet_soonest(start, free_s, soonest, hold, lift, shapes[0])
        if meeting is None:
            return None
        down = lift.curve(meeting.above_s(lift))
        grasp_start = meeting.depart_s + down.end_s
        grasp_end = grasp_start + self.motion.grasp_s
        lift = self.lift(round(hold.z_mm, 6), round(float(self.arm.forward(place_joints)[2]), 6), holds_on)
        leaving = self._leave(hold, grasp_end, place_joints, lift, shapes[1])
        if leaving is None:
            return None
        up = lift.curve(leaving.above_s(lift))
        left = grasp_end + leaving.rise_s
        there = left + leaving.move.duration
        release = max(grasp_end + up.end_s, there) if holds_on else grasp_end + up.end_s
        released = release if holds_on else release + self.motion.release_s
        height = Curve.joined([down.later(meeting.depart_s), Curve.held(hold.z_mm, grasp_start, grasp_end),
                               up.later(grasp_end)])
        across_s = meeting.depart_s + meeting.rise_s
        return Cycle(hold, meeting.depart_s, across_s, across_s + meeting.move.duration, grasp_start, grasp_end, left,
                     there, release, released, start, place_joints,
                     tuple(curve.later(across_s) for curve in meeting.move.curves),
                     tuple(curve.later(left) for curve in leaving.move.curves), height)

    def home(self, start: FloatArray, depart_s: float, shape: int = TOGETHER) -> Transfer:
        """From rest at joints (4,) to the arm's home, at home's height or, where that is below it, the clear height."""
        end = np.array(self.arm.home)
        height = max(float(self.arm.forward(end)[2]), self.motion.clear_height_mm)
        end[2] = quill(self.arm, height, end[3])
        return self.transfer(start, depart_s, end, shape)

    def transfer(self, start: FloatArray, depart_s: float, end: FloatArray, shape: int = TOGETHER) -> Transfer:
        """From rest at joints (4,) to rest at others: straight up to the gate, across, and straight down from it."""
        lift = self.lift_from(start, float(self.arm.forward(end)[2]))
        move = self.across.between(at_rest(start), at_rest(end), shape=shape)
        across_s, up = depart_s + lift.rise_s(move.duration), lift.curve(move.duration).later(depart_s)
        return Transfer(depart_s, max(across_s + move.duration, up.end_s),
                        tuple(curve.later(across_s) for curve in move.curves), up, end)

    def passes(self, hold: Hold, along_mm: float) -> float:
        """When a part passes a distance along the heading; inf where the belt never gets there."""
        target = along_mm - float(hold.at_mm @ self.belt.heading)
        return self.belt.when(target)

    def _waited_for(self, start: FloatArray, free_s: float, opens: tuple[float, float], hold: Hold, lift: Lift,
                    shape: int) -> "_Leg | None":
        """The way to a part that comes in reach later than the arm could be there; None where the arm is the later one.

        opens: the part is met no sooner, and gripped no sooner.
        """
        soonest, enters = opens
        if not np.isfinite(soonest) or soonest <= free_s:
            return None
        leg = self._meet_at(start, soonest, hold, lift, shape)
        if leg is not None and leg.depart_s + lift.total_s(leg.above_s(lift)) < enters:
            leg = self._contact_at(start, enters, hold, lift, shape)
        return leg if leg is not None and leg.depart_s >= free_s else None

    def _meet_soonest(self, start: FloatArray, free_s: float, soonest: float, hold: Hold, lift: Lift,
                      shape: int) -> "_Leg | None":
        """The soonest way to a part that is not met before `soonest`."""
        rise = lift.rise_s(np.inf)
        for _ in range(SETTLING):
            least = max(0.0, soonest - free_s - rise)
            move = self.across.meet(at_rest(start), free_s + rise, lambda t: self.state_on(hold, t), least, shape)
            if move is None:
                return None
            needed = lift.rise_s(move.duration)
            if needed <= rise + SETTLED_S:
                break
            rise = needed
        return None if move is None else _Leg(free_s, rise, move)

    def _meet_at(self, start: FloatArray, met_s: float, hold: Hold, lift: Lift, shape: int) -> "_Leg | None":
        """The way that meets the part at met_s, begun as late as that allows."""
        state = self.state_on(hold, met_s) if np.isfinite(met_s) else None
        if state is None:
            return None
        least = flip_time(float(start[1]), float(state[0][1]), self.singular)
        if not np.isfinite(least):
            return None
        move = self.across.between(at_rest(start), state, least, shape)
        rise = lift.rise_s(move.duration)
        return _Leg(met_s - move.duration - rise, rise, move)

    def _contact_at(self, start: FloatArray, contact_s: float, hold: Hold, lift: Lift, shape: int) -> "_Leg | None":
        """The way that makes contact at contact_s, begun as late as that allows."""
        met, leg = contact_s, None
        for _ in range(SETTLING):
            leg = self._meet_at(start, met, hold, lift, shape)
            if leg is None:
                return None
            late = contact_s - leg.depart_s - lift.total_s(leg.above_s(lift))
            if abs(late) < SETTLED_S:
                break
            met += late
        return leg

    def _leave(self, hold: Hold, grasp_end: float, place_joints: FloatArray, lift: Lift,
               shape: int) -> "_Leg | None":
        """From the part to rest over the slot."""
        rise = lift.rise_s(np.inf)
        for _ in range(SETTLING):
            state = self.state_on(hold, grasp_end + rise)
            if state is None:
                return None
            least = flip_time(float(place_joints[1]), float(state[0][1]), self.singular)
            if not np.isfinite(least):
                return None
            move = self.across.between(state, at_rest(place_joints), least, shape, part_last=False)
            needed = lift.rise_s(move.duration)
            if needed <= rise + SETTLED_S:
                break
            rise = needed
        return _Leg(grasp_end, rise, move)

    def joints(self, cycle: Cycle, t: FloatArray) -> FloatArray:
        """Joints (n, 4) at times t (n,) of a cycle; before it the start's, after it the slot's."""
        q = np.empty((len(t), 4))
        with_part = (t >= cycle.met_s) & (t < cycle.left_s)
        before = t < cycle.met_s
        for k, joint in enumerate(TURNING):
            q[before, joint] = cycle.out[k].at(t[before])
            q[~before, joint] = cycle.back[k].at(t[~before])
        if with_part.any():
            q[with_part] = self.joints_on(cycle.hold, t[with_part])
        q[:, 2] = quill(self.arm, cycle.height.at(t), q[:, 3])
        return q

    def transfer_joints(self, transfer: Transfer, t: FloatArray) -> FloatArray:
        """Joints (n, 4) at times t (n,) of a transfer."""
        q = np.empty((len(t), 4))
        for k, joint in enumerate(TURNING):
            q[:, joint] = transfer.across[k].at(t)
        q[:, 2] = quill(self.arm, transfer.height.at(t), q[:, 3])
        return q


@dataclass(frozen=True)
class _Leg:
    """A rise to the gate of rise_s from depart_s on, and the way across after it."""

    depart_s: float
    rise_s: float
    move: Way

    @property
    def met_s(self) -> float:
        """When the way across ends."""
        return self.depart_s + self.rise_s + self.move.duration

    def above_s(self, lift: Lift) -> float:
        """How long the tip has to be above the gates: the way across, and what it began later than it could have."""
        return self.move.duration + max(0.0, self.rise_s - lift.rise_s(self.move.duration))


def turned(arm: Arm, joints: FloatArray, yaw: FloatArray | float, turn: int) -> FloatArray:
    """Joints (..., 4) that hold yaws (...), J4 unwrapped along J1 and J2 and shifted by whole turns, so that it never
    jumps on a lane."""
    q = joints.copy()
    _, b, _ = arm.headings(q)
    q[..., 3] = arm.sense[3] * (yaw - arm.tool_yaw - b) + 2 * np.pi * turn
    q[..., 2] += quill(arm, 0.0, q[..., 3]) - quill(arm, 0.0, joints[..., 3])
    return q


def quill(arm: Arm, z_mm: FloatArray | float, j4: FloatArray) -> FloatArray:
    """J3 (n,) that puts the tip at height z_mm when J4 stands at j4."""
    foot = arm.flange_z_mm - arm.tool_length_mm
    return np.asarray(arm.sense[2] * (z_mm - foot - arm.lead * arm.sense[3] * j4))


def lift_limits(cell: Cell, arm: Arm) -> LiftLimits:
    """Limits of the tip's height: J3's, less what J4 can take up where its turning lifts the quill."""
    limits, lead = arm.limits, abs(arm.lead)
    speed, accel, jerk = (_spare(float(x[2]), lead * float(x[3]) if lead else 0.0)
                          for x in (limits.speed, limits.accel, limits.jerk))
    ends = np.array([limits.lower[2] + cell.motion.limit_margin_mm, limits.upper[2] - cell.motion.limit_margin_mm])
    heights = arm.flange_z_mm - arm.tool_length_mm + arm.sense[2] * ends
    swing = lead * float(np.abs([limits.lower[3], limits.upper[3]]).max())
    return LiftLimits(speed, accel, jerk, float(heights.max() - swing))


def _spare(limit: float, taken: float) -> float:
    """What J3 has left of a limit when J4's turning may take so much of it; a fifth at the least (permits check J3)."""
    return limit if not np.isfinite(limit) else max(limit - taken, LEAST_SPARE * limit)
