"""What motion is made of: curves, lifts and ways across, each against what it says of itself."""

import numpy as np
import pytest
import ruckig
from hypothesis import given, settings
from hypothesis import strategies as st
from some_arms import changed

from pipeline.arm import Arm
from pipeline.motion.across import J1_BY_PART, J2_BY_PART, TURNING, Across, at_rest
from pipeline.motion.curve import Curve, curves_of
from pipeline.motion.flip import flip_time
from pipeline.motion.lift import Lift, LiftLimits
from pipeline.move_time import axis_time

GATE_MM = 0.02  # a lift is looked up in a table: so near its gates the tip has hardly begun to move sideways


def _curve(seed: int) -> Curve:
    rng = np.random.default_rng(seed)
    ask, trajectory = ruckig.InputParameter(2), ruckig.Trajectory(2)
    ask.max_velocity, ask.max_acceleration, ask.max_jerk = rng.uniform(1, 5, (3, 2)).tolist()
    ask.current_position, ask.target_position = rng.uniform(-3, 3, (2, 2)).tolist()
    ask.current_velocity, ask.target_velocity = rng.uniform(-0.9, 0.9, (2, 2)).tolist()
    assert ruckig.Ruckig(2).calculate(ask, trajectory) >= 0
    return curves_of(trajectory, float(rng.uniform(-2, 2)), (1.0, -1000.0))[int(rng.integers(2))]


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6))
def test_extremes_and_travel_are_those_of_a_dense_sampling(seed: int) -> None:
    curve = _curve(seed)
    scale = max(abs(v) for v in curve.extremes()[:2]) + 1
    t = np.linspace(curve.start_s[0], curve.end_s, 40_001)
    states = np.array([curve.state(float(x)) for x in t[::40]])
    at = curve.at(t)
    low, high, speed, accel, jerk = curve.extremes()
    assert (at.min(), at.max()) == pytest.approx((low, high), abs=1e-6 * scale)
    assert low <= at.min() + 1e-12 * scale
    assert high >= at.max() - 1e-12 * scale
    assert np.abs(np.gradient(at, t)[1:-1]).max() == pytest.approx(speed, rel=1e-3)
    assert np.abs(states[:, 1]).max() <= speed * (1 + 1e-9) + 1e-12
    assert np.abs(states[:, 2]).max() <= accel * (1 + 1e-9) + 1e-12
    assert accel == pytest.approx(np.abs(states[:, 2]).max(), rel=0.05)
    assert jerk >= np.abs(np.diff(states[:, 2]) / np.diff(t[::40])).max() * (1 - 1e-6)
    assert curve.travel() == pytest.approx(np.abs(np.diff(at)).sum(), rel=1e-6)


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 10**6))
def test_pieces_join_in_place_speed_and_acceleration(seed: int) -> None:
    curve = _curve(seed)
    scale = max(abs(v) for v in curve.extremes()) + 1
    for seam in curve.start_s[1:]:
        before, after = curve.state(float(seam) - 1e-12), curve.state(float(seam) + 1e-12)
        assert before == pytest.approx(after, abs=1e-8 * scale)


def test_curves_hold_still_outside_their_time() -> None:
    curve = _curve(3)
    ends = curve.at(np.array([curve.start_s[0] - 5, curve.start_s[0], curve.end_s, curve.end_s + 5]))
    assert ends[0] == ends[1]
    assert ends[2] == ends[3]
    later = curve.later(2.5)
    assert later.at(np.array([curve.end_s + 2.0])) == pytest.approx(curve.at(np.array([curve.end_s - 0.5])))
    both = Curve.joined([Curve.held(7.0, 0.0, 1.0), Curve.held(8.0, 1.0, 2.0)])
    assert both.at(np.array([0.5, 1.5])).tolist() == [7.0, 8.0]


# ---- lifts


LIFT = LiftLimits(900.0, 9000.0, 180000.0, 120.0)


