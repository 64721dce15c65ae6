"""A pick meets its part exactly, moves without a jump, and keeps every limit between samples too."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import pytest
from hypothesis import assume, example, given, settings
from hypothesis import strategies as st
from some_arms import changed

from pipeline.arm import Arm
from pipeline.belt import Belt
from pipeline.cell import Cell
from pipeline.grasp import Grasping
from pipeline.motion.across import SHAPES, TOGETHER, TURNING
from pipeline.motion.cycle import Cycle, Hold, Mover
from pipeline.move_time import move_time
from pipeline.permit import Permit
from pipeline.places import Place

DT = 0.001
GATE_MM = 0.02  # a lift is looked up in a table: so near its gates the tip has hardly begun to move sideways


@dataclass(frozen=True)
class Case:
    """A cell, its mover, a part to pick and joints over a slot."""

    cell: Cell
    mover: Mover
    start: np.ndarray
    hold: Hold
    slot: np.ndarray
    cycle: Cycle


@lru_cache(maxsize=64)
def case(seed: int, shapes: tuple[int, int] = (TOGETHER, TOGETHER)) -> Case | None:
    """A pick at random: senses, base, tool, lead, elbow, lane, belt speed (steady, changing, standing)."""
    rng = np.random.default_rng(seed)
    turn, lift = ("counterclockwise", "clockwise"), ("up", "down")
    senses = {f"arm__j{n}__positive": (lift if n == 3 else turn)[rng.integers(2)] for n in (1, 2, 3, 4)}
    base, heading = rng.uniform(-300, 300, 3), float(rng.uniform(-180, 180))
    changes = dict(
        **senses, arm__base_mm=base.tolist(), arm__base_yaw_deg=float(rng.uniform(-180, 180)),
        arm__link1_mm=float(rng.uniform(180, 320)), arm__link2_mm=float(rng.uniform(150, 300)),
        arm__quill_lead_mm_per_rev=float(rng.choice([0, 0, 10, -8])), arm__home=[0.0, 90.0, 90.0, 0.0],
        tool__offset_mm=(rng.uniform(-40, 40, 2) * rng.integers(2)).tolist(), tool__yaw_deg=float(rng.uniform(-90, 90)),
        belt__heading_deg=heading, belt__window_mm=None, motion__approach_mm=float(rng.uniform(2, 12)),
    )  # fmt: skip
    middle = float(Arm(changed(**changes).arm, changed(**changes).tool).forward(np.array([0.0, 1.0, 90.0, 0.0]))[2])
    changes |= {"belt__surface_mm": middle - 30.0, "motion__travel_mm": middle, "motion__clear_mm": middle - 2.0}
    cell = changed(**changes)
    arm = Arm(cell.arm, cell.tool)
    times = np.arange(0, 12, 0.1)
    speed = float(rng.uniform(0, 250))
    speeds = speed * (1 + (0.3 * np.sin(times) if seed % 3 == 1 else 0 * times))
    counts = np.concatenate([[0], np.cumsum(speeds[1:] * 0.1)]) / cell.belt.mm_per_count  # type: ignore[union-attr]
    mover = Mover(cell, arm, Belt(times, counts, cell.belt))
    reach = arm.link1_mm + arm.link2_mm
    aside = arm.base_yaw + rng.uniform(-1.3, 1.3)  # J1 stays away from the seam at half a turn
    at = base[:2] + rng.uniform(0.55, 0.8) * reach * np.array([np.cos(aside), np.sin(aside)])
    hold = Hold(at - mover.belt.shift_mm(1.5), float(rng.uniform(-3, 3)), middle - 27.0, int(rng.integers(2)), 0)
    joints = np.array([rng.uniform(-2, 2), rng.choice([-1, 1]) * rng.uniform(0.6, 2.2), 0.0, rng.uniform(-2, 2)])
    start, slot = joints.copy(), joints + rng.uniform(-1, 1, 4) * (1.0, 0.3, 0.0, 1.0)
    for q, z in ((start, middle + rng.uniform(-25, 5)), (slot, middle - rng.uniform(5, 25))):
        q[2] = _quill(arm, q, z)
    cycle = mover.pick(start, float(rng.uniform(0, 0.8)), hold, slot, shapes=shapes)
    return None if cycle is None else Case(cell, mover, start, hold, slot, cycle)


def _quill(arm: Arm, joints: np.ndarray, z_mm: float) -> float:
    """J3 that puts the tip at a height, found from forward kinematics alone."""
    at = float(arm.forward(np.array([*joints[:2], 0.0, joints[3]]))[2])
    return float(arm.sense[2] * (z_mm - at))


def trip(one: Case) -> tuple[np.ndarray, np.ndarray]:
    t = np.arange(one.cycle.depart_s - 0.01, one.cycle.release_end_s + 0.01, DT)
    return t, one.mover.joints(one.cycle, t)


# ---- a whole cycle


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from(SHAPES))
@example(1, TOGETHER)
def test_the_part_is_met_and_left_in_place_and_in_speed(seed: int, shape: int) -> None:
    """Both sides of both seams agree within 1e-6 m and 1e-6 m/s, for the tip as for the joints."""
    one = case(seed, (shape, shape))
    assume(one is not None)
    arm, cycle, belt = one.mover.arm, one.cycle, one.mover.belt
    for when, curves in ((cycle.met_s, cycle.out), (cycle.left_s, cycle.back)):
        state = np.array([curve.state(when) for curve in curves])
        joints = one.mover.joints_on(one.hold, np.array([when]))[0]
        moving = joints.copy()
        moving[TURNING] = state[:, 0]
        assert np.abs(arm.forward(moving) - arm.forward(joints))[:2].max() < 1e-3
        rates = np.zeros(4)
        rates[TURNING] = state[:, 1]
        tip = arm.jacobian(joints) @ rates
        assert np.abs(tip[:2] - belt.speed_mm_s(when) * belt.heading).max() < 1e-3
        assert abs(tip[3]) < 1e-6


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6))
def test_the_tool_stays_on_the_part_from_meeting_to_leaving(seed: int) -> None:
    one = case(seed)
    assume(one is not None)
    t = np.linspace(one.cycle.met_s, one.cycle.left_s, 50)[:-1]
    tips = one.mover.arm.forward(one.mover.joints(one.cycle, t))
    assert np.abs(tips[:, :2] - one.hold.at_mm - one.mover.belt.shift_mm(t)).max() < 1e-6
    assert np.abs(np.sin((tips[:, 3] - one.hold.yaw) / 2)).max() < 1e-9
    dwell = (t >= one.cycle.grasp_start_s) & (t <= one.cycle.grasp_end_s)
    assert np.abs(tips[dwell, 2] - one.hold.z_mm).max(initial=0) < 1e-9
    assert one.cycle.grasp_end_s - one.cycle.grasp_start_s == pytest.approx(one.cell.motion.grasp_s)
    assert one.cycle.release_end_s - one.cycle.release_start_s == pytest.approx(one.cell.motion.release_s)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from(SHAPES))
def test_every_limit_is_kept_and_nothing_jumps(seed: int, shape: int) -> None:
    """Exactly over the curves' pieces; by differences of 1 ms over the whole trip, J3 and the lane included."""
    one = case(seed, (shape, shape))
    assume(one is not None)
    limits = one.mover.arm.limits
    for curves in (one.cycle.out, one.cycle.back):
        for joint, curve in zip(TURNING, curves, strict=True):
            speed, accel, jerk = curve.extremes()[2:]
            assert speed <= limits.speed[joint] * (1 + 1e-6)
            assert accel <= limits.accel[joint] * (1 + 1e-6)
            assert jerk <= limits.jerk[joint] * (1 + 1e-6)
    _, joints = trip(one)
    t = np.array([one.cycle.met_s, one.cycle.left_s])
    following = one.mover.arm.follow(one.mover.joints_on(one.hold, t),
                                     one.mover.belt.speed_mm_s(t)[:, None] * one.mover.belt.heading,
                                     one.mover.belt.accel_mm_s2(t)[:, None] * one.mover.belt.heading)
    assume((np.abs(following[0]) <= limits.speed).all() and (np.abs(following[1]) <= limits.accel).all())
    _differences_within(joints, limits)


