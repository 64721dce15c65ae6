"""Kinematics of a four-joint SCARA arm: forward, inverse, Jacobian, and joint speeds that keep the tip on a line.

With senses s = +1 / -1, headings in the cell frame and u(t) = (cos t, sin t), n(t) = (-sin t, cos t):

    a = base_yaw + s1 J1        link 1          quill = base + l1 u(a) + l2 u(b)
    b = a + s2 J2               link 2          tip   = quill + R(c) offset,  yaw = c + tool_yaw
    c = b + s4 J4               flange          z     = base_z + flange_height + s3 J3 + lead s4 J4 / 2 pi - length

The planar inverse is the textbook one: law of cosines for J2, two-term arctangent for J1 (Spong, Hutchinson,
Vidyasagar, Robot Modeling and Control, 2006, the SCARA examples of chapters 3 and 4). Radians and millimetres.
"""

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from pipeline.cell import ArmCell, ToolCell

Floats = NDArray[np.float64]

RIGHT, LEFT = 0, 1
TURN = 2 * np.pi
ROUNDING = 1e-12  # of the cosine of J2: a pose this little beyond reach is a stretched arm, rounded
SINGULAR = 1e-12  # |sin J2| below which the elbow cannot be solved for


class Reach(IntEnum):
    """Why `Arm.inverse` answers NaN, if it does."""

    REACHED = 0
    BEYOND = 1  # the quill would be farther out than both links reach
    INSIDE = 2  # the quill would be nearer to J1 than the links can fold
    ON_AXIS = 3  # links of equal length folded onto the J1 axis: J1 could be anything
    NOT_FINITE = 4


@dataclass(frozen=True, eq=False)
class Limits:
    """What each joint may do: (4,) read-only arrays for J1 to J4, radians, for J3 millimetres; inf: not limited."""

    lower: Floats
    upper: Floats
    speed: Floats
    accel: Floats
    jerk: Floats


