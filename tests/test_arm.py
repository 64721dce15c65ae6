"""The arm's kinematics against pinocchio, a textbook's closed form, a numeric inverse, and an arm of others."""

import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from some_arms import changed, random_arm, random_joints

from pipeline.arm import LEFT, RIGHT, Arm, Reach

SEEDS = st.integers(0, 10_000)


def plain_arm(**values: object) -> Arm:
    cell = changed(**values)
    return Arm(cell.arm, cell.tool)


def turned(angle: np.ndarray) -> np.ndarray:
    """An angle's distance from a whole number of turns."""
    return np.abs((angle + np.pi) % (2 * np.pi) - np.pi)


@pytest.mark.parametrize("seed", range(40))
def test_forward_agrees_with_pinocchio(seed: int) -> None:
    """Every sense, base pose, tool offset and quill lead; bench_arm.py does a million."""
    pinocchio_arm = pytest.importorskip("pinocchio_arm")
    arm, joints = random_arm(seed), random_joints(seed, 25)
    points, yaws = pinocchio_arm.pinocchio_tips(arm, joints)
    tips = arm.forward(joints)
    assert np.abs(tips[:, :3] - points).max() < 1e-9
    assert turned(tips[:, 3] - yaws).max() < 1e-12


@given(SEEDS)
def test_inverse_returns_the_joints_of_forward(seed: int) -> None:
    arm, joints = random_arm(seed), random_joints(seed, 50)
    both = arm.inverse(arm.forward(joints))
    elbow = arm.elbow_of(joints)
    found = both[np.arange(len(joints)), elbow]
    assert turned(found[:, [0, 1, 3]] - joints[:, [0, 1, 3]]).max() < 1e-9
    assert np.abs(found[:, 2] - joints[:, 2]).max() < 1e-9
    tips = arm.forward(both) - arm.forward(joints)[:, None]
    assert np.abs(tips[..., :3]).max() < 1e-9
    assert turned(tips[..., 3]).max() < 1e-11
    assert (arm.elbow_of(both) == [RIGHT, LEFT]).all()
    assert ((both[..., [0, 3]] > -np.pi) & (both[..., [0, 3]] <= np.pi)).all()


@given(st.floats(-100, 100), st.floats(-60, 440), st.floats(-np.pi, np.pi))
def test_inverse_is_the_textbook_closed_form(x: float, y: float, yaw: float) -> None:
    """Law of cosines for J2, two-term atan2 for J1, tool yaw the signed sum of J1, J2 and J4.

    Spong, Hutchinson, Vidyasagar, Robot Modeling and Control (2006), the SCARA of chapters 3 and 4, where z points
    down along the quill, so that their fourth angle counts clockwise from above; from memory.
    """
    arm = plain_arm()
    l1, l2 = 250.0, 200.0
    c2 = (x * x + y * y - l1 * l1 - l2 * l2) / (2 * l1 * l2)
    joints = arm.inverse([x, y, -40.0, yaw])
    if abs(c2) > 1:
        assert np.isnan(joints).all()
        return
    for elbow, sign in ((RIGHT, 1.0), (LEFT, -1.0)):
        t2 = np.arctan2(sign * np.sqrt(1 - c2 * c2), c2)
        t1 = np.arctan2(y, x) - np.arctan2(l2 * np.sin(t2), l1 + l2 * np.cos(t2))
        t4 = t1 + t2 - yaw
        assert turned(joints[elbow, [0, 1, 3]] - [t1, t2, t4]).max() < 1e-7  # atan2 and arccos part near the edge
        assert joints[elbow, 2] == pytest.approx(160 - 60 + 40, abs=1e-9)


def test_frames_follow_iso_9787() -> None:
    """Right-handed frames, z up, angles positive from x to y (ISO 9787:2013, clauses 3 and 5; from memory)."""
    arm = plain_arm(tool__length_mm=0.0)
    quarter = np.pi / 2
    assert arm.forward([0, 0, 0, 0]) == pytest.approx([450, 0, 160, 0])
    assert arm.forward([quarter, 0, 0, 0]) == pytest.approx([0, 450, 160, quarter])
    assert arm.forward([0, quarter, 0, 0]) == pytest.approx([250, 200, 160, quarter])
    assert arm.forward([0, 0, 10, quarter]) == pytest.approx([450, 0, 150, -quarter])  # J3 down, J4 clockwise


@pytest.mark.parametrize("seed", range(6))
def test_a_numeric_inverse_finds_the_same_joints(seed: int) -> None:
    """scipy.optimize.least_squares on forward, started near either elbow."""
    from scipy.optimize import least_squares

    arm = random_arm(seed)
    joints = random_joints(seed, 1)[0]
    joints[1] = np.copysign(np.clip(abs(joints[1]), 0.3, 2.8), joints[1])
    goal = arm.forward(joints)

    def miss(q: np.ndarray) -> np.ndarray:
        off = arm.forward(q) - goal
        return np.append(off[:3], 100 * np.sin(off[3]))

    for exact in arm.inverse(goal):
        start = exact + np.array([0.05, -0.05, 3.0, 0.05])
        found = least_squares(miss, start, x_scale=[1, 1, 100, 1], xtol=1e-15, ftol=1e-15, gtol=1e-15).x
        off = found - exact
        assert turned(off[[0, 1, 3]]).max() < 1e-6
        assert abs(off[2]) < 1e-5


