"""The order of a whole tray: nothing moves, so all its parts are ordered at once, picks and slots together.

Slots are filled one after the other, so which slot a part goes to, and from which the arm comes, follows from its turn.
For a given order the ways to hold each part and to stand at each slot are the best there are (dynamic programming along
the order: Viterbi 1967). The order starts from an assignment of parts to turns (Jonker, Volgenant 1987, through SciPy)
and from the rule "nearest next", and is improved by moving and swapping parts until nothing gains.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.tray_steps import HAIR, forward, improve, least_to_go, step

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
FAR = 1e6  # stands for a leg that can't be had where costs are summed
MOVED = 24  # turns that a part is moved by, at most
PASSES = 12
AGAIN = 400  # over the number of parts: how often the best order is shaken and improved anew
SHAKEN = 8  # parts in a row


@dataclass(frozen=True)
class Tray:
    """n still parts with h ways to hold them, and q queues of slots with r ways to stand at them.

    numbers (n,): of the parts. begins (n+1,): first hold of each. queue (n,): which slots a part goes to. slots (q, k):
    first way to stand at each queue's slots in turn, the last column the end. out (r+1, h): s from leaving a slot to
    contact, the last row from where the arm is. carry (h, r): s from contact to being free again; inf: not so.
    weights (n,). after (n, n): the column's part must go before the row's. left_s: until the tray is taken away.
    grasp_s: dwell. rests (r, 4): joints at the slots.
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


@dataclass(frozen=True)
class TrayOrder:
    """order: parts in turn, first those that are picked. weight, finish_s: what they weigh, and how long they take.
    bound_s: no order that picks all of them takes less (0 where some are left out)."""

    order: tuple[int, ...]
    picked: int
    weight: float
    finish_s: float
    bound_s: float


def tray_order(tray: Tray) -> TrayOrder:
    """The best order found. Same input, same answer."""
    orders = [_nearest_next(tray)]
    orders.append(_assigned(tray, orders[0]))
    best, worth = orders[0], (-1.0, np.inf)
    random = np.random.default_rng(0)
    for k in range(len(orders) + AGAIN // max(len(orders[0]), 1)):
        order = orders[k] if k < len(orders) else _shaken(best, random)
        found = improve(*_arrays(tray), order, PASSES, MOVED)
        if _better(found, worth):
            best, worth = order.copy(), found
    done = _follow(tray, best)
    picked = [int(part) for part in best if done[part]]
    late = [int(part) for part in best if not done[part]]
    whole = not late
    return TrayOrder((*picked, *late), len(picked), worth[0], worth[1], _bound(tray, best) if whole else 0.0)


def to_go(tray: Tray, order: IntArray, used: IntArray) -> FloatArray:
    """(r+1,) s that an order takes from each way to stand on, when `used` (q,) slots of each queue are filled."""
    rest: FloatArray = least_to_go(tray.begins, tray.queue, tray.slots, tray.out, tray.carry, order, used)[0]
    return rest


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


def _nearest_next(tray: Tray) -> IntArray:
    """Always the part that is set down soonest; what can't be had last."""
    n = len(tray.queue)
    reach, at, done, used, _ = _states(tray)
    now, here, flags, counts = reach[0], at[0], done[0], used[0]
    arrays, order = _arrays(tray), list[int]()
    for _ in range(n):
        steps = []
        for part in range(n):
            ahead, to, flag, count = now.copy(), here.copy(), flags.copy(), counts.copy()
            if step(*arrays, part, now, here, flag, count, ahead, to):
                steps.append((float(ahead[to[0] : to[1]].min()), part, (ahead, to, flag, count)))
        if not steps:
            break
        _, part, (now, here, flags, counts) = min(steps, key=lambda step: step[:2])
        order.append(part)
    return np.array([*order, *(part for part in range(n) if part not in order)], np.int64)


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