class Arm:
    """An arm with its tool, from the sections `[arm]` and `[tool]` of a cell file."""

    def __init__(self, arm: ArmCell, tool: ToolCell) -> None:
        positive = (1.0, 1.0, -1.0, -1.0)  # where a file names no sense
        signs = {None: 0.0, "counterclockwise": 1.0, "clockwise": -1.0, "up": 1.0, "down": -1.0}
        units = np.array([np.pi / 180, np.pi / 180, 1.0, np.pi / 180])
        rows = [[j.min, j.max, j.max_speed, j.max_accel, j.max_jerk or np.inf] for j in arm.joints]
        self.limits = Limits(*(_fixed(column * units) for column in np.array(rows, np.float64).T))
        self.sense = _fixed([signs[j.positive] or p for j, p in zip(arm.joints, positive, strict=True)])
        self.home = _fixed(np.array(arm.home) * units)
        self.link1_mm, self.link2_mm = float(arm.link1_mm), float(arm.link2_mm)
        self.base_mm = _fixed(arm.base_mm)
        self.base_yaw = float(np.radians(arm.base_yaw_deg))
        self.flange_z_mm = float(arm.base_mm[2] + arm.flange_height_mm)  # of the flange, J3 and J4 at 0
        self.lead = float(arm.quill_lead_mm_per_rev / TURN)  # mm a radian of flange turn
        self.link_radius_mm = float(arm.link_radius_mm)
        self.offset_mm = _fixed(tool.offset_mm)
        self.tool_yaw, self.tool_length_mm = float(np.radians(tool.yaw_deg)), float(tool.length_mm)
        beyond = self.limits.lower[0] < -np.pi or self.limits.upper[0] > np.pi
        j1_middle = (self.limits.lower[0] + self.limits.upper[0]) / 2 if beyond else 0.0
        self._constants = _fixed([
            *self.sense, self.link1_mm, self.link2_mm, *self.base_mm[:2], self.base_yaw,
            self.flange_z_mm - self.tool_length_mm, self.lead, *self.offset_mm, self.tool_yaw, j1_middle,
        ])  # fmt: skip

    def headings(self, joints: ArrayLike) -> tuple[Floats, Floats, Floats]:
        """Headings (...) of link 1, link 2 and flange in the cell frame, rad, for (..., 4) joints."""
        q = np.asarray(joints, np.float64)
        a = self.base_yaw + self.sense[0] * q[..., 0]
        b = a + self.sense[1] * q[..., 1]
        return a, b, b + self.sense[3] * q[..., 3]

    def pivots(self, joints: ArrayLike) -> tuple[Floats, Floats, Floats]:
        """xy in mm of the J1 axis, the J2 axis and the quill axis, each (..., 2), for (..., 4) joints."""
        a, b, _ = self.headings(joints)
        elbow = self.base_mm[:2] + self.link1_mm * _unit(a)
        return np.broadcast_to(self.base_mm[:2], elbow.shape), elbow, elbow + self.link2_mm * _unit(b)

    def forward(self, joints: ArrayLike) -> Floats:
        """Tool tips (..., 4) x, y, z mm, yaw rad in the cell frame for (..., 4) joints; the yaw is not wrapped."""
        q = np.asarray(joints, np.float64)
        _, _, c = self.headings(q)
        xy = self.pivots(q)[2] + _turned(self.offset_mm, c)
        z = self.flange_z_mm - self.tool_length_mm + self.sense[2] * q[..., 2] + self.lead * self.sense[3] * q[..., 3]
        return np.stack([xy[..., 0], xy[..., 1], z, c + self.tool_yaw], axis=-1)

    def inverse(self, poses: ArrayLike) -> Floats:
        """Joints (..., 2, 4) for (..., 4) tool tips, elbow right, then left; NaN where `reason` has one.

        J4 lies in (-pi, pi], and so does J1, unless its limits reach beyond: then in the turn about their middle.
        The limits themselves are not applied. Raises ValueError for another last dimension than 4.
        """
        p = np.asarray(poses, np.float64)
        if p.shape[-1:] != (4,):
            raise ValueError(f"poses of shape {p.shape}, not (..., 4)")
        joints = np.empty((*p.shape[:-1], 2, 4))
        _solve(np.ascontiguousarray(p).reshape(-1, 4), self._constants, joints.reshape(-1, 8))
        return joints

    def reason(self, poses: ArrayLike) -> tuple[NDArray[np.int8], Floats]:
        """Codes (...) of `Reach` for (..., 4) tool tips, and by how many mm (...) the quill is out of reach (0: not).

        On the J1 axis, and where a pose is not finite, no distance says how far off it is: 0.
        """
        p = np.asarray(poses, np.float64)
        wrist = p[..., :2] - _turned(self.offset_mm, p[..., 3] - self.tool_yaw) - self.base_mm[:2]
        d = np.hypot(wrist[..., 0], wrist[..., 1])
        outer, inner = self.link1_mm + self.link2_mm, abs(self.link1_mm - self.link2_mm)
        slack = ROUNDING * outer
        cases = [~np.isfinite(p).all(axis=-1), d > outer + slack, d < inner - slack, (d <= slack) & (inner <= slack)]
        kinds = [Reach.NOT_FINITE, Reach.BEYOND, Reach.INSIDE, Reach.ON_AXIS]
        codes = np.select(cases, kinds, Reach.REACHED).astype(np.int8)
        return codes, np.select([codes == Reach.BEYOND, codes == Reach.INSIDE], [d - outer, inner - d], 0.0)

    def with_j4_turn(self, joints: ArrayLike, turns: ArrayLike) -> Floats:
        """Joints (..., 4) that hold the tool alike with J4 shifted by whole turns (...); J3 makes up for the lead."""
        q, turns = np.asarray(joints, np.float64), np.asarray(turns, np.float64)
        shifted = np.array(np.broadcast_to(q, (*np.broadcast_shapes(q.shape[:-1], turns.shape), 4)))
        shifted[..., 3] += TURN * turns
        shifted[..., 2] -= self.sense[2] * self.sense[3] * self.lead * TURN * turns
        return shifted

    def elbow_of(self, joints: ArrayLike) -> NDArray[np.intp]:
        """RIGHT (0) or LEFT (1), (...), for (..., 4) joints; a stretched arm counts as left."""
        return np.where(self.sense[1] * np.asarray(joints, np.float64)[..., 1] > 0, RIGHT, LEFT)

    def jacobian(self, joints: ArrayLike) -> Floats:
        """d(x, y, z, yaw) / d(J1, J2, J3, J4), (..., 4, 4), for (..., 4) joints."""
        q = np.asarray(joints, np.float64)
        shoulder, elbow, quill = self.pivots(q)
        tip = quill + _turned(self.offset_mm, self.headings(q)[2])
        matrix = np.zeros((*q.shape[:-1], 4, 4))
        for joint, pivot in ((0, shoulder), (1, elbow), (3, quill)):
            arm = tip - pivot
            matrix[..., 0, joint] = -self.sense[joint] * arm[..., 1]
            matrix[..., 1, joint] = self.sense[joint] * arm[..., 0]
            matrix[..., 3, joint] = self.sense[joint]
        matrix[..., 2, 2] = self.sense[2]
        matrix[..., 2, 3] = self.sense[3] * self.lead
        return matrix

    def rates(self, joints: ArrayLike, tool_velocity: ArrayLike) -> Floats:
        """Joint speeds (..., 4) that give the tip a velocity (..., 4) x, y, z mm/s, yaw rad/s.

        They grow as 1 / |sin J2| towards the stretched or folded arm, where they are NaN.
        """
        q, v = np.asarray(joints, np.float64), np.asarray(tool_velocity, np.float64)
        a, b, c = self.headings(q)
        quill = v[..., :2] - v[..., 3:] * _turned(_quarter(self.offset_mm), c)
        return self._joint_rates(*self._link_rates(a, b, quill), v[..., 2], v[..., 3])

    def follow(self, joints: ArrayLike, velocity: ArrayLike, accel: ArrayLike) -> tuple[Floats, Floats]:
        """Joint speeds and accelerations (..., 4) while the tip goes straight in xy, its height and yaw kept.

        velocity, accel: (..., 2) of the tip, mm/s and mm/s2. NaN where the arm is stretched or folded.
        """
        a, b, _ = self.headings(joints)
        v, w = np.asarray(velocity, np.float64), np.asarray(accel, np.float64)
        da, db = self._link_rates(a, b, v)
        inward = self.link1_mm * da[..., None] ** 2 * _unit(a) + self.link2_mm * db[..., None] ** 2 * _unit(b)
        dda, ddb = self._link_rates(a, b, w + inward)
        still = np.zeros_like(da)
        return self._joint_rates(da, db, still, still), self._joint_rates(dda, ddb, still, still)

    def _link_rates(self, a: Floats, b: Floats, quill: Floats) -> tuple[Floats, Floats]:
        """Rates (...) of the headings a and b from l1 a' n(a) + l2 b' n(b) = quill (..., 2)."""
        bend = np.sin(b - a)
        bend = np.where(np.abs(bend) < SINGULAR, np.nan, bend)
        da = (quill * _unit(b)).sum(axis=-1) / (self.link1_mm * bend)
        return da, -(quill * _unit(a)).sum(axis=-1) / (self.link2_mm * bend)

    def _joint_rates(self, da: Floats, db: Floats, dz: Floats, dyaw: Floats) -> Floats:
        """Joint rates (..., 4) from the rates of both headings, of the tip's height and of its yaw."""
        flange = dyaw - db  # s4 J4'
        s1, s2, s3, s4 = self.sense
        rates = np.broadcast_arrays(s1 * da, s2 * (db - da), s3 * (dz - self.lead * flange), s4 * flange)
        return np.stack(rates, axis=-1)


