"""The order of a whole tray: nothing moves, so all its parts are ordered at once, picks and slots together.

Slots are filled one after the other, so which slot a part goes to, and from which the arm comes, follows from its turn.
For a given order the ways to hold each part and to stand at each slot are the best there are (dynamic programming along
the order: Viterbi 1967). The order starts from an assignment of parts to turns (Jonker, Volgenant 1987, through SciPy)
and from the rule "nearest next", and is improved by moving and swapping parts until nothing gains.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pipeline.tray_steps import HAIR, forward, improve, least_to_go, nearest_next

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
FAR = 1e6  # stands for a leg that can't be had where costs are summed
MOVED = 24  # turns that a part is moved by, at most
PASSES = 12
AGAIN = 400  # over the number of parts: how often the best order is shaken and improved anew
SHAKEN = 8  # parts in a row
STEPS_PER_MS = 4000  # turns gone through, so a budget in ms gives the same answer on any machine
MOST_STEPS = 10**12
TIME_SHARES = (0.0, 0.25, 0.5, 0.75)


@dataclass(frozen=True)
class Tray:
    """n still parts with h ways to hold them, and q queues of slots with r ways to stand at them.

    numbers (n,): of the parts. begins (n+1,): first hold of each. queue (n,): which slots a part goes to. slots (q, k):
    first way to stand at each queue's slots in turn, the last column the end. out (r+1, h): s from leaving a slot to
    contact, the last row from where the arm is. carry (h, r): s from contact to being free again; inf: not so.
    weights (n,). after (n, n): the column's part must go before the row's. left_s: until the tray is taken away.
    grasp_s: dwell. rests (r, 4): joints at the slots. out_travel (r+1, h), carry_travel (h, r): joint travel of the
    legs, each joint's in s at its full speed.
    """

    numbers: IntArray
    begins: IntArray
    queue: IntArray
    slots: IntArray
    out: FloatArray
    carry: FloatArray
    weights: FloatArray
    after: NDArray[np.bool_]
    left_s: float
    grasp_s: float
    rests: FloatArray
    out_travel: FloatArray
    carry_travel: FloatArray


@dataclass(frozen=True)
class TrayOrder:
    """order: parts in turn, first those that are picked. weight: of these. ways (picked, 2): hold and way to stand at
    the slot of each. finish_s, travel_s: how long they take, and their joint travel, s at full speed. bound_s,
    travel_bound_s: no order that picks all of them takes, or travels, less (0 where some are left out, and where the
    objective is the other). time_share: of the cost that the order was judged by, the rest is travel. steps: turns
    gone through. cut: the budget ran out."""

    order: tuple[int, ...]
    picked: int
    weight: float
    ways: tuple[tuple[int, int], ...]
    finish_s: float
    travel_s: float
    bound_s: float
    travel_bound_s: float
    time_share: float
    steps: int
    cut: bool

    @property
    def gap(self) -> float:
        """Share of the time (the travel, where that is the objective) by which the order may be too long, at most."""
        value, bound = (self.travel_s, self.travel_bound_s) if self.travel_bound_s else (self.finish_s, self.bound_s)
        return max(0.0, 1.0 - bound / value) if value > 0 else 0.0


@dataclass(frozen=True)
class _Found:
    """An order (n,), the weight it picks and what it costs, and turns gone through to find it."""

    order: IntArray
    weight: float
    cost: float
    steps: int


def tray_order(tray: Tray, by_travel: bool = False, budget_ms: float | None = None) -> TrayOrder:
    """The best order found: most weight, then the earliest finish, or the least joint travel. Same input, same answer.

    Where the tray is taken away before all is picked, travel counts as much as it can without a part being lost.
    budget_ms bounds the turns gone through, STEPS_PER_MS of them in a ms, not the clock.
    """
    budget = MOST_STEPS if budget_ms is None else int(budget_ms * STEPS_PER_MS)
    if not by_travel:
        return _told(tray, _sought(tray, budget), 1.0, budget)
    if np.isinf(tray.left_s):
        return _told(tray, _sought(judged(tray, 0.0), budget), 0.0, budget)
    soonest, steps = _sought(tray, budget // 2), 0
    for share in TIME_SHARES:
        found = _sought(judged(tray, share), budget // (2 * len(TIME_SHARES)))
        steps += found.steps
        told = _told(tray, replace(found, steps=soonest.steps + steps), share, budget)
        if told.weight >= soonest.weight - HAIR:
            return told
    return _told(tray, replace(soonest, steps=soonest.steps + steps), 1.0, budget)


def judged(tray: Tray, time_share: float) -> Tray:
    """The tray with costs instead of times: time by its share, the rest travel; and never taken away, unless time is
    all that counts."""
    if time_share == 1.0:
        return tray
    out, carry = (np.where(np.isfinite(time), time_share * np.where(np.isfinite(time), time, 0.0)
                           + (1.0 - time_share) * travel, np.inf)
                  for time, travel in ((tray.out, tray.out_travel), (tray.carry, tray.carry_travel)))
    return replace(tray, out=out, carry=carry, left_s=np.inf)


def _sought(tray: Tray, budget: int) -> _Found:
    """The order that costs least, of those found with about so many turns gone through."""
    orders = [nearest_next(*_arrays(tray))]
    orders.append(_assigned(tray, orders[0]))
    best, worth, spent = orders[0], (-1.0, np.inf), 0
    random = np.random.default_rng(0)
    for k in range(len(orders) + AGAIN // max(len(orders[0]), 1)):
        order = orders[k] if k < len(orders) else _shaken(best, random)
        weight, cost, steps = improve(*_arrays(tray), order, PASSES, MOVED, budget - spent)
        spent += steps
        if _better((weight, cost), worth):
            best, worth = order.copy(), (weight, cost)
        if spent >= budget:
            break
    return _Found(best, *worth, spent)


def followed(tray: Tray, order: IntArray, time_share: float = 1.0, bounded: bool = True) -> TrayOrder:
    """What is known of an order (n,): which parts it picks in time, how, how long that takes, and its bounds."""
    cost = judged(tray, time_share)
    done = _follow(cost, order)
    picked, late = order[done[order]], order[~done[order]]
    if np.isfinite(cost.left_s):  # the soonest end may grip the last part too late
        ways = _walked_in_time(tray, picked)
    else:
        ways = walked(cost, picked, np.zeros(len(tray.slots), np.int64), len(tray.out) - 1)
    contact_s, free_s = along(tray.out, tray.carry, ways)
    bound = bounded and len(picked) > 0 and not len(late)
    told = TrayOrder(
        (*picked.tolist(), *late.tolist()), len(picked), float(tray.weights[picked].sum()), ways,
        float(free_s[-1]) if ways else 0.0, travel_of(tray, ways),
        _bound(tray, order) if bound and time_share > 0 else 0.0,
        _bound(cost, order) if bound and time_share == 0 else 0.0, time_share, 0, cut=False)
    in_time = (contact_s <= tray.left_s - tray.grasp_s + HAIR).all()
    return told if in_time else replace(told, weight=-1.0)  # judged by travel, some come too late


def _told(tray: Tray, found: _Found, time_share: float, budget: int) -> TrayOrder:
    return replace(followed(tray, found.order, time_share), steps=found.steps, cut=found.steps >= budget)


def walked(cost: Tray, order: IntArray, used: IntArray, at: int) -> tuple[tuple[int, int], ...]:
    """Hold and way to stand at the slot of each part of an order whose parts can all be had, from a way to stand `at`
    on, when `used` (q,) slots of each queue are filled: those that cost least."""
    rest, counts, ways = to_go(cost, order, used, all_turns=True), used.copy(), []
    for k, part in enumerate(order):
        q = cost.queue[part]
        to = np.arange(cost.slots[q, counts[q]], cost.slots[q, counts[q] + 1])
        hold = np.arange(cost.begins[part], cost.begins[part + 1])
        total = cost.out[at, hold][:, None] + cost.carry[np.ix_(hold, to)] + rest[k + 1, to]
        h, r = np.unravel_index(int(np.argmin(total)), total.shape)
        at, counts[q] = int(to[r]), counts[q] + 1
        ways.append((int(hold[h]), at))
    return tuple(ways)


def _walked_in_time(tray: Tray, order: IntArray) -> tuple[tuple[int, int], ...]:
    """As `walked` from where the arm is, every part gripped before the tray is taken away; the order can be had so."""
    due = tray.left_s - tray.grasp_s + HAIR
    at, reach, counts, steps = np.array([len(tray.out) - 1]), np.zeros(1), np.zeros(len(tray.slots), np.int64), []
    for part in order:
        q = tray.queue[part]
        to = np.arange(tray.slots[q, counts[q]], tray.slots[q, counts[q] + 1])
        hold = np.arange(tray.begins[part], tray.begins[part + 1])
        contact = reach[:, None] + tray.out[np.ix_(at, hold)]
        came, soonest = contact.argmin(axis=0), contact.min(axis=0)
        free = np.where(soonest <= due, soonest, np.inf)[:, None] + tray.carry[np.ix_(hold, to)]
        steps.append((hold, to, came, free.argmin(axis=0)))
        at, reach, counts[q] = to, free.min(axis=0), counts[q] + 1
    ways, r = [], int(np.argmin(reach))
    for hold, to, came, by in reversed(steps):
        ways.append((int(hold[by[r]]), int(to[r])))
        r = int(came[by[r]])
    return tuple(reversed(ways))


def along(out: FloatArray, carry: FloatArray, ways: Sequence[tuple[int, int]], start: int = -1) -> tuple[
        FloatArray, FloatArray]:
    """When each part is gripped, and when the arm is free again, from leaving a way to stand on."""
    holds, rests = np.array(ways, np.int64).reshape(-1, 2).T
    before = np.concatenate([[start], rests])[: len(holds)]
    legs = np.stack([out[before, holds], carry[holds, rests]], axis=1)
    times = np.cumsum(legs.ravel()).reshape(-1, 2)
    return times[:, 0], times[:, 1]


def time_left(tray: Tray, cost: Tray, order: IntArray, used: IntArray, at: int) -> float:
    """S that an order of parts which can all be had takes from a way to stand `at` on, by the ways that cost least."""
    if cost is tray:
        return float(to_go(cost, order, used)[at])
    ways = walked(cost, order, used, at)
    return float(along(tray.out, tray.carry, ways, at)[1][-1]) if ways else 0.0


def travel_of(tray: Tray, ways: Sequence[tuple[int, int]]) -> float:
    """Joint travel along an order from where the arm is."""
    return float(along(tray.out_travel, tray.carry_travel, ways)[1][-1]) if len(ways) else 0.0


def to_go(tray: Tray, order: IntArray, used: IntArray, all_turns: bool = False) -> FloatArray:
    """(r+1,) s that an order takes from each way to stand on, when `used` (q,) slots of each queue are filled; with
    `all_turns` (n+1, r+1), from before each turn."""
    rest: FloatArray = least_to_go(tray.begins, tray.queue, tray.slots, tray.out, tray.carry, order, used)
    return rest if all_turns else rest[0]


def _arrays(
    tray: Tray,
) -> tuple[IntArray, IntArray, IntArray, FloatArray, FloatArray, FloatArray, IntArray, float]:
    """What the kernels take."""
    first = np.full((len(tray.queue), max(int(tray.after.sum(axis=1).max()), 1)), -1)
    for part, others in enumerate(tray.after):
        first[part, : others.sum()] = np.flatnonzero(others)
    due = tray.left_s - tray.grasp_s
    return tray.begins, tray.queue, tray.slots, tray.out, tray.carry, tray.weights, first, due


def _shaken(order: IntArray, random: np.random.Generator) -> IntArray:
    """Some parts in a row shuffled."""
    first = int(random.integers(0, max(len(order) - SHAKEN, 0) + 1))
    order = order.copy()
    order[first : first + SHAKEN] = random.permutation(order[first : first + SHAKEN])
    return order


def _better(one: tuple[float, float], other: tuple[float, float]) -> bool:
    return one[0] > other[0] + HAIR or (one[0] > other[0] - HAIR and one[1] < other[1] - HAIR)


def _follow(tray: Tray, order: IntArray) -> NDArray[np.bool_]:
    """(n,) which parts an order picks."""
    reach, at, done, used, weight = _states(tray)
    forward(*_arrays(tray), order, 0, reach, at, done, used, weight)
    return np.asarray(done[-1])


def _states(tray: Tray) -> tuple[FloatArray, IntArray, NDArray[np.bool_], IntArray, FloatArray]:
    """Before each turn: earliest times at the ways to stand, which ways those are, parts done, slots used, weight."""
    n, rests = len(tray.queue), len(tray.out)
    reach, at = np.full((n + 1, rests), np.inf), np.zeros((n + 1, 2), np.int64)
    reach[0, -1], at[0] = 0.0, (rests - 1, rests)
    return reach, at, np.zeros((n + 1, n), np.bool_), np.zeros((n + 1, len(tray.slots)), np.int64), np.zeros(n + 1)


def _turn_costs(tray: Tray, order: IntArray) -> tuple[FloatArray, FloatArray, IntArray]:
    """(n, n) least s until contact, and from contact on, of each part at each turn; queue (n,) of each turn."""
    n = len(order)
    out, carry = np.full((n, n), FAR), np.full((n, n), FAR)
    used, before = np.zeros(len(tray.slots), np.int64), np.array([len(tray.out) - 1])
    for k, part in enumerate(order):
        q = tray.queue[part]
        rests = np.arange(tray.slots[q, used[q]], tray.slots[q, min(used[q] + 1, tray.slots.shape[1] - 1)])
        if len(rests):
            out[:, k] = np.minimum.reduceat(tray.out[before].min(axis=0), tray.begins[:-1])
            carry[:, k] = np.minimum.reduceat(tray.carry[:, rests].min(axis=1), tray.begins[:-1])
            before, used[q] = rests, used[q] + 1
    return np.minimum(out, FAR), np.minimum(carry, FAR), tray.queue[order]


def _assigned(tray: Tray, order: IntArray) -> IntArray:
    """Parts assigned to the turns of an order, each to one of its own queue, as if holds were free to change."""
    from scipy.optimize import linear_sum_assignment

    out, carry, queue = _turn_costs(tray, order)
    cost = np.where(tray.queue[:, None] == queue, out + carry, 4 * FAR)
    parts, turns = linear_sum_assignment(cost)
    made = np.empty(len(order), np.int64)
    made[turns] = parts
    return made


def _bound(tray: Tray, order: IntArray) -> float:
    """No order of all parts takes less: parts assigned to turns, holds free to change from contact to contact.

    With several queues, who comes after which slot and who goes to which slot are assigned apart: the slots filled are
    the same ones in any order.
    """
    from scipy.optimize import linear_sum_assignment

    out, carry, queue = _turn_costs(tray, order)
    if (tray.queue == tray.queue[0]).all():
        return float((out + carry)[linear_sum_assignment(out + carry)].sum())
    filled = int(np.bincount(tray.queue)[tray.queue[order[-1]]])
    last = slice(*tray.slots[tray.queue[order[-1]], filled - 1 : filled + 1])
    beyond = np.minimum.reduceat(tray.out[last].min(axis=0), tray.begins[:-1])
    out = np.column_stack([out, np.minimum(beyond, FAR)])
    whose = np.where(tray.queue[:, None] == queue, carry, 4 * FAR)
    return float(out[linear_sum_assignment(out)].sum() + whose[linear_sum_assignment(whose)].sum())
