"""Whole trays in trips: orders and bounds against every order of few parts, least times against the motion."""

from collections.abc import Iterator
from dataclasses import replace
from itertools import permutations
from pathlib import Path

import numpy as np
import pytest
from checked_run import Files, fates, limits, slots, start, windows
from hypothesis import given, settings
from hypothesis import strategies as st
from some_streams import sanderling
from test_grippers import FOUR, TWO, filled, followed, held, straight
from test_tray_order import strewn
from test_whole_runs import written

from pipeline.replay import Run, replay
from pipeline.study import run
from pipeline.tray_trips import TrayTrips
from pipeline.trip import trips_of
from pipeline.trip_order import TripLegs, trip_bound, trip_order


def made(seed: int, parts: int, grippers: int, queues: int = 1) -> TripLegs:
    """Legs of any length, none of which follows from others."""
    random = np.random.default_rng(seed)
    queue = np.sort(random.integers(0, queues, parts)) if queues > 1 else np.zeros(parts, np.int64)
    queue = np.unique(queue, return_inverse=True)[1]
    first = np.searchsorted(queue, np.arange(queue.max() + 1))

    def legs(*shape: int) -> np.ndarray:
        return random.uniform(0.3, 1.2, shape)

    square = (parts, parts)
    return TripLegs(queue, first, legs(parts), legs(*square), legs(grippers - 1, *square), legs(grippers, *square),
                    legs(grippers - 1, *square))


def cuts_of(order: tuple[int, ...], most: int) -> Iterator[tuple[tuple[int, ...], ...]]:
    """Every way to cut an order into trips."""
    if not order:
        yield ()
    for many in range(1, min(most, len(order)) + 1):
        for rest in cuts_of(order[many:], most):
            yield (order[:many], *rest)


def takes_s(legs: TripLegs, trips: tuple[tuple[int, ...], ...]) -> float:
    """By the definition: gripper by gripper, then set down the last one first, each at its queue's next slot."""
    used, before, total = dict.fromkeys(range(len(legs.first)), 0), -1, 0.0
    for trip in trips:
        rows = []
        for part in trip:
            rows.append(int(legs.first[legs.queue[part]]) + used[int(legs.queue[part])])
            used[int(legs.queue[part])] += 1
        total += legs.begin[trip[0]] if before < 0 else legs.back[before, trip[0]]
        for gripper in range(len(trip) - 1):
            total += legs.on[gripper, trip[gripper], trip[gripper + 1]]
            total += legs.down[gripper, rows[gripper + 1], rows[gripper]]
        total += legs.carry[len(trip) - 1, trip[-1], rows[-1]]
        before = rows[0]
    return float(total)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 5), st.integers(1, 4), st.integers(1, 2))
def test_no_trips_of_few_parts_are_sooner_than_told(seed: int, parts: int, grippers: int, queues: int) -> None:
    """Brute force over every order and every cut: none beats the bound, and what was found is near the best."""
    legs = made(seed, parts, grippers, queues)
    best = min(takes_s(legs, trips) for order in permutations(range(parts)) for trips in cuts_of(order, grippers))
    found = trip_order(legs)
    assert sorted(part for trip in found.trips for part in trip) == list(range(parts))
    assert max(map(len, found.trips)) <= grippers
    assert takes_s(legs, found.trips) == pytest.approx(found.finish_s, abs=1e-9)
    assert found.bound_s <= best + 1e-9
    assert best - 1e-9 <= found.finish_s <= 1.15 * best


def test_an_order_is_cut_at_best() -> None:
    """Of all cuts of the order that was found none is sooner."""
    for seed in range(8):
        legs = made(seed, 9, 3, 2)
        found = trip_order(legs)
        order = tuple(part for trip in found.trips for part in trip)
        assert found.finish_s == pytest.approx(min(takes_s(legs, trips) for trips in cuts_of(order, 3)), abs=1e-9)


def test_a_budget_of_trips_gives_the_best_so_far() -> None:
    """The same each time, and no better than with more."""
    legs = made(4, 60, 3, 2)
    hasty, whole = trip_order(legs, 1.0), trip_order(legs)
    assert hasty == trip_order(legs, 1.0)
    assert whole.bound_s == hasty.bound_s == trip_bound(legs) < whole.finish_s < hasty.finish_s


def test_a_plan_tells_trips(tmp_path: Path) -> None:
    """And no decision over single picks, also of few parts; trips are as long as the tool has grippers."""
    stream = strewn(6, 60.0, tool__grippers=TWO)
    folder = stream.written(tmp_path / "six")
    told = sanderling("plan", folder, "--cell", folder / "cell.toml", "--located", folder / "located.csv", "--frame", 0,
                      "--out", tmp_path / "out")
    assert told.status == 0, told.err
    assert "Trips" in told.out
    assert "end before" in " ".join(told.out.split())
    assert "What could come first" not in told.out
    done = run(stream.setting(), "lookahead", 200)
    assert sorted({len(trip) for trip in trips_of(done.picks)}) in ([1, 2], [2])


def end_s(done: Run) -> float:
    return max(pick.release_end_s for pick in done.picks)


@pytest.mark.parametrize("grippers", [TWO, FOUR])
def test_least_times_are_those_of_the_motion(grippers: list[list[float]]) -> None:
    """A run in trips ends no sooner than its bound, and little later than its order's least times."""
    setting = strewn(30, 30.0, tool__grippers=grippers).setting()
    order = TrayTrips(setting.graspings, setting.legs, setting.parts)
    done = replay(setting, order, "some", 200, at_once=len(grippers))
    assert order.order is not None
    assert len(done.picks) == len(order.numbers)
    took = end_s(done) - order.planned_s
    assert order.bound(done.picks) <= end_s(done)
    assert order.order.bound_s <= order.order.finish_s <= took + 1e-3 * len(done.picks)
    assert took < 1.1 * order.order.finish_s
    assert order.bound(done.picks[1:]) == -np.inf


def test_ordered_trips_end_sooner_than_by_the_rule_and_tell_their_gap() -> None:
    """Both with the same parts into the same slots."""
    setting = strewn(40, 30.0, tool__grippers=[[0.0, 0.0, 0.0]] * 2).setting()
    by = {name: run(setting, name, 200) for name in ("nearest", "lookahead")}
    assert len(by["nearest"].picks) == len(by["lookahead"].picks) == 40
    assert end_s(by["lookahead"]) < end_s(by["nearest"])
    (note,) = by["lookahead"].notes
    bound = float(note.split("before ")[1].split(" s")[0])
    assert 0.8 * end_s(by["lookahead"]) < bound < end_s(by["lookahead"])


@pytest.mark.parametrize("grippers", [None, [[0.0, 0.0, 0.0], [40.0, 0.0, 0.0]]])
def test_two_hundred_parts_hold_from_their_files(grippers: list[list[float]] | None, tmp_path: Path) -> None:
    """The most a tray may have, within a budget."""
    stream = strewn(200, 14.0, order__budget_ms=50.0, **({"tool__grippers": grippers} if grippers else {}))
    stream = replace(stream, times_s=np.array([0.0, 400.0]), counts=np.zeros(2, int))
    out = written(stream, tmp_path, "lookahead")
    files = Files(tmp_path, out)
    assert [line for check in (limits, start, fates, windows, slots) for line in check(files)] == []
    assert len(files.picks) >= 199
    if grippers:
        followed(files, stream)
        straight(files)
        filled(files)
        assert held(files) == 2