def gripper_arms(arm: ArmCell, tool: ToolCell) -> tuple[Arm, ...]:
    """The arm with its tip at each gripper: the tool frame moved by the gripper's x, y, then turned by its yaw.

    Without grippers, the arm with its tip where the tool's is.
    """
    moved = _turned(np.array(tool.grippers).reshape(-1, 3)[:, :2].T, np.radians(tool.yaw_deg)) + tool.offset_mm
    tools = [tool.model_copy(update={"offset_mm": (x, y), "yaw_deg": tool.yaw_deg + yaw})
             for (x, y), (_, _, yaw) in zip(moved.tolist(), tool.grippers, strict=True)]
    return tuple(Arm(arm, one) for one in tools or [tool])


def _fixed(values: ArrayLike) -> Floats:
    """A read-only array."""
    array = np.array(values, np.float64)
    array.flags.writeable = False
    return array


def _unit(heading: Floats) -> Floats:
    return np.stack([np.cos(heading), np.sin(heading)], axis=-1)


def _quarter(vector: Floats) -> Floats:
    """A vector (2,) turned by 90 degrees."""
    return np.array([-vector[1], vector[0]])


def _turned(vector: Floats, angle: Floats) -> Floats:
    """(..., 2): a vector (2,) turned counter-clockwise by angles (...)."""
    c, s = np.cos(angle), np.sin(angle)
    return np.stack([c * vector[0] - s * vector[1], s * vector[0] + c * vector[1]], axis=-1)