def _differences_within(joints: np.ndarray, limits: object) -> None:
    """Divided differences never exceed the limit of a jerk-limited motion, whatever their step."""
    for order, most in ((1, limits.speed), (2, limits.accel), (3, limits.jerk)):  # type: ignore[attr-defined]
        for n in (1, 4):
            change = joints
            for _ in range(order):
                change = (change[n:] - change[:-n]) / (n * DT)
            assert (np.abs(change).max(axis=0) <= most * 1.01 + 1e-9).all(), f"order {order}, {n} ms"


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from(SHAPES))
def test_the_tip_goes_sideways_only_above_the_clear_height(seed: int, shape: int) -> None:
    """Below it, and for the last approach, it is straight over its start, its part (as that moves) or its slot."""
    one = case(seed, (shape, shape))
    assume(one is not None)
    t, joints = trip(one)
    tips, cycle, motion = one.mover.arm.forward(joints), one.cycle, one.cell.motion
    part = one.hold.at_mm + one.mover.belt.shift_mm(t)
    ends = [one.mover.arm.forward(q) for q in (one.start, one.slot)]
    away = [np.hypot(*(tips[:, :2] - at).T) for at in (ends[0][:2], part, ends[1][:2])]
    clear = motion.clear_height_mm
    assert (np.min(away, axis=0)[tips[:, 2] < clear - 0.01] < 0.01).all()
    low = tips[:, 2] < one.hold.z_mm + motion.approach_mm - 0.01
    down = (t < cycle.grasp_start_s) & (t > cycle.met_s - 0.5) & low
    late = down & (t > (cycle.depart_s + cycle.grasp_start_s) / 2)
    assert (np.minimum(away[0], away[1])[down] < 0.01).all()
    assert (away[1][late] < 0.01).all()
    last = (t > cycle.left_s) & (tips[:, 2] < ends[1][2] + motion.approach_mm - 0.01) & (t > cycle.there_s - 0.02)
    assert (away[2][last & (t >= cycle.there_s)] < 0.01).all()
    for first, last in ((cycle.across_s, cycle.met_s), (cycle.left_s, cycle.there_s)):
        assert tips[(t > first) & (t < last), 2].min() >= clear - GATE_MM
    assert cycle.height.extremes()[1] >= motion.travel_mm - 1e-6


