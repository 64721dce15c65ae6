"""A round through all nodes, nothing ever late: many starts improved a little, the best of them at length, and a bound.

Where legs differ by direction it is sought under node prices: they add the same to every round, and the legs of good
rounds stand out.
"""

from collections.abc import Iterator
from time import perf_counter

import numpy as np

from pipeline.order.bound import priced_round, round_bound
from pipeline.order.chance import seeded
from pipeline.order.patch import patched_round
from pipeline.order.task import FloatArray, IntArray
from pipeline.order.tour import improve_round

KICKS, BEATS = 200_000, 8  # over the number of nodes: kicks in all; beats between which the clock is looked at
STARTS, SIZE = 96, 60  # rounds to start from, for so many nodes; fewer for more
SHARE = 128  # of all kicks, one in so many goes to each start
NEAR = 12
BLUR = 0.3  # of a start's costs: share of what the fourth nearest node costs more than the nearest
SAME = 1e-9


def best_round(cost: FloatArray, unit: float, hard: bool, seed: int, until: float) -> tuple[IntArray, float]:
    """The best round found through N > 3 nodes, from node 0, and a bound on every round.

    unit: every cost is a whole number of these, or 0. hard: worth more than one start. until: clock reading
    (perf_counter) after which nothing further is begun.
    """
    size, kicks = len(cost), KICKS // len(cost)
    tour = _nearest_next(cost)
    value = improve_round(cost, _near(cost), tour, 0.0, 0, seed, 0.0)
    bound, leave, enter = priced_round(cost, value, unit)
    if np.array_equal(cost, cost.T):
        leave, enter = np.zeros(size), np.zeros(size)
    priced = cost + leave[:, None] + enter
    np.fill_diagonal(priced, 0.0)
    near, shift = _near(priced), float(leave.sum() + enter.sum())
    warmth = float(np.median(_barred(cost, np.inf).min(axis=1)))
    starts = min(max(STARTS * SIZE**2 // size**2, 4), STARTS) if hard else 1
    shares = [kicks // SHARE] * starts + [(kicks - kicks // SHARE * starts) // BEATS] * BEATS
    begun = _starts(priced, tour, seed)
    for turn, share in enumerate(shares):
        if value <= bound + SAME * abs(value) or (turn and perf_counter() > until):
            break
        made = next(begun) if turn < starts else tour.copy()
        found = improve_round(priced, near, made, bound + shift, share, seed + turn, warmth) - shift
        if found < value - SAME * abs(value):
            tour, value = made, found
    value = float(cost[tour, np.roll(tour, -1)].sum())
    return np.roll(tour, -int(np.argmax(tour == 0))), max(bound, round_bound(cost, value, unit))


def _starts(cost: FloatArray, first: IntArray, seed: int) -> Iterator[IntArray]:
    """Rounds to start from: the one given, then patched assignments, all but the first of them of blurred costs."""
    yield first.copy()
    size, chance, blur = len(cost), seeded(seed), 0.0
    barred = _barred(cost, size * (np.abs(cost).max() + 1.0))
    least = np.sort(barred, axis=1)
    while True:
        made = np.empty(size, np.int64)
        patched_round(barred, blur, chance, made)
        yield made
        blur = BLUR * float(np.median(least[:, min(3, size - 2)] - least[:, 0]))


def _barred(cost: FloatArray, bar: float) -> FloatArray:
    """The costs, from a node to itself what forbids it."""
    return np.where(np.eye(len(cost), dtype=bool), bar, cost)


def _near(cost: FloatArray) -> IntArray:
    """(N, K) the nodes that cost least from each."""
    nearest = np.argsort(_barred(cost, np.inf), axis=1, kind="stable")
    return np.ascontiguousarray(nearest[:, : min(NEAR, len(cost) - 1)])


def _nearest_next(cost: FloatArray) -> IntArray:
    """A round to start from: always on to the nearest node not yet in it."""
    left = _barred(cost, np.inf)
    tour = np.zeros(len(cost), np.int64)
    for i in range(1, len(cost)):
        left[:, tour[i - 1]] = np.inf
        tour[i] = np.argmin(left[tour[i - 1]])
    return tour
