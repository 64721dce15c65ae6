"""A lower bound under wide windows: the best walk that keeps the windows and may come back to an item once it has been
far from it, each item with a price that makes coming back, or leaving it out, not pay.

Walks that forget what was done outside the neighbourhood of where they are: ng-routes (Baldacci, Mingozzi & Roberti
2011, Oper. Res. 59), a relaxation of the dynamic programme over sets (Christofides, Mingozzi & Toth 1981). Prices climb
by subgradients (Held, Wolfe & Crowder 1974). A walk's time and cost are kept both: of two at one item that remember
alike, the one that is no later and no dearer makes the other needless.
"""

from dataclasses import dataclass, replace
from time import perf_counter

import numba
import numpy as np
from numpy.typing import NDArray

from pipeline.order.bound import allowed, priced_round, shortest
from pipeline.order.compiled import compiled, rows_of
from pipeline.order.task import BoolArray, FloatArray, IntArray, Task

Records = NDArray[np.void]
HAIR = 1e-9
MOST_ITEMS = 62  # bits of a memory
MOST_BUCKETS = 2000
POOL = 1 << 20  # walks that may be kept at once
WORK = 26_000_000  # legs looked at, about, in all
STAGES = ((3, 0.4), (8, 0.6))  # neighbours remembered, and the share of the work
TURNS = 60  # of the ascent in each stage
LENGTH, PATIENCE, SHRINK = 0.5, 4, 0.6  # of its steps at first; turns without a better bound, then it shrinks so much

WALK = np.dtype([
    ("memory", "i8"), ("time", "f8"), ("cost", "f8"), ("parent", "i4"), ("listed", "i4"), ("chain", "i4"), ("last", "i2"),
], align=True)
"""memory: the items not to be done again, near the last one; listed: next of the same stretch of time; chain: next of
those that are alike in it."""

_WALKS, _IDS, _SLOTS = rows_of(WALK), numba.int32[::1], numba.int32[:, :, ::1]
_ROW, _MATRIX, _NEAR, _MAY = numba.float64[::1], numba.float64[:, ::1], numba.int64[:, ::1], numba.boolean[:, ::1]


@compiled(numba.int64(numba.int64, numba.int64[::1]))
def _index(memory: int, near: IntArray) -> int:
    """A memory as a number below 2^g, by the g neighbours of an item."""
    index = 0
    for bit in range(len(near)):
        index |= ((memory >> (near[bit] - 1)) & 1) << bit
    return index


@compiled(numba.boolean(_MATRIX, numba.int64, numba.int64, numba.float64))
def _forgone(least: FloatArray, node: int, index: int, cost: float) -> bool:
    """Whether a walk that ended here in an earlier stretch of time, and remembers no more, costs no more."""
    part = index
    while True:
        if least[node, part] <= cost:
            return True
        if part == 0:
            return False
        part = (part - 1) & index


@compiled(numba.boolean(_WALKS, _SLOTS, _IDS, _IDS, numba.int64, numba.int64, numba.int64, numba.int64))
def _put(
    pool: Records, slots: NDArray[np.int32], heads: NDArray[np.int32], tails: NDArray[np.int32], new: int, index: int,
    bucket: int, now: int,
) -> bool:
    """Put a walk filled in among its like of a stretch of time, unless it is needless; whether its record is used."""
    node = pool[new].last
    other = slots[bucket, node, index]
    while other >= 0:
        if pool[other].time <= pool[new].time and pool[other].cost <= pool[new].cost:
            return False
        if bucket > now and pool[other].time >= pool[new].time and pool[other].cost >= pool[new].cost:
            pool[other].time, pool[other].cost = pool[new].time, pool[new].cost
            pool[other].parent = pool[new].parent
            return False
        other = pool[other].chain
    pool[new].chain, slots[bucket, node, index] = slots[bucket, node, index], new
    pool[new].listed = -1
    if tails[bucket] >= 0:
        pool[tails[bucket]].listed = new
    else:
        heads[bucket] = new
    tails[bucket] = new
    return True


@compiled(numba.types.Tuple((numba.float64, numba.int64))(
    _MATRIX, _MATRIX, numba.boolean, _ROW, _ROW, _MAY, _NEAR, numba.int64[::1], _ROW, numba.float64, _WALKS, _SLOTS,
    numba.int64[::1]))