@settings(max_examples=12, deadline=None)
@given(st.integers(0, 10**6))
def test_a_cycle_begins_and_ends_at_rest_where_it_should(seed: int) -> None:
    one = case(seed)
    assume(one is not None)
    cycle = one.cycle
    ends = one.mover.joints(cycle, np.array([cycle.depart_s, cycle.release_start_s, cycle.release_end_s + 1.0]))
    assert ends == pytest.approx(np.stack([one.start, one.slot, one.slot]), abs=1e-6)
    order = [cycle.depart_s, cycle.across_s, cycle.met_s, cycle.grasp_start_s, cycle.grasp_end_s, cycle.left_s,
             cycle.there_s, cycle.release_start_s, cycle.release_end_s]  # fmt: skip
    assert order == sorted(order)


@settings(max_examples=12, deadline=None)
@given(st.integers(0, 10**6))
def test_the_way_home_keeps_limits_and_clear_height(seed: int) -> None:
    one = case(seed)
    assume(one is not None)
    home = one.mover.home(one.cycle.end_joints, one.cycle.release_end_s)
    t = np.arange(home.depart_s - 0.01, home.end_s + 0.01, DT)
    joints = one.mover.transfer_joints(home, t)
    assert joints[0] == pytest.approx(one.slot, abs=1e-6)
    assert joints[-1] == pytest.approx(home.end_joints, abs=1e-6)
    assert home.end_joints[TURNING] == pytest.approx(one.mover.arm.home[TURNING])
    _differences_within(joints, one.mover.arm.limits)
    tips = one.mover.arm.forward(joints)
    low = tips[:, 2] < one.cell.motion.clear_height_mm - 0.01
    assert np.hypot(*(tips[low, :2] - one.mover.arm.forward(one.slot)[:2]).T).max(initial=0) < 0.01


