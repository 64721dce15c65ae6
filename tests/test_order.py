"""The order of picks against brute force, published optima and what an order must keep whatever its size."""

from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from made_rounds import least_round, made
from published_orders import read_best_known, read_optima, read_tsplib, read_windowed

from pipeline.order import best_order
from pipeline.order.bound import round_bound, whole_bound
from pipeline.order.exact import search
from pipeline.order.relaxed import walk_bound
from pipeline.order.task import checked_task


def walked(order, legs, windows, service, close):
    """Finish and travel of an order told in plain steps, None where a window is broken or a leg impossible."""
    if not order:
        return 0.0, 0.0
    time, travel, at = 0.0, 0.0, 0
    for item in order:
        travel += legs[at, item + 1]
        time = max(time + legs[at, item + 1], windows[item, 0])
        if not time <= windows[item, 1] or not np.isfinite(time):
            return None
        time += service[item]
        at = item + 1
    back = legs[at, 0] if close else 0.0
    return (time + back, travel + back) if np.isfinite(back) else None


def best_by_brute_force(legs, windows, service, weights, after, objective, close):
    """(weight lost, value) of the best of all orders of all subsets, made longer item by item, none thrown out."""
    n, best = len(service), (weights.sum(), 0.0)
    needs = [sum({1 << i for i, k in after if k == j}) for j in range(n)]
    done, at, time, travel = np.zeros(1, int), np.zeros(1, int), np.zeros(1), np.zeros(1)
    for _ in range(n):
        longer = []
        for j in range(n):
            may = (done >> j & 1 == 0) & (done & needs[j] == needs[j])
            start = np.maximum(time[may] + legs[at[may], j + 1], windows[j, 0])
            fits = (start <= windows[j, 1]) & np.isfinite(start)
            longer.append((done[may][fits] | 1 << j, np.full(fits.sum(), j + 1), start[fits] + service[j],
                           (travel[may] + legs[at[may], j + 1])[fits]))
        done, at, time, travel = (np.concatenate(column) for column in zip(*longer, strict=True))
        lost = weights.sum() - (done[:, None] >> np.arange(n) & 1) @ weights
        value = (travel if objective == "travel" else time) + (legs[at, 0] if close else 0.0)
        for least in np.unique(lost[np.isfinite(value)])[:1]:
            best = min(best, (least, value[lost == least].min()))
    return best


def task(seed, n, *, timed, blocked, weighed, gaps):
    """A random task in small whole numbers, so that ties and zero legs are common."""
    random = np.random.default_rng(seed)
    legs = random.integers(0, 12, (n + 1, n + 1)).astype(float)
    legs[random.random(legs.shape) < gaps] = np.inf
    early = random.integers(0, 25, n).astype(float)
    windows = np.stack([early, early + random.integers(0, 30, n)], axis=1) if timed else np.tile([0.0, np.inf], (n, 1))
    after = [(i, j) for j in range(n) for i in range(j) if blocked and random.random() < 0.25]
    rename = random.permutation(n)
    weights = random.integers(1, 4, n).astype(float) if weighed else np.ones(n)
    return legs, windows, random.integers(0, 5, n).astype(float), weights, [(rename[i], rename[j]) for i, j in after]


@settings(max_examples=150, deadline=None)
@given(st.integers(0, 10**6), st.integers(0, 9), st.booleans(), st.booleans(), st.booleans(),
       st.sampled_from([0.0, 0.15]), st.sampled_from(["finish", "travel"]), st.booleans())
