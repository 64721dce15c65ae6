"""The order of picks against brute force, published optima and what an order must keep whatever its size."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pipeline.order import best_order


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


@settings(max_examples=60, deadline=None)
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