def best_walk(
    go: FloatArray, cost: FloatArray, waits: bool, early: FloatArray, late: FloatArray, may: BoolArray, near: IntArray,
    near_set: IntArray, price: FloatArray, step: float, pool: Records, slots: NDArray[np.int32], visits: IntArray,
) -> tuple[float, int]:
    """The least value of a walk from start to end with the prices of its items, and how many walks were gone on with
    (-1: there was no room for all); fills how often the best one does each item.

    step: length of a stretch of time, no longer than any leg, so that walks are worked off stretch by stretch.
    """
    nodes, buckets = len(go), len(slots)
    slots[:] = -1
    heads, tails = np.full(buckets, -1, np.int32), np.full(buckets, -1, np.int32)
    least = np.full((nodes, slots.shape[2]), np.inf)
    pool[0].memory, pool[0].time, pool[0].cost, pool[0].parent, pool[0].listed, pool[0].last = 0, 0.0, 0.0, -1, -1, 0
    heads[0], used, made, best, end = 0, 1, 0, np.inf, -1
    for now in range(buckets):
        walk = heads[now]
        while walk >= 0:
            at, memory, time, spent = pool[walk].last, pool[walk].memory, pool[walk].time, pool[walk].cost
            if at == 0 or not _forgone(least, at, _index(memory, near[at]), spent):
                made += 1
                if at > 0:
                    memory |= 1 << (at - 1)
                    value = spent + (time + go[at, 0] if waits else cost[at, 0])
                    if may[at, 0] and value < best:
                        best, end = value, walk
                for node in range(1, nodes):
                    then = max(time + go[at, node], early[node])
                    if not may[at, node] or memory >> (node - 1) & 1 or then > late[node]:
                        continue
                    whole = spent + price[node] + (0.0 if waits else cost[at, node])
                    kept = memory & near_set[node]
                    index = _index(kept, near[node])
                    if least[node, index] <= whole or least[node, 0] <= whole:
                        continue
                    if used >= len(pool):
                        return -np.inf, -1
                    pool[used].memory, pool[used].time, pool[used].cost = kept, then, whole
                    pool[used].parent, pool[used].last = walk, node
                    used += _put(pool, slots, heads, tails, used, index, min(int(then / step), buckets - 1), now)
            walk = pool[walk].listed
        walk = heads[now]
        while walk >= 0:  # those of later stretches are later: here they can be no better
            at = pool[walk].last
            if at > 0:
                index = _index(pool[walk].memory, near[at])
                least[at, index] = min(least[at, index], pool[walk].cost)
            walk = pool[walk].listed
    visits[:] = 0
    while end > 0:
        visits[pool[end].last] += 1
        end = pool[end].parent
    return best, made


@dataclass(frozen=True)
class _Ground:
    """What stays the same from turn to turn: windows as tight as the value to beat makes them, and the legs left."""

    late: FloatArray
    may: BoolArray
    nearest: IntArray  # (N, N) of each node the others, the nearest first
    step: float
    buckets: int


def walk_bound(task: Task, upper: float, until: float) -> float:
    """No order that does every item has a lower value, or one of `upper` is the least; 0 where walks tell nothing.

    The work is bounded by a count of legs, so the same task has the same bound. until: clock reading (perf_counter)
    after which no further turn is begun.
    """
    ground = _ground(task, upper) if 2 < len(task.go) - 1 <= MOST_ITEMS else None
    if ground is None:
        return 0.0
    best, leave, enter = priced_round(np.where(ground.may, task.cost, np.inf), upper)
    price, pool = leave + enter, np.empty(POOL, WALK)
    for remembered, share in STAGES:
        if best >= upper * (1 - HAIR):
            break
        bound, price = _climbed(task, ground, upper, price, pool, min(remembered, len(price) - 2), share * WORK, until)
        best = max(best, bound)
    return min(best, upper)


def _climbed(
    task: Task, ground: _Ground, upper: float, price: FloatArray, pool: Records, remembered: int, most: float,
    until: float,
) -> tuple[float, FloatArray]:
    """The best bound over prices that start as given and climb, and the prices it was found at."""
    near = np.ascontiguousarray(ground.nearest[:, :remembered])
    near_set = (np.int64(1) << (near - 1)).sum(axis=1)
    slots = np.empty((ground.buckets, len(price), 1 << remembered), np.int32)
    visits, way = np.zeros(len(price), np.int64), np.zeros(len(price))
    best, kept, length, stale, work = 0.0, price, LENGTH, 0, 0
    for _ in range(TURNS):
        if work > most or perf_counter() > until:
            break
        value, made = best_walk(task.go, task.cost, task.waits, task.early, ground.late, ground.may, near, near_set,
                                price, ground.step, pool, slots, visits)
        if made < 0:
            break
        bound, over = value - float(price.sum()), visits - 1.0
        work, stale, over[0] = work + made * len(price), stale + 1, 0.0
        if bound > best + HAIR:
            best, kept, stale = bound, price, 0
        if best >= upper * (1 - HAIR) or not over.any() or not np.isfinite(bound):
            break
        if stale >= PATIENCE:
            price, length, stale = kept, length * SHRINK, 0
        way = 0.5 * way + 0.5 * over
        price = price + length * max(upper - bound, 1e-3 * upper) / max(float(way @ way), HAIR) * way
    return best, kept


def _ground(task: Task, upper: float) -> _Ground | None:
    """None where stretches of time would have to be too short, or no order can be better."""
    late = task.late.copy()
    if task.waits:
        late[1:] = np.minimum(late[1:], upper * (1 + HAIR) - shortest(task.go)[1:, 0])
    if not np.isfinite(late[1:]).all():
        return None
    may = allowed(replace(task, late=late)) & np.isfinite(task.cost)
    legs = task.go[1:, 1:][may[1:, 1:]]
    if not len(legs) or not (may[1:].any(axis=1).all() and may[:, 1:].any(axis=0).all()):
        return None
    apart = np.minimum(task.cost, task.cost.T)
    np.fill_diagonal(apart, np.inf)
    apart[:, 0] = np.inf
    step, last = float(legs.min()), float(late[1:].max())
    buckets = int(last / step) + 1 if step > 0 else MOST_BUCKETS + 1
    return _Ground(late, may, np.argsort(apart, axis=1, kind="stable"), step, buckets) if buckets <= MOST_BUCKETS else None