def test_a_part_can_be_waited_for() -> None:
    """Met no sooner than asked, contact no sooner than the window begins; the arm sets out as late as that allows."""
    cell = changed(belt__window_mm=[-50.0, 150.0])
    arm = Arm(cell.arm, cell.tool)
    belt = Belt(np.arange(0, 30, 0.1), np.arange(300) * 0.1 * 100 / 0.05, cell.belt)
    mover = Mover(cell, arm, belt)
    hold = Hold(np.array([300.0, -300.0]), 0.0, -47.0, 0, 0)
    slot = arm.inverse([-60.0, 260.0, -40.0, 0.0])[0]
    cycle = mover.pick(np.array(arm.home), 0.0, hold, slot)
    assert cycle is not None
    along = hold.at_mm[1] + float(belt.travel_mm(cycle.grasp_start_s))
    assert along == pytest.approx(-50.0, abs=1e-3)
    assert cycle.depart_s > 1.0
    later = mover.pick(np.array(arm.home), 0.0, hold, slot, met_from_s=3.5)
    assert later is not None
    assert later.met_s == pytest.approx(3.5, abs=1e-6)


def test_a_part_that_has_gone_is_not_met() -> None:
    cell = changed()
    arm = Arm(cell.arm, cell.tool)
    mover = Mover(cell, arm, Belt(np.arange(0, 30, 0.1), np.arange(300) * 0.1 * 100 / 0.05, cell.belt))
    slot = arm.inverse([-60.0, 260.0, -40.0, 0.0])[0]
    assert mover.pick(np.array(arm.home), 0.0, Hold(np.array([300.0, 2000.0]), 0.0, -47.0, 0, 0), slot) is None


@pytest.mark.filterwarnings("error")
def test_a_part_that_never_comes_is_not_met() -> None:
    """The belt stops before the window."""
    cell = changed()
    arm = Arm(cell.arm, cell.tool)
    mover = Mover(cell, arm, Belt(np.arange(0, 30, 0.1), np.minimum(np.arange(300) * 200.0, 1e4), cell.belt))
    slot = arm.inverse([-60.0, 260.0, -40.0, 0.0])[0]
    hold = Hold(np.array([300.0, -700.0]), 0.0, -47.0, 0, 0)
    assert np.isinf(mover.passes(hold, -150.0))
    assert mover.pick(np.array(arm.home), 6.0, hold, slot) is None


# ---- what overlapping is worth


def test_overlapping_lift_across_and_down_saves_15_percent() -> None:
    """25 mm up, 300 mm across, 25 mm down (common practice, no source) against the same three moves in sequence."""
    cell = changed(belt=None, tray={"surface_mm": -50.0}, motion__travel_mm=-22.0, motion__clear_mm=-22.0,
                   motion__approach_mm=5.0, motion__grasp_s=0.0, motion__release_s=0.0)
    arm = Arm(cell.arm, cell.tool)
    mover = Mover(cell, arm, Belt([0.0], [0.0], None))
    ends = arm.inverse([[280.0, -150.0, -47.0, 0.0], [280.0, 150.0, -47.0, 0.0]])[:, 0]
    hold = Hold(np.array([280.0, 150.0]), 0.0, -47.0, 0, 0)
    cycle = mover.pick(ends[0], 0.0, hold, ends[0])
    assert cycle is not None
    raised = ends + np.array([0.0, 0.0, arm.sense[2] * 25.0, 0.0])
    in_sequence = 2 * float(move_time(arm, np.stack([ends[0], raised[0], raised[1]]),
                                      np.stack([raised[0], raised[1], ends[1]])).sum())
    assert arm.forward(raised[0])[2] == pytest.approx(-22.0)
    together = cycle.release_end_s - cycle.depart_s
    assert together <= 0.85 * in_sequence, f"{together:.3f} s against {in_sequence:.3f} s in sequence"


# ---- each limit matters


def _picked(**changes: object) -> tuple[Cycle | None, Permit]:
    cell = changed(**changes)
    arm = Arm(cell.arm, cell.tool)
    mover = Mover(cell, arm, Belt(np.arange(0, 30, 0.1), np.arange(300) * 0.1 * 60 / 0.05, cell.belt))
    slot = arm.inverse([-60.0, 260.0, -40.0, 2.5])[0]
    cycle = mover.pick(np.array(arm.home), 0.2, Hold(np.array([300.0, -120.0]), -2.0, -47.0, 0, 0), slot)
    return cycle, Permit(mover, Grasping(cell, arm, [Place.of(place) for place in cell.places]))