def test_no_order_of_any_subset_is_better(seed, n, timed, blocked, weighed, gaps, objective, close):
    """Windows, service, precedence, weights, impossible legs, open and closed, both objectives."""
    legs, windows, service, weights, after = task(seed, n, timed=timed, blocked=blocked, weighed=weighed, gaps=gaps)
    best = best_order(legs, windows, service, weights, after, objective, close)
    lost, value = best_by_brute_force(legs, windows, service, weights, after, objective, close)
    assert sorted([*best.order, *best.dropped]) == list(range(n))
    assert walked(best.order, legs, windows, service, close)[objective == "travel"] == pytest.approx(best.value)
    assert weights[list(best.dropped)].sum() == pytest.approx(lost)
    assert best.value == pytest.approx(value)
    assert best.proven
    assert best.gap == 0.0
    assert best.bound == best.value


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from(["finish", "travel"]), st.booleans())
def test_a_search_cut_short_keeps_its_bound_below_the_best(seed, objective, timed):
    """However few partial orders are kept, the floor is no higher and the order no better than the best."""
    legs, windows, service, weights, after = task(seed, 9, timed=False, blocked=True, weighed=False, gaps=0.0)
    windows[:, 1] = 90.0 if timed else np.inf
    problem = checked_task(legs, windows, service, weights, after, objective, True)
    whole, short = search(problem, strict=True, width=1 << 16), search(problem, strict=True, width=3)
    assert not whole.cut
    if whole.nodes is not None:
        assert short.floor <= whole.value + 1e-9
        assert whole_bound(problem, whole.value * 1.05) <= whole.value + 1e-9
        assert short.nodes is None or short.value >= whole.value - 1e-9


@settings(max_examples=80, deadline=None)
@given(st.integers(0, 10**6), st.integers(3, 9), st.sampled_from(["finish", "travel"]), st.booleans(), st.booleans(),
       st.sampled_from([1.0, 1.05, 1.5]))
def test_the_bound_of_walks_is_below_every_order(seed, n, objective, close, blocked, slack):
    """Whatever value is to be beaten, with precedence, service and windows of all widths."""
    legs, _, service, _, after = task(seed, n, timed=False, blocked=blocked, weighed=False, gaps=0.1)
    early = np.random.default_rng(seed).uniform(0, 60, n)
    windows = np.stack([early, early + np.random.default_rng(seed + 1).uniform(0, 150, n)], axis=1)
    problem = checked_task(legs + 1.0, windows, service, None, after, objective, close)
    best = search(problem, strict=True, width=1 << 16)
    if best.nodes is not None:
        assert walk_bound(problem, slack * best.value, np.inf) <= best.value + 1e-9


@pytest.mark.parametrize("seed", range(5))
def test_walks_prove_what_a_tree_cannot(seed):
    """Four narrow windows among wide ones force ways to and fro that no tree sees."""
    random, n = np.random.default_rng(seed), 12
    at = random.integers(0, 100, (n + 1, 2))
    early = np.where(np.arange(n) % 3 == 0, random.uniform(0, 500, n), 0.0)
    windows = np.stack([early, early + np.where(early > 0, 60.0, 900.0)], axis=1)
    legs = np.hypot(*(at[:, None] - at).transpose(2, 0, 1)) + 1.0
    problem = checked_task(legs, windows, None, None, None, "travel", True)
    best = search(problem, strict=True, width=1 << 16)
    assert not best.cut
    assert walk_bound(problem, best.value, np.inf) > 0.999 * best.value
    assert seed != 4 or whole_bound(problem, best.value) < 0.75 * best.value


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.integers(3, 8), st.booleans())
def test_the_bound_on_rounds_is_below_every_round(seed, size, symmetric):
    """1-tree ascent and assignment, legs that differ by direction and ones that do not."""
    cost = np.random.default_rng(seed).integers(0, 30, (size, size)).astype(float)
    cost = cost + cost.T if symmetric else cost
    least = min(sum(cost[a, b] for a, b in zip((0, *rest), (*rest, 0), strict=True))
                for rest in permutations(range(1, size)))
    bound = round_bound(cost, least * 1.1 + 1.0)
    assert bound <= least + 1e-9
    assert round_bound(cost, least * 1.1 + 1.0, unit=1.0) >= bound - 1e-9


def test_published_tours_have_their_published_length(reference_folder):
    """The reader of the instances is right, or no figure below means anything (Reinelt 1991)."""
    folder = reference_folder / "ordering" / "tsplib"
    optima = read_optima(folder.parent)
    for path in sorted(folder.glob("*.opt.tour")):
        instance = path.name.replace(".opt.tour", ".tsp")
        words = path.read_text().split("TOUR_SECTION")[1].split()
        tour = np.array([int(word) for word in words[: words.index("-1")]]) - 1
        assert read_tsplib(folder / instance)[tour, np.roll(tour, -1)].sum() == optima[instance]