def test_an_arm_described_elsewhere(reference_folder: Path) -> None:
    """Arm B of scara_tutorial_ros2 (Apache-2.0): its quill leans by 3.14 instead of pi, which sets the tip aside."""
    folder = reference_folder / "images" / "scara_kinematics"
    joints = json.loads((folder / "arms.json").read_text())["arm_B"]["joints"]
    table = np.genfromtxt(folder / "fk_arm_B.csv", delimiter=",", names=True)
    links = [1e3 * joints[k]["origin_xyz"][0] for k in (1, 2)]
    height = 1e3 * sum(joint["origin_xyz"][2] for joint in joints)
    lean, below = np.pi - joints[2]["origin_rpy"][0], 1e3 * joints[2]["joint_zero_offset_m"]
    arm = plain_arm(arm__link1_mm=links[0], arm__link2_mm=links[1], arm__flange_height_mm=height, tool__length_mm=below)
    q = np.column_stack([table["q1"], table["q2"], 1e3 * table["q3"], np.zeros(len(table))])
    tips = arm.forward(q)
    off = 1e3 * np.column_stack([table["x_m"], table["y_m"], table["z_m"]]) - tips[:, :3]
    out = below + 1e3 * table["q3"]
    assert np.hypot(off[:, 0], off[:, 1]) == pytest.approx(np.sin(lean) * out, abs=2e-6)
    assert off[:, 2] == pytest.approx((1 - np.cos(lean)) * out, abs=2e-6)
    assert turned(tips[:, 3] - np.radians(table["yaw_deg"])).max() < 2e-8


@given(SEEDS)
def test_the_jacobian_is_the_slope_of_forward(seed: int) -> None:
    arm, joints = random_arm(seed), random_joints(seed, 20)
    step = 1e-5
    for k, shift in enumerate(step * np.eye(4)):
        slope = (arm.forward(joints + shift) - arm.forward(joints - shift)) / (2 * step)
        assert np.abs(arm.jacobian(joints)[..., k] - slope).max() < 1e-4  # mm a rad, of some hundreds


@given(SEEDS)
def test_rates_give_the_tool_its_velocity(seed: int) -> None:
    arm, joints = random_arm(seed), random_joints(seed, 20)
    velocity = np.random.default_rng(seed).normal(0, 100, (20, 4))
    given = (arm.jacobian(joints) @ arm.rates(joints, velocity)[..., None])[..., 0]
    assert np.abs(given - velocity).max() < 1e-8


def test_joint_speeds_grow_towards_the_stretched_arm() -> None:
    """The loss near the singularity: a tenth of the bend asks ten times the speed, none at all gives NaN."""
    arm = plain_arm()
    bends = np.array([0.1, 0.01, 0.001, 0.0])
    joints = np.column_stack([np.zeros(4), bends, np.full(4, 20.0), np.zeros(4)])
    speeds = np.abs(arm.rates(joints, [100.0, 0.0, 0.0, 0.0]))[:, 0]
    assert speeds[1] / speeds[0] == pytest.approx(10, rel=0.01)
    assert speeds[2] / speeds[1] == pytest.approx(10, rel=0.01)
    assert np.isnan(speeds[3])


@given(SEEDS)
def test_follow_is_the_motion_of_the_inverse_along_a_line(seed: int) -> None:
    """Speeds and accelerations against central differences of the inverse (five points)."""
    arm, rng = random_arm(seed), np.random.default_rng(seed)
    joints = random_joints(seed, 1)[0]
    joints[1] = np.copysign(np.clip(abs(joints[1]), 0.6, 2.5), joints[1])
    velocity, accel = rng.uniform(-200, 200, 2), rng.uniform(-500, 500, 2)
    elbow, start = arm.elbow_of(joints), arm.forward(joints)
    step = 1e-3
    times = step * np.arange(-2, 3)
    tips = np.tile(start, (5, 1))
    tips[:, :2] += times[:, None] * velocity + times[:, None] ** 2 / 2 * accel
    path = np.unwrap(arm.inverse(tips)[:, elbow] - joints, axis=0, period=2 * np.pi)
    path[:, 2] = arm.inverse(tips)[:, elbow, 2]
    if arm.lead:  # J3 jumps with J4's whole turns
        path[:, 2] += arm.sense[2] * arm.sense[3] * arm.lead * (arm.inverse(tips)[:, elbow, 3] - path[:, 3])
    speed, change = arm.follow(joints, velocity, accel)
    assert speed == pytest.approx(np.array([1, -8, 0, 8, -1]) @ path / (12 * step), abs=1e-5, rel=1e-5)
    assert change == pytest.approx(np.array([-1, 16, -30, 16, -1]) @ path / (12 * step**2), abs=1e-3, rel=1e-3)
    assert speed == pytest.approx(arm.rates(joints, [*velocity, 0, 0]))