@pytest.mark.parametrize("joint", ["j1", "j2", "j3", "j4"])
@pytest.mark.parametrize("limit", ["max_speed", "max_accel", "max_jerk"])
def test_every_limit_of_every_joint_matters(joint: str, limit: str) -> None:
    """With the others as good as unlimited, one limit alone decides how long the cycle takes."""
    free = {f"arm__{j}__{name}": value for j in ("j1", "j2", "j3", "j4")
            for name, value in (("max_speed", 1e5), ("max_accel", 1e7), ("max_jerk", 1e9))}
    key = f"arm__{joint}__{limit}"
    tight = {**free, key: {"max_speed": 100.0, "max_accel": 800.0, "max_jerk": 8000.0}[limit]}
    loose, held = _picked(**free)[0], _picked(**tight)[0]
    assert loose is not None
    assert held is not None
    assert held.release_end_s - held.depart_s > loose.release_end_s - loose.depart_s + 0.05
    if limit == "max_jerk":
        unlimited = _picked(**{**free, key: None})[0]
        assert unlimited is not None
        assert unlimited.release_end_s - unlimited.depart_s < held.release_end_s - held.depart_s


def _refusal(**changes: object) -> str:
    cycle, permit = _picked(**changes)
    assert cycle is not None
    refused = permit.refused(cycle)
    return "" if refused is None else f"{refused.reason}: {refused.detail}"


def test_the_plain_cycle_is_allowed() -> None:
    assert _refusal() == ""


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"belt__window_mm": [-200.0, -100.0]}, "too_late: would be gripped"),
        ({"arm__j1__max": 50.0}, "joint_limit: J1 would need"),
        ({"arm__j2__max": 92.0}, "joint_limit: J2 would need"),
        ({"arm__j3__max": 140.0}, "joint_limit: J3 would need"),
        ({"arm__j4__max": 50.0, "arm__j4__min": -50.0}, "joint_limit: J4 would need"),
        ({"motion__limit_margin_deg": 45.0}, "joint_limit"),
        ({"motion__limit_margin_mm": 35.0}, "joint_limit: J3 would need"),
        ({"motion__singularity_deg": 88.0}, "joint_limit: comes too near"),
        ({"keepouts": [{"name": "post", "polygon_mm": [[280, 60], [300, 60], [290, 80]], "top_mm": 300.0}]},
         "keepout: would enter post"),
    ],
)  # fmt: skip
def test_each_of_these_can_forbid_the_plain_cycle(change: dict[str, object], says: str) -> None:
    assert _refusal(**change).startswith(says)


def test_a_part_taken_away_is_too_late() -> None:
    cycle, permit = _picked()
    assert cycle is not None
    gone = permit.refused(cycle, cycle.grasp_end_s - 0.1)
    assert gone is not None
    assert (gone.reason, "0.10 s" in gone.detail) == ("too_late", True)


def test_following_over_the_seam_of_j1_is_refused() -> None:
    """An arm that turns past half a turn: the two sides of the seam are a whole turn apart."""
    wide = {"arm__j1__min": -300.0, "arm__j1__max": 300.0, "arm__base_yaw_deg": 128.0}
    cycle, permit = _picked(**wide)
    assert cycle is not None
    lane = permit.mover.joints_on(cycle.hold, np.linspace(cycle.met_s, cycle.left_s, 30))
    assert np.abs(np.diff(lane[:, 0])).max() > 6, "this test is about a lane over the seam"
    refused = permit.refused(cycle)
    assert refused is not None
    assert refused.reason == "joint_limit"
    assert "J1" in refused.detail


def test_a_higher_clear_height_makes_the_cycle_longer() -> None:
    low, high = _picked(motion__travel_mm=-20.0)[0], _picked(motion__travel_mm=40.0)[0]
    assert low is not None
    assert high is not None
    assert high.release_end_s > low.release_end_s + 0.01
    straight = _picked(motion__travel_mm=-20.0, motion__approach_mm=60.0)[0]
    assert straight is not None
    assert straight.release_end_s > low.release_end_s + 0.01
