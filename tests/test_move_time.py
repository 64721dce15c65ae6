"""The closed form of a move's time, against ruckig and a textbook's example."""

import numpy as np
import pytest
import ruckig
from hypothesis import given
from hypothesis import strategies as st
from some_arms import changed

from pipeline.arm import Arm
from pipeline.move_time import axis_time, move_time, rest_to_moving_most, rest_to_moving_time

SPEED, ACCEL, JERK = st.floats(0.05, 40), st.floats(0.5, 1000), st.floats(10, 60_000)  # SI: rad, m
WAY = st.one_of(st.floats(-6.5, 6.5), st.floats(-1e-3, 1e-3)).filter(lambda way: abs(way) > 1e-9 or way == 0)
SHARE = st.floats(-1, 1).filter(lambda share: abs(share) > 1e-9 or share == 0)  # ruckig takes less for zero


def ruckig_time(way: list[float], end: list[float], speed: list[float], accel: list[float], jerk: list[float]) -> float:
    """Duration by ruckig (Berscheid, Kroeger, Jerk-limited Real-time Trajectory Generation, RSS 2021)."""
    ask = ruckig.InputParameter(len(way))
    ask.target_position, ask.target_velocity = way, end
    ask.max_velocity, ask.max_acceleration, ask.max_jerk = speed, accel, jerk
    trajectory = ruckig.Trajectory(len(way))
    assert ruckig.Ruckig(len(way)).calculate(ask, trajectory) == ruckig.Result.Working
    return float(trajectory.duration)


@given(WAY, SPEED, ACCEL, st.one_of(JERK, st.just(np.inf)))
def test_one_axis_takes_what_ruckig_takes(way: float, speed: float, accel: float, jerk: float) -> None:
    assert axis_time(way, speed, accel, jerk) == pytest.approx(
        ruckig_time([way], [0.0], [speed], [accel], [jerk]), abs=1e-9)


@given(WAY, SHARE, SPEED, ACCEL, JERK)
def test_rest_to_moving_takes_what_ruckig_takes(
    way: float, share: float, speed: float, accel: float, jerk: float
) -> None:
    """To a point passed at any share of full speed, either way."""
    end = share * speed
    assert rest_to_moving_time(way, end, speed, accel, jerk) == pytest.approx(
        ruckig_time([way], [end], [speed], [accel], [jerk]), abs=1e-6)


@given(WAY, SHARE, SPEED, ACCEL, JERK)
def test_no_joint_takes_longer_than_it_may_take_at_most(
    way: float, share: float, speed: float, accel: float, jerk: float
) -> None:
    """What lets a leg pass over its quicker joints; and with no speed at the end it is the time itself."""
    most = rest_to_moving_most(way, share * speed, speed, accel, jerk)
    assert most >= float(rest_to_moving_time(way, share * speed, speed, accel, jerk)) - 1e-9
    assert rest_to_moving_most(way, 0.0, speed, accel, jerk) == pytest.approx(float(axis_time(way, speed, accel, jerk)))


@given(st.lists(st.floats(0, 1).map(lambda share: round(share, 9)), min_size=8, max_size=8))
def test_joints_in_time_with_each_other_take_what_ruckig_takes(shares: list[float]) -> None:
    """All four joints of an arm, synchronised, in metres and radians; ruckig takes ends a rounding apart for one."""
    cell = changed()
    arm = Arm(cell.arm, cell.tool)
    start, end = arm.limits.lower + np.reshape(shares, (2, 4)) * (arm.limits.upper - arm.limits.lower)
    metres = np.array([1, 1, 1e-3, 1])
    limits = [(metres * limit).tolist() for limit in (arm.limits.speed, arm.limits.accel, arm.limits.jerk)]
    assert move_time(arm, start, end) == pytest.approx(
        ruckig_time((metres * (end - start)).tolist(), [0.0] * 4, *limits), abs=1e-9)


def test_a_textbook_example() -> None:
    """Biagiotti, Melchiorri, Trajectory Planning for Automatic Machines and Robots (2008), section 3.4: a double S

    from speed 1 to rest over 10 with v = 5, a = 10, j = 30: 0.7333 s up, 1.1433 s level, 0.8333 s down (from memory).
    """
    assert rest_to_moving_time(10.0, 1.0, 5.0, 10.0, 30.0) == pytest.approx(0.7333 + 1.1433 + 0.8333, abs=2e-4)


@given(WAY, SPEED, ACCEL, JERK)
def test_passing_at_no_speed_is_stopping(way: float, speed: float, accel: float, jerk: float) -> None:
    assert rest_to_moving_time(way, 0.0, speed, accel, jerk) == pytest.approx(float(axis_time(way, speed, accel, jerk)))


@given(WAY, st.floats(-1, 1), SPEED, ACCEL, JERK)
def test_tighter_limits_never_shorten_a_move(way: float, share: float, speed: float, accel: float, jerk: float) -> None:
    end = 0.5 * share * speed
    full = rest_to_moving_time(way, end, speed, accel, jerk)
    for limits in ((0.6 * speed, accel, jerk), (speed, 0.6 * accel, jerk), (speed, accel, 0.6 * jerk)):
        assert rest_to_moving_time(way, end, *limits) >= full - 1e-9


def test_an_end_speed_above_the_limit_has_no_time() -> None:
    assert np.isnan(rest_to_moving_time(1.0, [2.1, -2.1, np.nan], 2.0, 10.0, 100.0)).all()


@pytest.mark.parametrize("joint", range(4))
@pytest.mark.parametrize("limit", ["max_speed", "max_accel", "max_jerk"])
def test_every_limit_of_every_joint_matters(joint: int, limit: str) -> None:
    """A slow axis: halving any one of its limits makes the move longer, leaving the jerk out makes it shorter."""
    slow = {"max_speed": 20.0, "max_accel": 100.0, "max_jerk": 1000.0}
    keys = {f"arm__j{joint + 1}__{key}": value for key, value in slow.items()}
    halved = {f"arm__j{joint + 1}__{limit}": slow[limit] / 2}
    start = np.array([0.0, 1.0, 20.0, 0.0])
    end = start + 100.0 * (np.arange(4) == joint) * (1.0 if joint == 2 else np.pi / 180)
    times = []
    for values in (keys, keys | halved, keys | {f"arm__j{joint + 1}__max_jerk": None}):
        cell = changed(**values)
        times.append(float(move_time(Arm(cell.arm, cell.tool), start, end)))
    assert times[1] > times[0] + 0.01
    assert times[2] < times[0] - 0.01


def test_moves_batch_over_leading_shapes() -> None:
    cell = changed()
    arm = Arm(cell.arm, cell.tool)
    ends = np.random.default_rng(0).uniform(arm.limits.lower, arm.limits.upper, (5, 3, 4))
    times = move_time(arm, arm.home, ends)
    assert times.shape == (5, 3)
    assert times[2, 1] == move_time(arm, arm.home, ends[2, 1])
    assert move_time(arm, ends[0, 0], ends[0, 0]) == 0
