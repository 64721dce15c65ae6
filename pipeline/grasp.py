"""A part to its grasps: every way the tool can be on it as it passes, and every way to set it down.

On: each symmetric turn, each taught grip, both elbows, each whole turn of J4. Off: the same at its slot. A way counts
where the joints stay inside their limits less margins, away from the stretched and the folded arm, and out of the
keep-outs. A part that has none gets the reason, and by how much the nearest one failed.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from pipeline.arm import Arm
from pipeline.cell import Cell, GripCell, PartCell
from pipeline.motion.cycle import Hold, turned
from pipeline.move_time import move_time
from pipeline.places import Place
from pipeline.room import Keepouts
from pipeline.shapes import Shapes

FloatArray = NDArray[np.float64]
LANE_POINTS = 24
LANE_PAD_MM = 40.0  # looked at before and after the window: the way down begins and the way up ends there
FREE_YAWS = 16  # of a round part, or of a place that takes any yaw
MOST_TURNS = 12  # of a part with more symmetric turns only so many are tried
TURNS = np.arange(-2, 3)


@dataclass(frozen=True)
class Refusal:
    """Why a part can't be had: one of the reasons of parts.csv, and a sentence with the constraint and its amount.

    remedy: what would have saved it, where that was looked for and one number alone would.
    """

    reason: str
    detail: str
    remedy: str = ""

    @property
    def told(self) -> str:
        """Detail and remedy in one line."""
        return f"{self.detail}; {self.remedy}" if self.remedy else self.detail


@dataclass(frozen=True)
class Holds:
    """The h ways the tool can be on one part, seen at m points of the way it passes.

    holds: h of them. joints (h, m, 4) rad and mm; usable (h, m); along_mm (m,): the part's distance along the heading
    at those points (for a still part m is 1).
    """

    holds: tuple[Hold, ...]
    grip: NDArray[np.int64]
    joints: FloatArray
    usable: NDArray[np.bool_]
    along_mm: FloatArray

    @cached_property
    def elbow(self) -> NDArray[np.int64]:
        """(h,) elbow of each."""
        return np.array([hold.elbow for hold in self.holds], np.int64)

    def met_from_mm(self, row: int) -> float:
        """How far along the part must be before this hold can be on it; -inf where anywhere will do."""
        return -np.inf if self.usable[row, 0] else float(self.along_mm[self.usable[row].argmax()])

    def tips(self) -> FloatArray:
        """(h, 3): x, y at counts 0 and yaw of each."""
        return np.array([[*hold.at_mm, hold.yaw] for hold in self.holds]).reshape(-1, 3)


@dataclass(frozen=True)
class Drops:
    """The d ways the tool can stand at one slot: poses (d, 4) of the tip, joints (d, 4)."""

    poses: FloatArray
    joints: FloatArray


class Grasping:
    """What one gripper of an arm in one cell can grip and where it can set it down."""

    def __init__(self, cell: Cell, arm: Arm, places: Iterable[Place], gripper: int = 0) -> None:
        self.cell, self.arm, self.gripper = cell, arm, gripper
        self.places = {place.name: place for place in places}
        margin = np.array([cell.motion.limit_margin_deg] * 4) * np.pi / 180
        margin[2] = cell.motion.limit_margin_mm
        self.lower, self.upper = arm.limits.lower + margin, arm.limits.upper - margin
        self.singular = float(np.radians(cell.motion.singularity_deg))
        footprints = [*cell.tool.footprint_mm, *(p for part in cell.parts.values() for p in part.footprint_mm)]
        self.keepouts = Keepouts(cell.keepouts, arm, Shapes.of(footprints))
        self._drops: dict[tuple[str, int, str], Drops] = {}
        heading = np.radians(cell.belt.heading_deg) if cell.belt else 0.0
        self.heading = np.array([np.cos(heading), np.sin(heading)])
        self.lane_mm = self._lane()
        self._inside = self._in_window()

    def _lane(self) -> FloatArray:
        """Distances along the heading at which a passing part is looked at."""
        belt = self.cell.belt
        if belt is None:
            return np.zeros(1)
        reach = self.arm.link1_mm + self.arm.link2_mm + float(np.hypot(*self.arm.offset_mm))
        middle = float(self.arm.base_mm[:2] @ self.heading)
        low, high = belt.window_mm or (middle - reach, middle + reach)
        return np.linspace(low - LANE_PAD_MM, high + LANE_PAD_MM, LANE_POINTS)

    def _in_window(self) -> NDArray[np.bool_]:
        """Which points of the lane lie in the window or next to its ends: a part must be had at one of them."""
        window = self.cell.belt.window_mm if self.cell.belt else None
        low, high = window or (-np.inf, np.inf)
        step = 0.0 if len(self.lane_mm) < 2 else float(self.lane_mm[1] - self.lane_mm[0])
        return np.asarray((self.lane_mm > low - step) & (self.lane_mm < high + step))

    def grips(self, part: PartCell) -> tuple[GripCell, ...]:
        """The taught grip, then the further ones of the cell file."""
        return (GripCell(), *part.grips)

    def footprint(self, kind: str, grip: int) -> Shapes:
        """The polygons that come down beside a part, in the tool frame."""
        part = self.cell.parts[kind]
        own = self.grips(part)[grip].footprint_mm or part.footprint_mm or self.cell.tool.footprint_mm
        return Shapes.of(own)

    def holds(self, kind: str, xy_mm: FloatArray, yaw: float) -> Holds | Refusal:
        """The ways to be on a part whose grip frame is at xy (2,) and yaw at counts 0."""
        part = self.cell.parts[kind]
        still = self.cell.belt is None
        along = np.array([xy_mm @ self.heading]) if still else self.lane_mm
        poses, grips = self._tool_poses(part, xy_mm, yaw, along)
        yaws = poses[:, 0, 3]
        lanes = turned(self.arm, self.arm.inverse(poses).swapaxes(1, 2), yaws[:, None, None], 0)  # (y, 2, m, 4)
        ways = [(y, elbow, turn) for y, elbow in np.ndindex(len(yaws), 2)
                for turn in self._turns(lanes[y, elbow, :, 3])]
        which, elbows, turns = np.array(ways).T
        joints = self.arm.with_j4_turn(lanes[which, elbows], turns[:, None])
        usable = self._usable(joints.reshape(-1, 4)).reshape(joints.shape[:2])
        able = np.asarray(usable[:, self._inside].any(axis=1))
        if not able.any():
            shortest = _Shortfall(self)
            for lane in joints[:, self._inside]:
                shortest.look(lane)
            return shortest.refusal(poses[:, self._inside], along[self._inside])
        at = poses[:, 0, :2] - (along[0] - xy_mm @ self.heading) * self.heading
        holds = tuple(Hold(at[y], float(yaws[y]), float(poses[y, 0, 2]), elbow, turn, self.gripper)
                      for (y, elbow, turn), has in zip(ways, able.tolist(), strict=True) if has)
        return Holds(holds, grips[which[able]], joints[able], usable[able], along)

    def _tool_poses(self, part: PartCell, xy_mm: FloatArray, yaw: float,
                    along: FloatArray) -> tuple[FloatArray, NDArray[np.int64]]:
        """Tips (y, m, 4) on a part at the points of its lane, for every grip and symmetric turn, and their grips."""
        turns = FREE_YAWS if part.turns == 0 else min(part.turns, MOST_TURNS)
        step = 2 * np.pi / (turns if part.turns == 0 else part.turns)
        lane = xy_mm + (along - xy_mm @ self.heading)[:, None] * self.heading
        poses, grips = [], []
        for number, grip in enumerate(self.grips(part)):
            grasp = part.grasp_mm if grip.grasp_mm is None else grip.grasp_mm
            for k in range(turns):
                turn = yaw + (k - turns // 2) * step
                c, s = np.cos(turn), np.sin(turn)
                offset = np.array([c * grip.offset_mm[0] - s * grip.offset_mm[1],
                                   s * grip.offset_mm[0] + c * grip.offset_mm[1]])
                tip = np.empty((len(along), 4))
                tip[:, :2] = lane + offset
                tip[:, 2] = self.cell.surface_mm + grasp
                tip[:, 3] = turn + np.radians(grip.yaw_deg)
                poses.append(tip)
                grips.append(number)
        return np.stack(poses), np.array(grips)

    def _turns(self, j4: FloatArray) -> list[int]:
        """Whole turns that bring some of J4 (m,) inside its range; the nearest one where none does."""
        j4 = j4[np.isfinite(j4)]
        if not len(j4):
            return [0]
        low, high = self.lower[3], self.upper[3]
        # the unwrapped J4 may start several turns away
        first, last = np.ceil((low - j4.max()) / (2 * np.pi)), np.floor((high - j4.min()) / (2 * np.pi))
        if first > last:
            return [int(np.round(((low + high) / 2 - j4.mean()) / (2 * np.pi)))]
        return list(range(int(first), int(last) + 1))

    def _usable(self, joints: FloatArray) -> NDArray[np.bool_]:
        """Which joints (n, 4) keep limits less margins, singularities and keep-outs at a distance."""
        bend = np.abs(joints[:, 1])
        with np.errstate(invalid="ignore"):
            usable = ((joints >= self.lower) & (joints <= self.upper)).all(axis=1)
            usable &= (bend >= self.singular) & (bend <= np.pi - self.singular)
        if self.cell.keepouts and usable.any():
            usable[usable] = self.keepouts.clearance(joints[usable]) >= 0
        return usable

    def drops(self, kind: str, grip: int, place: str, slot: int) -> Drops:
        """The ways to stand at a slot with a part of this kind in the gripper."""
        key = (place, slot, f"{grip} {kind}")
        if key not in self._drops:
            self._drops[key] = self._find_drops(self.cell.parts[kind], grip, self.places[place], slot)
        return self._drops[key]

    def _find_drops(self, part: PartCell, grip: int, place: Place, slot: int) -> Drops:
        free = place.any_yaw or part.turns == 0
        count = FREE_YAWS if free else min(part.turns, MOST_TURNS)
        yaws = place.yaw + np.arange(count) * 2 * np.pi / (count if free else part.turns)
        one = self.grips(part)[grip]
        c, s = np.cos(yaws), np.sin(yaws)
        poses = np.empty((count, 4))
        poses[:, 0] = place.slots_mm[slot, 0] + c * one.offset_mm[0] - s * one.offset_mm[1]
        poses[:, 1] = place.slots_mm[slot, 1] + s * one.offset_mm[0] + c * one.offset_mm[1]
        grasp_mm = part.grasp_mm if one.grasp_mm is None else one.grasp_mm
        poses[:, 2] = place.slots_mm[slot, 2] + grasp_mm - part.grasp_mm
        poses[:, 3] = yaws + np.radians(one.yaw_deg)
        solved = self.arm.inverse(poses)[:, :, None, :]  # (y, 2, 1, 4)
        joints = self.arm.with_j4_turn(solved, TURNS).reshape(-1, 4)
        usable = self._usable(joints)
        rows = np.repeat(np.arange(count), 2 * len(TURNS))
        return Drops(poses[rows[usable]], joints[usable])

    def above(self, xy_mm: FloatArray, z_mm: float, like: FloatArray) -> FloatArray | None:
        """Joints (4,) with the tip over a point, with the elbow of `like` (4,) and J4 near its; None out of reach."""
        poses = np.empty((FREE_YAWS, 4))
        poses[:, :2], poses[:, 2] = xy_mm, z_mm
        poses[:, 3] = np.arange(FREE_YAWS) * 2 * np.pi / FREE_YAWS
        elbow = int(self.arm.elbow_of(like))
        joints = self.arm.with_j4_turn(self.arm.inverse(poses)[:, elbow, None], TURNS).reshape(-1, 4)
        joints = joints[self._usable(joints)]
        return joints[np.abs(joints[:, 3] - like[3]).argmin()] if len(joints) else None

    def pairs(self, kind: str, holds: Holds, place: str, slot: int) -> "Grasps":
        """For each hold and each elbow at the slot the drop that turns J4 least."""
        middle = self._middle(holds)
        made = []
        for grip in np.unique(holds.grip):
            drops = self.drops(kind, int(grip), place, slot)
            if not len(drops.joints):
                continue
            rows = np.flatnonzero(holds.grip == grip)
            apart = np.abs(middle[rows, None, 3] - drops.joints[None, :, 3])  # (r, d)
            right = self.arm.elbow_of(drops.joints) == 0
            for side in (right, ~right):
                if side.any():
                    best = np.where(side, apart, np.inf).argmin(axis=1)
                    made.append((rows, drops.joints[best], drops.poses[best]))
        if not made:
            empty = np.zeros((0, 4))
            return Grasps(np.zeros(0, np.int64), empty, empty, np.zeros(0))
        rows, joints, poses = (np.concatenate(column) for column in zip(*made, strict=True))
        turning = middle[rows].copy()
        turning[:, 2] = joints[:, 2]  # lifting is counted with the way, not here
        carry = move_time(self.arm, turning, joints)
        return Grasps(rows, joints, poses, carry)

    def _middle(self, holds: Holds) -> FloatArray:
        """(h, 4) joints of each hold halfway along the usable part of its lane."""
        count = np.cumsum(holds.usable, axis=1)
        at = (count >= (count[:, -1:] + 1) // 2).argmax(axis=1)
        return np.asarray(holds.joints[np.arange(len(at)), at])


@dataclass(frozen=True)
class Grasps:
    """g whole grasps of one part: row of its hold (g,), joints and pose (g, 4) at the slot, time to carry (g,)."""

    hold: NDArray[np.int64]
    drop_joints: FloatArray
    drop_pose: FloatArray
    carry_s: FloatArray


class _Shortfall:
    """Which constraint failed least over all that was tried for a part."""

    def __init__(self, grasping: Grasping) -> None:
        self._of = grasping
        self._limit: tuple[float, str] = (np.inf, "")
        self._keepout = False

    def look(self, joints: FloatArray) -> None:
        """Take joints (m, 4) of a lane none of whose points will do into account."""
        joints = joints[np.isfinite(joints).all(axis=1)]
        if not len(joints):
            return
        of = self._of
        over = np.maximum(of.lower - joints, joints - of.upper)
        bend = np.abs(joints[:, 1])
        singular = np.maximum(of.singular - bend, bend - np.pi + of.singular)
        worst = np.maximum(over[:, [0, 1, 3]].max(axis=1), singular)
        worst = np.maximum(worst, over[:, 2] * np.pi / 180)  # a millimetre weighs as a degree
        least = int(worst.argmin())
        if worst[least] <= 0:
            self._keepout = True
        elif worst[least] < self._limit[0]:
            self._limit = (float(worst[least]), self._sentence(joints[least], over[least], float(singular[least])))

    def _sentence(self, joints: FloatArray, over: FloatArray, singular: float) -> str:
        of = self._of
        scaled = over * np.array([1, 1, np.pi / 180, 1])
        if singular >= scaled.max():
            least = np.degrees(of.singular)
            return f"J2 would be {np.degrees(singular):.1f} deg nearer the stretched or folded arm than {least:.1f}"
        j = int(scaled.argmax())
        scale, unit = (1.0, "mm") if j == 2 else (180 / np.pi, "deg")
        limit = of.upper[j] if joints[j] > of.upper[j] else of.lower[j]
        return f"J{j + 1} would need {joints[j] * scale:.1f} {unit}, limit less margin {limit * scale:.1f}"

    def refusal(self, poses: FloatArray, along: FloatArray) -> Refusal:
        """The reason a part has no hold at all."""
        if self._keepout:
            return Refusal("keepout", "the arm or the tool would enter a keep-out everywhere along the window")
        if np.isfinite(self._limit[0]):
            return Refusal("joint_limit", self._limit[1])
        _, by_mm = self._of.arm.reason(poses)
        least = int(by_mm.min(axis=0).argmin())
        return Refusal("out_of_reach", f"{by_mm.min():.1f} mm out of reach where it comes nearest, "
                                       f"{along[least]:.0f} mm along the belt")