def test_rounds_of_the_library_are_at_their_optimum(reference_folder):
    """TSPLIB (Reinelt 1991): within 1 % each, 0.1 % in the mean, the bound below the optimum and within 3 %."""
    folder = reference_folder / "ordering" / "tsplib"
    gaps, bounds = [], []
    for name, optimum in read_optima(folder.parent).items():
        legs = read_tsplib(folder / name)
        best = best_order(legs, objective="travel", close=True)
        nodes = [0, *(item + 1 for item in best.order)]
        assert sorted(nodes) == list(range(len(legs)))
        assert sum(legs[a, b] for a, b in zip(nodes, [*nodes[1:], 0], strict=True)) == best.value
        assert best.bound <= optimum <= best.value
        assert best.proven == (best.bound == best.value)
        gaps.append(best.value / optimum - 1.0)
        bounds.append(1.0 - best.bound / optimum)
    assert max(gaps) <= 0.01
    assert np.mean(gaps) <= 0.001
    assert np.mean(bounds) <= 0.03


@pytest.mark.parametrize(("kind", "size", "seed"), [
    ("one-way groups", 42, 5), ("one-way groups", 36, 4), ("any", 36, 4), ("streets", 30, 3), ("skewed", 25, 2),
    ("flow shop", 30, 3), ("heaps", 25, 2), ("roads", 25, 2),
])
def test_rounds_of_other_kinds_are_near_the_optimum_of_an_integer_programme(kind, size, seed):
    """HiGHS knows the optimum: at most 1 % above it, and the bound at most 3 % below; thousands on a leg or none."""
    legs = made(kind, size, seed)
    best, optimum = best_order(legs, objective="travel", close=True), least_round(legs)
    assert optimum <= best.value <= 1.01 * optimum
    assert 0.97 * optimum <= best.bound <= optimum + 1e-6


def test_how_legs_lie_in_memory_does_not_matter():
    """Transposed and column by column: the same numbers, the same order."""
    legs = made("any", 20, 0)
    plain = best_order(legs)
    assert best_order(np.asfortranarray(legs)) == plain
    assert best_order(legs.T.copy().T) == plain
    assert best_order(np.repeat(legs, 2, axis=1)[:, ::2]) == plain


@pytest.mark.parametrize("family", ["Dumas", "AFG", "SolomonPesant", "SolomonPotvinBengio"])
def test_instances_with_windows_are_at_their_best_known_finish(reference_folder, family):
    """Dumas et al. 1995, Ascheuer 1995, Solomon's RC2: the best known makespan, the Dumas ones proven."""
    folder = reference_folder / "ordering"
    for row in read_best_known(folder):
        if row["family"] != family:
            continue
        times, windows = read_windowed(folder / "tsptw" / row["file"])
        best = best_order(times, windows[1:], objective="finish", close=True)
        known = float(row["best_makespan"])
        assert best.dropped == (), row["file"]
        finish = walked(best.order, times, np.add(windows[1:], [0, 1e-6]), np.zeros(len(times) - 1), True)[0]
        assert finish == pytest.approx(best.value)
        assert best.bound <= known + 1e-3, row["file"]
        assert best.value <= known * (1.0 if family == "Dumas" else 1.01) + 1e-3, row["file"]
        assert best.proven or family != "Dumas", row["file"]


def test_the_fewest_are_dropped_where_not_all_fit(reference_folder):
    """A twin that wants the very moment of another: one of the two goes, the lighter one, and the finish stays."""
    times, windows = read_windowed(reference_folder / "ordering" / "tsptw" / "Dumas" / "n20w20.001.txt")
    plain = best_order(times, windows[1:], close=True)
    item = plain.order[9]
    reached = walked(plain.order[:10], times, windows[1:], np.zeros(20), False)[0]
    twice = [*range(21), item + 1]
    legs, both = times[np.ix_(twice, twice)], windows[twice][1:]
    legs[[item + 1, 21], [21, item + 1]] = 1.0
    both[[item, 20]] = reached
    for weight, dropped in ((0.5, 20), (2.0, item)):
        best = best_order(legs, both, weights=[1.0] * 20 + [weight], close=True)
        assert best.proven
        assert best.dropped == (dropped,)
        assert best.value == plain.value


