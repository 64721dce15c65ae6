"""Arrivals drawn anew: same statistics, known as far upstream as when recorded, the same for the same seed."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from some_cases import case, still, stream

from cameras.faults import InputFault
from pipeline.study import run
from pipeline.sweep.case import Case, digest
from pipeline.sweep.resample import MEAN_RUN, arrivals_a_minute, arrivals_of, lay_out, resampled, spread


@pytest.fixture(scope="module")
def recorded(tmp_path_factory: pytest.TempPathFactory) -> Case:
    """Sixty parts, 80 mm apart on average, on a belt that slows down and stops once."""
    def speed(t: np.ndarray) -> np.ndarray:
        return np.where((t > 20) & (t < 23), 0.0, np.where(t > 40, 80.0, 120.0))

    return case(tmp_path_factory.mktemp("recorded"), stream(60, 80.0, 65.0, speed))  # type: ignore[arg-type]


def along(one: Case) -> np.ndarray:
    return np.array([float(part.xy_mm @ one.heading) for part in one.parts])


def first_known_mm(one: Case) -> np.ndarray:
    """Where along the cell each part was when it was first seen."""
    return np.array([along(one)[k] + one.travel_mm[part.first_row] for k, part in enumerate(one.parts)])


def test_same_seed_same_parts_and_another_seed_others(recorded: Case) -> None:
    one, again, other = (resampled(recorded, 100.0, seed) for seed in (7, 7, 8))
    assert one.digest() == again.digest()
    assert digest(one.parts) != digest(other.parts)


def test_any_length_keeps_the_rate(recorded: Case) -> None:
    """Over half an hour as many parts a minute come as were recorded, within three standard errors."""
    long = resampled(recorded, 1800.0, 1)
    gaps = arrivals_of(recorded).gap_mm
    fed = np.ptp(along(long))
    expected = fed / gaps.mean()
    error = expected * gaps.std() / gaps.mean() / np.sqrt(expected / MEAN_RUN)
    assert abs(len(long.parts) - expected) < 3 * error
    assert long.lasts_s > 1800.0
    assert arrivals_a_minute(long) == pytest.approx(arrivals_a_minute(recorded), rel=0.15)


def test_a_part_is_known_as_far_upstream_as_when_recorded(recorded: Case) -> None:
    """To half the way of the belt between two frames."""
    drawn = resampled(recorded, 200.0, 3)
    step = np.diff(drawn.travel_mm).max()
    allowed = first_known_mm(recorded)
    for at in first_known_mm(drawn):
        assert np.abs(allowed - at).min() <= step / 2 + 1e-6
    assert min(part.first_row for part in drawn.parts) > 0


def test_angles_sides_and_places_across_are_recorded_ones(recorded: Case) -> None:
    known = {(part.kind, part.side, round(part.yaw_rad, 9)) for part in recorded.parts}
    drawn = resampled(recorded, 120.0, 5)
    assert {(part.kind, part.side, round(part.yaw_rad, 9)) for part in drawn.parts} <= known
    across = np.array([part.xy_mm[0] for part in drawn.parts])
    assert np.isin(np.round(across, 6), np.round([part.xy_mm[0] for part in recorded.parts], 6)).all()


def test_no_two_parts_lie_on_one_another(recorded: Case) -> None:
    """At three times the rate too: discs stay clear, or as near as recorded neighbours were."""
    base = arrivals_of(recorded)
    order = np.random.default_rng(0).integers(len(base.parts), size=300)
    laid = lay_out(base, order, 0.0, -np.inf, 3.0)
    at = np.column_stack([laid.along_mm, base.across_mm[laid.index]])
    apart = np.hypot(*(at[:, None] - at[None]).transpose(2, 0, 1))
    radius = base.radius_mm[laid.index]
    successive = np.subtract.outer(laid.index, laid.index) == np.subtract.outer(np.arange(300), np.arange(300))
    wrong = (apart < radius[:, None] + radius[None] - 1e-6) & ~successive
    assert not wrong.any()


def test_the_belt_keeps_its_speeds_and_stops(recorded: Case) -> None:
    drawn = resampled(recorded, 130.0, 2)
    times, counts = drawn.recording.times_s, drawn.recording.counts
    speeds = np.diff(drawn.travel_mm) / np.diff(times)
    assert (np.diff(times) > 0).all()
    assert (np.diff(counts) >= 0).all()
    assert (speeds < 1).mean() == pytest.approx(3.0 / 65.0, abs=0.02)
    assert speeds.max() == pytest.approx(120.0, rel=0.01)


def test_spread_at_rate_one_replays_as_recorded(recorded: Case) -> None:
    plain, same = (run(one.setting(), "arrival", 8) for one in (recorded, spread(recorded, 1.0)))
    assert [pick.part.number for pick in same.picks] == [pick.part.number for pick in plain.picks]
    starts = ([pick.cycle.grasp_start_s for pick in one.picks] for one in (plain, same))
    assert next(starts) == pytest.approx(next(starts), abs=1e-6)


def test_more_arrivals_lose_more(recorded: Case) -> None:
    lost = [sum(fate is not None for fate in run(spread(recorded, rate).setting(), "arrival", 4).fates)
            for rate in (0.5, 1.5, 3.0)]  # fmt: skip
    assert lost[0] < lost[1] < lost[2]


def test_whole_trays_are_drawn(tmp_path: Path) -> None:
    """Each drawn tray holds the parts of one that was recorded."""
    trays = case(tmp_path, still(4))
    sets = {frozenset(tuple(p.xy_mm.round(6)) for p in trays.parts if p.first_row == row) for row in range(4)}
    drawn = resampled(trays, 60.0, 1)
    assert drawn.lasts_s == pytest.approx(56.0)
    for row in range(len(drawn.recording)):
        assert frozenset(tuple(p.xy_mm.round(6)) for p in drawn.parts if p.first_row == row) in sets
    assert resampled(trays, 60.0, 1, rate=2.0).lasts_s == pytest.approx(60.0, abs=8.0)


@pytest.mark.parametrize("length_s", [0.0, -1.0, float("nan"), float("inf"), 1e9])
def test_a_length_that_will_not_do_is_refused(recorded: Case, length_s: float) -> None:
    with pytest.raises(InputFault, match="length"):
        resampled(recorded, length_s, 1)


def test_too_little_to_draw_from_is_refused(recorded: Case) -> None:
    with pytest.raises(InputFault, match="fewer than two parts"):
        resampled(replace(recorded, parts=recorded.parts[:1]), 60.0, 1)
    standing = replace(recorded, recording=replace(recorded.recording, counts=np.zeros(len(recorded.recording))))
    with pytest.raises(InputFault, match="does not move"):
        resampled(standing, 60.0, 1)