@given(SEEDS, st.integers(-3, 3))
def test_a_whole_turn_of_j4_holds_the_tool_alike(seed: int, turns: int) -> None:
    """With a quill lead J3 has to make up for it."""
    arm, joints = random_arm(seed), random_joints(seed, 5)
    off = arm.forward(arm.with_j4_turn(joints, np.array(turns))) - arm.forward(joints)
    assert np.abs(off[:, :3]).max() < 1e-9
    assert np.abs(np.abs(off[:, 3]) - 2 * np.pi * abs(turns)).max() < 1e-9


@pytest.mark.parametrize(
    ("x", "reason", "by_mm"),
    [(460.0, Reach.BEYOND, 10.0), (40.0, Reach.INSIDE, 10.0), (0.0, Reach.INSIDE, 50.0), (450.0, Reach.REACHED, 0.0),
     (np.nan, Reach.NOT_FINITE, 0.0), (np.inf, Reach.NOT_FINITE, 0.0)],
)  # fmt: skip
def test_what_is_out_of_reach_says_why_and_by_how_much(x: float, reason: Reach, by_mm: float) -> None:
    arm = plain_arm()
    codes, by = arm.reason([x, 0.0, 0.0, 0.0])
    assert codes == reason
    assert by == pytest.approx(by_mm)
    assert np.isnan(arm.inverse([x, 0.0, 0.0, 0.0])).all() == (reason != Reach.REACHED)


def test_the_folded_arm_on_its_own_axis_has_a_reason() -> None:
    """Equal links: over the J1 axis any J1 would do, so none is given."""
    arm = plain_arm(arm__link2_mm=250.0)
    assert arm.reason([0.0, 0.0, 0.0, 0.0])[0] == Reach.ON_AXIS
    assert np.isnan(arm.inverse([0.0, 0.0, 0.0, 0.0])).all()


@given(SEEDS, st.floats(-1.2, 1.2), st.floats(-np.pi, np.pi))
def test_reason_and_inverse_agree(seed: int, share: float, yaw: float) -> None:
    arm = random_arm(seed)
    tip = np.array([*(arm.base_mm[:2] + share * (arm.link1_mm + arm.link2_mm) * np.array([0.6, 0.8])), 10.0, yaw])
    assert (arm.reason(tip)[0] == Reach.REACHED) == np.isfinite(arm.inverse(tip)).all()


@pytest.mark.parametrize("bend", [0.0, np.pi])
def test_the_stretched_and_the_folded_arm_are_reached(bend: float) -> None:
    """Rounding in forward must not put them out of reach."""
    arm = random_arm(3)
    joints = random_joints(1, 200)
    joints[:, 1] = bend
    tips = arm.forward(joints)
    assert np.abs(arm.forward(arm.inverse(tips))[..., :2] - tips[:, None, :2]).max() < 1e-3


@pytest.mark.parametrize("shape", [(), (0,), (7,), (2, 3)])
def test_any_leading_shape(shape: tuple[int, ...]) -> None:
    arm = plain_arm()
    joints = np.broadcast_to(arm.home, (*shape, 4))
    assert arm.forward(joints).shape == (*shape, 4)
    assert arm.inverse(arm.forward(joints)).shape == (*shape, 2, 4)
    assert arm.jacobian(joints).shape == (*shape, 4, 4)
    assert arm.rates(joints, np.ones(4)).shape == (*shape, 4)
    assert arm.reason(arm.forward(joints))[1].shape == shape
    assert arm.follow(joints, np.ones(2), np.zeros(2))[1].shape == (*shape, 4)


@given(st.floats(0, 270))
def test_a_j1_whose_limits_lie_to_one_side_is_solved_on_that_side(degrees: float) -> None:
    """From 0 to 270 degrees: what other arms call -100 is 260 here."""
    arm = plain_arm(arm__j1__min=0.0, arm__j1__max=270.0)
    joints = np.array([np.radians(degrees), 1.0, 20.0, 0.5])
    assert arm.inverse(arm.forward(joints))[RIGHT] == pytest.approx(joints, abs=1e-9)


def test_poses_of_another_shape_are_refused() -> None:
    with pytest.raises(ValueError, match="not"):
        plain_arm().inverse(np.zeros((4, 3)))


def test_limits_are_read_only_and_in_radians() -> None:
    arm = plain_arm(arm__j2__max_jerk=None)
    assert arm.limits.upper == pytest.approx([np.radians(130), np.radians(145), 180, 2 * np.pi])
    assert np.isinf(arm.limits.jerk).tolist() == [False, True, False, False]
    assert arm.sense.tolist() == [1, 1, -1, -1]
    with pytest.raises(ValueError, match="read-only"):
        arm.limits.upper[0] = 10