def test_what_waits_for_a_dropped_item_is_dropped_too():
    """j may be done only once i is done; a heavy j pulls i in, an i that cannot be done takes j out."""
    legs = np.ones((4, 4))
    late = np.array([[0.0, 0.5], [0.0, 9.0], [0.0, 9.0]])
    assert best_order(legs, late, after=[(0, 1)]).dropped == (0, 1)
    tight = np.array([[0.0, 9.0], [0.0, 2.0], [0.0, 1.0]])
    assert best_order(legs, tight, after=[(0, 1)], weights=[1.0, 5.0, 3.0]).order == (0, 1)
    assert best_order(legs, tight, after=[(0, 1)], weights=[1.0, 1.0, 3.0]).order[0] == 2


@pytest.mark.parametrize("count", [25, 70])
def test_same_input_and_seed_give_the_same_order(count):
    """Also where the search is heuristic, and over the 62 items a set of bits can hold."""
    random = np.random.default_rng(3)
    legs = random.uniform(1, 9, (count + 1, count + 1))
    early = random.uniform(0, 100, count)
    windows = np.stack([early, early + 150.0], axis=1)
    first, again = (best_order(legs, windows, seed=5) for _ in range(2))
    assert first == again
    assert first.bound <= first.value
    later, none = np.add(windows, [0, 1e-6]), np.zeros(count)
    assert walked(first.order, legs, later, none, False)[0] == pytest.approx(first.value)
    cut = best_order(legs, windows, seed=5, budget_s=1e-6)
    assert walked(cut.order, legs, later, none, False)[0] == pytest.approx(cut.value)
    assert cut.bound <= first.value + 1e-9 or cut.dropped != first.dropped


@pytest.mark.parametrize("factor", [2.0**-40, 1e-6, 1e9])
def test_the_unit_of_time_does_not_matter(factor):
    """Nanoseconds or years: the same order at the value scaled."""
    legs, windows, service, weights, _ = task(11, 20, timed=True, blocked=False, weighed=True, gaps=0.0)
    for times in (windows, None):
        plain = best_order(legs, times, service, weights, close=True)
        scaled = best_order(legs * factor, None if times is None else times * factor, service * factor,
                            weights, close=True)
        assert scaled.value == pytest.approx(plain.value * factor)
        assert scaled.dropped == plain.dropped


@pytest.mark.parametrize(("changed", "text"), [
    ({"legs": np.ones((2, 3))}, "square"), ({"legs": [[0, np.nan, 1]] * 3}, "leg 0 to 1 is nan"),
    ({"legs": -np.ones((3, 3))}, "negative"), ({"windows": [[0, 1]]}, "each of 2 items"),
    ({"windows": [[0, 1], [5, 4]]}, "item 1 has 5.0 and 4.0"), ({"service": [1.0]}, "service must hold one number"),
    ({"service": [1.0, np.inf]}, "item 1 has inf"), ({"weights": [1.0, -2.0]}, "item 1 has -2.0"),
    ({"weights": [1.0, 0.0]}, "weights must be positive"), ({"after": [(0, 2)]}, "not there"),
    ({"after": [(0, 1), (1, 0)]}, "0 before 1 before 0|1 before 0 before 1"), ({"after": [3]}, "pairs"),
    ({"after": [(1, 1)]}, "1 before 1"), ({"objective": "cost"}, "finish"), ({"budget_s": 0.0}, "budget_s"),
])
def test_bad_arguments_are_refused(changed, text):
    """The message names the argument and the value."""
    with pytest.raises(ValueError, match=text):
        best_order(**{"legs": np.ones((3, 3)), **changed})
