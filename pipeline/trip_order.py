"""The order of a whole tray in trips: up to k parts picked by k grippers in turn, then set down, the last one first.

Slots are filled in turn, so a part's slot follows from its place in the order; how the order is best cut into trips is
worked out along it (order first, cut second: Beasley 1983). Orders start from "nearest next" and are improved by
swapping, moving and turning round parts. The bound is an assignment of what follows each part and each slot, with a
price on every change between picking and setting down, of which full trips have the fewest (Lagrangian relaxation).
"""

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
FAR_S = 1e6  # stands for a leg that can't be had
STEPS = 25_000_000  # parts gone through in orders that are tried
STEPS_PER_MS = 10_000
PRICES_S = np.linspace(0.0, 1.2, 13)
HAIR = 1e-9


@dataclass(frozen=True)
class TripLegs:
    """Least times in s, over all ways to hold and to stand, of n parts, as many slots and k grippers.

    queue (n,): which slots a part goes to; first (q,): row of each queue's first slot. begin (n,): from where the arm
    is to contact; back (n, n): from a slot to contact with a part, by the first gripper. on (k-1, n, n): from contact
    with the row's part by a gripper to contact with the column's by the next. carry (k, n, n): from contact until the
    part is released at a slot. down (k-1, n, n): from the row's slot, of the next gripper, until released at the
    column's. Those that can't be had are FAR_S.
    """

    queue: IntArray
    first: IntArray
    begin: FloatArray
    back: FloatArray
    on: FloatArray
    carry: FloatArray
    down: FloatArray


@dataclass(frozen=True)
class TripOrder:
    """trips: parts of each. finish_s: how long they take by the least times. bound_s: no trips of all parts take
    less."""

    trips: tuple[tuple[int, ...], ...]
    finish_s: float
    bound_s: float


def trip_order(legs: TripLegs, budget_ms: float | None = None) -> TripOrder:
    """The best trips found. budget_ms bounds what is gone through, STEPS_PER_MS of it in a ms, not the clock."""
    kept = legs.queue, legs.first, legs.begin, legs.back, legs.on, legs.carry, legs.down
    order = _nearest(legs)
    cuts = np.zeros(len(order), np.int64)
    finish = improve_trips(*kept, order, cuts, STEPS if budget_ms is None else int(budget_ms * STEPS_PER_MS))
    ends = np.flatnonzero(cuts) + 1
    trips = tuple(tuple(one.tolist()) for one in np.split(order, ends[:-1]))
    return TripOrder(trips, float(finish), trip_bound(legs))