@njit("float64(float64)", inline="always", cache=True)
def _wrapped(angle: float) -> float:
    """The angle in (-pi, pi]."""
    if -np.pi < angle <= np.pi:
        return angle
    return float(angle - 2 * np.pi * np.ceil(angle / (2 * np.pi) - 0.5))


@njit("void(float64[:, ::1], Array(float64, 1, 'C', readonly=True), float64[:, ::1])", cache=True, nogil=True)
def _solve(poses: Floats, k: Floats, joints: Floats) -> None:
    """Both elbows' joints (n, 8) for tool tips (n, 4); k are the arm's constants."""
    s1, s2, s3, s4, l1, l2, base_x, base_y, base_yaw, z0, lead, off_x, off_y, tool_yaw, j1_middle = k
    straight = off_x == 0.0 and off_y == 0.0
    for i in range(len(poses)):
        x, y, flange = poses[i, 0] - base_x, poses[i, 1] - base_y, poses[i, 3] - tool_yaw
        if not straight:
            c, s = np.cos(flange), np.sin(flange)
            x, y = x - c * off_x + s * off_y, y - s * off_x - c * off_y
        d2 = x * x + y * y
        cosine = (d2 - l1 * l1 - l2 * l2) / (2 * l1 * l2)
        reached = abs(cosine) <= 1 + ROUNDING and d2 > (ROUNDING * (l1 + l2)) ** 2
        if not (reached and np.isfinite(poses[i, 2]) and np.isfinite(flange)):
            joints[i] = np.nan
            continue
        cosine = min(max(cosine, -1.0), 1.0)
        bend = np.arccos(cosine)
        inner = np.arctan2(l2 * np.sqrt(1 - cosine * cosine), l1 + l2 * cosine)
        outward = np.arctan2(y, x)
        for side in range(2):
            up = 1.0 - 2.0 * side
            a = outward - up * inner
            j4 = _wrapped(s4 * (flange - a - up * bend))
            joints[i, 4 * side] = j1_middle + _wrapped(s1 * (a - base_yaw) - j1_middle)
            joints[i, 4 * side + 1] = up * s2 * bend
            joints[i, 4 * side + 2] = s3 * (poses[i, 2] - z0 - lead * s4 * j4)
            joints[i, 4 * side + 3] = j4
