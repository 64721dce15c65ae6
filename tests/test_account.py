"""What is said of a run: phases, pace, loads, windows, choices; and the plots of them."""

from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from some_pages import Made, made, plain
from some_streams import belt, scattered

from pipeline.account.choices import choices_of
from pipeline.account.loads import loads_of
from pipeline.account.pace import pace_of
from pipeline.account.phases import phases_of, split_of
from pipeline.account.windows import windows_of
from pipeline.page.charts import ticks
from pipeline.plots.written import write_plots
from pipeline.policy import Lookahead


@pytest.fixture(scope="module")
def one(tmp_path_factory: pytest.TempPathFactory) -> Made:
    return plain(tmp_path_factory.mktemp("page"))


def test_phases_tell_the_whole_run_without_gaps(one: Made) -> None:
    phases = phases_of(one.run)
    assert phases[0].start_s == one.run.start_s
    assert phases[-1].end_s == one.run.picks[-1].cycle.release_end_s
    assert all(before.end_s == after.start_s for before, after in pairwise(phases))
    dwell = [phase.end_s - phase.start_s for phase in phases if phase.name == "dwell"]
    assert dwell == pytest.approx([one.setting.cell.motion.grasp_s] * len(one.run.picks))


def test_a_split_adds_up_to_its_cycle(one: Made) -> None:
    whole = [pick.cycle.release_end_s - pick.cycle.depart_s for pick in one.run.picks]
    assert split_of(one.run).sum(axis=1) == pytest.approx(whole)
    assert (split_of(one.run) >= 0).all()


def test_loads_reach_the_limits_and_never_pass_them(one: Made) -> None:
    """Against the exact extremes of the planned curves."""
    loads, limits = loads_of(one.run), one.run.mover.arm.limits
    assert loads is not None
    assert loads.peak_speed.max() < 1.001
    assert loads.peak_accel.max() < 1.001
    exact = [max(curve.extremes()[2] for pick in one.run.picks for curve in (pick.cycle.out[k], pick.cycle.back[k]))
             for k in range(3)]
    assert loads.peak_speed[[0, 1, 3]] == pytest.approx(np.array(exact) / limits.speed[[0, 1, 3]], abs=0.02)
    assert loads.speed.max(axis=0) == pytest.approx(loads.peak_speed)


def test_pace_counts_every_pick_once(one: Made) -> None:
    pace = pace_of(one.run, one.setting)
    assert pace.mean_per_min == pytest.approx(60 * len(one.run.picks) / (one.run.end_s - one.run.start_s))
    last = pace.picks_per_min[-1] * pace.span_s / 60
    recent = [p for p in one.run.picks if p.cycle.release_end_s > one.run.end_s - pace.span_s]
    assert last == pytest.approx(len(recent))


def test_parts_are_gripped_inside_their_windows(one: Made) -> None:
    windows = windows_of(one.setting)
    for pick in one.run.picks:
        window = windows[pick.part.number - 1]
        assert window.known_s <= pick.decided_s + 1e-9
        assert window.enters_s - 1e-6 <= pick.cycle.grasp_start_s <= window.leaves_s + 1e-6


def test_choices_know_a_bound_where_the_order_gives_one(one: Made, tmp_path: Path) -> None:
    assert choices_of(one.run).bounded == 0
    ahead = made(belt(scattered(4, 6, 90.0), 14.0, 150.0), tmp_path, Lookahead())
    told = choices_of(ahead.run)
    assert told.bounded == told.decisions == len(ahead.run.picks) > 0
    assert told.best == sum(gap < 1e-9 for gap in told.gaps)


@given(st.floats(-1e4, 1e4), st.floats(1e-3, 1e4))
def test_ticks_are_few_and_inside(low: float, wide: float) -> None:
    marks = ticks(low, low + wide)
    assert 2 <= len(marks) <= 8
    assert low - 1e-6 * wide <= marks[0]
    assert marks[-1] <= low + wide * (1 + 1e-6)


def test_plots_are_written_and_the_same_again(one: Made, tmp_path: Path) -> None:
    first = [path.read_bytes() for path in write_plots(tmp_path / "a", one.setting, one.run)]
    again = [path.read_bytes() for path in write_plots(tmp_path / "b", one.setting, one.run)]
    assert len(first) == 6
    assert first == again
    assert all(data.startswith(b"\x89PNG") for data in first)


def test_a_way_to_where_the_arm_waits_counts_as_across(one: Made) -> None:
    """Put into the longest wait."""
    longest = max((phase for phase in phases_of(one.run) if phase.name == "waiting"), key=lambda p: p.end_s - p.start_s)
    home, middle = one.run.home, 0.5 * (longest.start_s + longest.end_s)
    assert home is not None
    way = replace(home, depart_s=longest.start_s, end_s=middle)
    phases = phases_of(replace(one.run, waits=(way,)))
    assert all(before.end_s == after.start_s for before, after in pairwise(phases))
    assert [p.name for p in phases if longest.start_s <= p.start_s < longest.end_s] == ["across", "waiting"]