@settings(max_examples=30, deadline=None)
@given(st.floats(-40, 20), st.floats(-40, 20), st.floats(0, 15), st.floats(0, 0.5))
def test_a_lift_takes_the_time_it_says_and_clears_its_gates(from_mm: float, to_mm: float, approach: float,
                                                            across_s: float) -> None:
    lift = Lift(from_mm, to_mm, 0.0, max(0.0, to_mm + approach), 5.0, LIFT)
    curve = lift.curve(across_s)
    assert curve.end_s == pytest.approx(lift.total_s(across_s), abs=1e-6)
    low, high, speed, accel, jerk = curve.extremes()
    assert low >= min(from_mm, to_mm) - 1e-6
    assert high >= lift.apex_mm - 1e-6
    assert high <= LIFT.top_mm + 1e-6
    assert (speed <= 900.0 * (1 + 1e-6), accel <= 9000.0 * (1 + 1e-6), jerk <= 180000.0 * (1 + 1e-6)) == (True,) * 3
    begins = lift.rise_s(across_s)
    if across_s > 0:
        z = curve.at(np.linspace(begins, begins + across_s, 400))
        assert z.min() >= lift.gate_up_mm - GATE_MM
        falling = z[1:][np.diff(z) < -1e-9]
        assert falling.min(initial=np.inf) >= lift.gate_down_mm - GATE_MM
    assert (curve.state(0.0)[0], curve.state(curve.end_s)[0]) == pytest.approx((from_mm, to_mm), abs=1e-6)


@settings(max_examples=30, deadline=None)
@given(st.floats(-40, 20), st.floats(-40, 20), st.floats(0, 0.6), st.floats(0, 0.3))
def test_more_time_across_never_shortens_a_lift(from_mm: float, to_mm: float, across_s: float, more: float) -> None:
    lift = Lift(from_mm, to_mm, 0.0, max(0.0, to_mm + 5.0), 5.0, LIFT)
    assert lift.total_s(across_s + more) >= lift.total_s(across_s) - 1e-9
    assert lift.curve(across_s + more).end_s >= lift.curve(across_s).end_s - 1e-9


# ---- ways across


def test_a_way_to_a_standing_part_takes_as_long_as_the_closed_form_says() -> None:
    """Against the closed-form double S times of Biagiotti and Melchiorri (2008), section 3.4."""
    cell = changed()
    arm = Arm(cell.arm, cell.tool)
    across, rng = Across(arm, 0.1), np.random.default_rng(5)
    for _ in range(30):
        start, end = rng.uniform(-2, 2, (2, 4))
        way = across.between(at_rest(start), at_rest(end))
        limits = arm.limits
        needed = axis_time(end - start, limits.speed, limits.accel, limits.jerk)[TURNING].max()
        assert way.duration == pytest.approx(needed, abs=1e-9)


@pytest.mark.parametrize("shape", [J1_BY_PART, J2_BY_PART])
def test_a_joint_apart_takes_another_way_in_the_same_time(shape: int) -> None:
    cell = changed()
    across = Across(Arm(cell.arm, cell.tool), 0.1)
    ends = at_rest(np.array([0.0, 0.4, 0.0, 0.0])), at_rest(np.array([1.5, 1.0, 0.0, 2.0]))
    together, apart = across.between(*ends), across.between(*ends, shape=shape)
    assert apart.duration == pytest.approx(together.duration)
    middle = np.array([together.duration / 2])
    differs = [abs(float((a.at(middle) - b.at(middle))[0])) > 1e-3
               for a, b in zip(together.curves, apart.curves, strict=True)]
    if shape == J2_BY_PART:
        assert differs[1]
    assert [c.state(apart.duration)[0] for c in apart.curves] == pytest.approx([1.5, 1.0, 2.0])


def test_the_elbow_changes_only_away_from_the_part() -> None:
    """A change of elbow takes longer the nearer the part is to the stretched arm, and none where it is too near."""
    assert flip_time(1.0, 0.8, 0.14) == 0.0
    assert flip_time(-1.0, 0.3, 0.14) > flip_time(-1.0, 1.0, 0.14) > 0
    assert np.isinf(flip_time(-1.0, 0.1, 0.14))
