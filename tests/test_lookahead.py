"""The look-ahead against brute force: every sequence of grasps, timed by NumPy's own interpolation."""

from itertools import permutations, product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.order.lookahead import PickSequence, best_pick_sequence

T0, DT, STEPS = 1.0, 0.25, 12


def belt(seed, parts, grasps):
    """Legs to parts that come in reach and leave it again: durations that rise and fall, and times that don't do."""
    random = np.random.default_rng(seed)
    part_of = random.permutation(np.repeat(np.arange(parts), grasps))
    count, time = len(part_of), T0 + DT * np.arange(STEPS)
    finish = time + random.uniform(0.2, 0.8, (count + 1, count, 1)) + random.uniform(0, 0.3, (count + 1, count, STEPS))
    ready, gone = random.uniform(0, 2, (count, 1)), random.uniform(1.5, 4.5, (count, 1))
    finish[np.broadcast_to((finish > gone) | (random.random(finish.shape) < 0.05), finish.shape)] = np.inf
    finish = np.maximum(finish, ready)
    blocked = np.array([sum(1 << q for q in range(p) if random.random() < 0.2) for p in range(parts)], np.int64)
    weights = random.integers(1, 4, parts).astype(float)
    return finish, part_of, weights, blocked, random.uniform(1, 9, (count + 1, count))


def timed(finish, start, nodes):
    """When each node is done, waiting where that is quicker; None where one cannot be done."""
    times, row = [start], 0
    for node in nodes:
        line = np.minimum.accumulate(finish[row, node, ::-1])[::-1]
        at = max((times[-1] - T0) / DT, 0.0)
        low, high = int(np.floor(at)), int(np.ceil(at))
        if high >= STEPS or not np.isfinite(line[low]) or not np.isfinite(line[high]):
            return None
        times.append(float(np.interp(at, [low, high] if high > low else [low], line[[low, high][: 1 + (high > low)]])))
        row = node + 1
    return times[1:]


def every_sequence(finish, part_of, blocked, start):
    """All node sequences that can be done, with their finish times."""
    parts = len(blocked)
    for size in range(parts + 1):
        for chosen in permutations(range(parts), size):
            if any(blocked[p] & ~sum(1 << q for q in chosen[:i]) for i, p in enumerate(chosen)):
                continue
            for nodes in product(*(np.flatnonzero(part_of == p) for p in chosen)):
                times = timed(finish, start, nodes)
                if times is not None:
                    yield nodes, times


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 4), st.integers(1, 2), st.floats(0.0, 2.5), st.booleans())
def test_no_sequence_of_grasps_is_better(seed, parts, grasps, start, by_travel):
    """Most weight, then the earliest finish or the least travel, for the whole and after each first choice."""
    finish, part_of, weights, blocked, travel = belt(seed, parts, grasps)

    def rank(nodes, times):
        cost = sum(travel[a, b] for a, b in zip([0, *(n + 1 for n in nodes)], nodes, strict=False))
        return -sum(weights[part_of[n]] for n in nodes), cost if by_travel else (times[-1] if times else start)

    ranks = {nodes: rank(nodes, times) for nodes, times in every_sequence(finish, part_of, blocked, start)}
    best = best_pick_sequence(finish, part_of, weights, blocked, start, T0, DT, travel if by_travel else None,
                              alternatives=True)
    assert not best.cut
    assert best.weight_bound == best.weight
    assert (-best.weight, best.travel if by_travel else best.finish) == pytest.approx(min(ranks.values()), abs=1e-9)
    assert timed(finish, start, best.nodes) == pytest.approx(list(best.finish_s), abs=1e-9)
    for node in range(len(part_of)):
        first = min((r for nodes, r in ranks.items() if nodes[:1] == (node,)), default=(0.0, np.inf))
        value = best.first_travel if by_travel else best.first_finish
        assert best.first_weight[node] == pytest.approx(-first[0])
        assert np.isinf(first[1]) or value[node] == pytest.approx(first[1], abs=1e-9)


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(8, 60))
def test_cut_short_it_still_answers_and_its_bound_holds(seed, budget):
    """A budget of few states gives a sequence that can be done, never better than the best, within its own bound."""
    finish, part_of, weights, blocked, _ = belt(seed, 7, 2)
    whole = best_pick_sequence(finish, part_of, weights, blocked, T0, T0, DT)
    short = best_pick_sequence(finish, part_of, weights, blocked, T0, T0, DT, budget_states=budget)
    assert short.weight <= whole.weight <= short.weight_bound + 1e-9
    assert short.cut or (short.weight, short.finish) == (whole.weight, whole.finish)
    assert timed(finish, T0, short.nodes) == pytest.approx(list(short.finish_s), abs=1e-9)


def test_nothing_to_pick_is_an_answer():
    """No parts, and parts that cannot be picked, give an empty sequence that ends where it starts."""
    none = best_pick_sequence(np.zeros((1, 0, 3)), [], [], [], 2.0, 0.0, 0.1)
    late = best_pick_sequence(np.full((2, 1, 3), np.inf), [0], [1.0], [0], 2.0, 0.0, 0.1)
    for answer in (none, late):
        assert isinstance(answer, PickSequence)
        assert answer.nodes == ()
        assert (answer.weight, answer.finish, answer.cut) == (0.0, 2.0, False)


@pytest.mark.parametrize(("changed", "text"), [
    ({"finish": np.zeros((2, 1))}, "finish must have shape"), ({"finish": np.full((2, 1, 3), np.nan)}, "NaN"),
    ({"weights": [-1.0]}, "not negative"), ({"blocked_by": [2]}, "mask of 1 bits"), ({"part_of": [3]}, "part_of"),
    ({"dt": 0.0}, "dt positive"), ({"weights": np.ones(17)}, "at most"),
    ({"travel": [[1.0]]}, "travel must have shape"),
])
def test_arrays_that_do_not_fit_are_refused(changed, text):
    """The message says what is wrong."""
    good = {"finish": np.ones((2, 1, 3)), "part_of": [0], "weights": [1.0], "blocked_by": [0], "t_start": 0.0,
            "t0": 0.0, "dt": 0.1}
    with pytest.raises(ValueError, match=text):
        best_pick_sequence(**{**good, **changed})