def trip_bound(legs: TripLegs) -> float:
    """No trips that pick all parts take less, with the grippers in turn and the last part picked set down first."""
    from scipy.optimize import linear_sum_assignment

    n, most = len(legs.queue), len(legs.carry)
    cost = np.full((2 * n + 1, 2 * n + 1), FAR_S)  # rows: start, parts, slots; columns: parts, slots, the end
    cost[0, :n], cost[n + 1 :, :n], cost[n + 1 :, 2 * n] = legs.begin, legs.back, 0.0
    slot_of = np.searchsorted(legs.first, np.arange(n), side="right") - 1
    cost[1 : n + 1, n : 2 * n] = np.where(legs.queue[:, None] == slot_of, legs.carry.min(axis=0), FAR_S)
    if most > 1:
        cost[1 : n + 1, :n] = legs.on.min(axis=0) + FAR_S * np.eye(n)
        cost[n + 1 :, n : 2 * n] = legs.down.min(axis=0) + FAR_S * np.eye(n)
    change = np.zeros_like(cost)
    change[1 : n + 1, n : 2 * n] = change[n + 1 :, :n] = 1.0
    least, best = 2 * -(-n // most) - 1, 0.0
    for price in PRICES_S:
        priced = cost - price * change
        best = max(best, float(priced[linear_sum_assignment(priced)].sum()) + price * least)
    return best


def _nearest(legs: TripLegs) -> IntArray:
    """An order (n,): trips as long as may be, of the part that is next soonest."""
    n, most = len(legs.queue), len(legs.carry)
    order, left, used, slot = np.empty(n, np.int64), np.ones(n, bool), np.zeros(len(legs.first), np.int64), -1
    for turn in range(n):
        gripper = turn % most
        begun = legs.back[slot] if turn else legs.begin
        times = legs.on[gripper - 1, order[turn - 1]] if gripper else begun
        part = int(np.where(left, times, np.inf).argmin())
        order[turn], left[part] = part, False
        if gripper == 0:
            slot = int(legs.first[legs.queue[part]] + used[legs.queue[part]])
        used[legs.queue[part]] += 1
    return order


LEGS = ("int64[::1], int64[::1], float64[::1], float64[:, ::1], float64[:, :, ::1], float64[:, :, ::1], "
        "float64[:, :, ::1]")


@njit(f"float64({LEGS}, int64[::1], int64[::1])", cache=True, nogil=True)
def cut(queue, first, begin, back, on, carry, down, order, cuts) -> float:  # type: ignore[no-untyped-def]
    """How long an order (n,) takes, cut into trips at best; cuts (n,): 1 where one ends."""
    n, most = len(order), len(carry)
    slot, used = np.empty(n, np.int64), np.zeros(len(first), np.int64)
    for t in range(n):
        slot[t] = first[queue[order[t]]] + used[queue[order[t]]]
        used[queue[order[t]]] += 1
    best, before = np.full((n + 1, most + 1), np.inf), np.zeros((n + 1, most + 1), np.int64)
    best[0, 0] = 0.0
    for i in range(n):
        picks, downs = 0.0, 0.0
        reach, from_m = np.inf, 0
        for m in range(most + 1):  # the trip before, which ends at the slot of its first part
            if best[i, m] < np.inf:
                way = best[i, m] + (begin[order[i]] if i == 0 else back[slot[i - m], order[i]])
                if way < reach:
                    reach, from_m = way, m
        for m in range(1, min(most, n - i) + 1):
            last = i + m - 1
            if m > 1:
                picks += on[m - 2, order[last - 1], order[last]]
                downs += down[m - 2, slot[last], slot[last - 1]]
            value = reach + picks + carry[m - 1, order[last], slot[last]] + downs
            if value < best[i + m, m]:
                best[i + m, m], before[i + m, m] = value, from_m
    at, m = n, int(best[n].argmin())
    least = best[n, m]
    cuts[:] = 0
    while at > 0:
        cuts[at - 1] = 1
        at, m = at - m, before[at, m]
    return float(least)


@njit(f"float64({LEGS}, int64[::1], int64[::1], int64)", cache=True, nogil=True)
def improve_trips(  # type: ignore[no-untyped-def]
    queue, first, begin, back, on, carry, down, order, cuts, steps,
) -> float:
    """Swap, move and turn round parts of an order (n,), in place, as long as that gains and steps are left."""
    n = len(order)
    best = cut(queue, first, begin, back, on, carry, down, order, cuts)
    spent, gained = n, True
    trial, trial_cuts = order.copy(), cuts.copy()
    while gained and spent < steps:
        gained = False
        for apart in range(1, n):
            for i in range(n - apart):
                j = i + apart
                for way in range(4):
                    if spent >= steps:
                        return best
                    trial[:] = order
                    if way == 0:
                        trial[i], trial[j] = order[j], order[i]
                    elif way == 1:
                        trial[i:j], trial[j] = order[i + 1 : j + 1], order[i]
                    elif way == 2:
                        trial[i + 1 : j + 1], trial[i] = order[i:j], order[j]
                    else:
                        trial[i : j + 1] = order[i : j + 1][::-1]
                    value = cut(queue, first, begin, back, on, carry, down, trial, trial_cuts)
                    spent += n
                    if value < best - HAIR:
                        best, gained = value, True
                        order[:], cuts[:] = trial, trial_cuts
    return best
