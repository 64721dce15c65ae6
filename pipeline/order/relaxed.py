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
MOST_ITEMS = 100
MOST_BUCKETS = 2000
POOL = 1 << 20  # walks that may be kept at once
WORK = 18_000_000  # legs looked at, about, in all
REMEMBERED = 5  # neighbours
TURNS = 60  # of the ascent
CLOSE = 0.01  # where the tree's bound is so near the value, walks seldom come nearer in the time
LENGTH, PATIENCE, SHRINK = 0.5, 4, 0.6  # of its steps at first; turns without a better bound, then it shrinks so much

WALK = np.dtype([
    ("time", "f8"), ("cost", "f8"), ("parent", "i4"), ("listed", "i4"), ("chain", "i4"), ("last", "i2"),
    ("memory", "i2"),
], align=True)
"""memory: bit k set where the k-th neighbour of the last item must not be done again; listed: next of the same stretch
of time; chain: next of those that are alike in it."""

_WALKS, _IDS, _TABLE = rows_of(WALK), numba.int32[::1], numba.int16[:, :, ::1]
_PAIR = numba.types.Tuple((numba.float64, numba.int64))  # type: ignore[no-untyped-call]
_ROW, _MATRIX, _NEAR, _MAY = numba.float64[::1], numba.float64[:, ::1], numba.int64[:, ::1], numba.boolean[:, ::1]


@compiled(numba.void(_NEAR, _MAY, _TABLE))
def _remember(near: IntArray, may: BoolArray, memory_after: NDArray[np.int16]) -> None:
    """Fill in the memory at an item that follows another with a memory of its own; -1: it may not follow."""
    nodes, remembered = near.shape
    bit = np.full((nodes, nodes), -1)
    for node in range(nodes):
        for k in range(remembered):
            bit[node, near[node, k]] = k
    for at in range(nodes):
        for node in range(1, nodes):
            for memory in range(memory_after.shape[2]):
                back = bit[at, node] >= 0 and memory >> bit[at, node] & 1
                after = 1 << bit[node, at] if bit[node, at] >= 0 else 0
                for k in range(remembered):
                    if memory >> k & 1 and bit[node, near[at, k]] >= 0:
                        after |= 1 << bit[node, near[at, k]]
                memory_after[at, node, memory] = after if may[at, node] and not back else -1


@compiled(numba.boolean(_MATRIX, numba.int64, numba.int64, numba.float64))
def _forgone(least: FloatArray, node: int, memory: int, cost: float) -> bool:
    """Whether a walk that ended here in an earlier stretch of time, and remembers no more, costs no more."""
    part = memory
    while True:
        if least[node, part] <= cost:
            return True
        if part == 0:
            return False
        part = (part - 1) & memory


@compiled(numba.boolean(_WALKS, numba.int32[:, :, ::1], _IDS, _IDS, numba.int64, numba.int64, numba.boolean))
def _put(
    pool: Records, slots: NDArray[np.int32], heads: NDArray[np.int32], tails: NDArray[np.int32], new: int, bucket: int,
    later: bool,
) -> bool:
    """Put a walk filled in among its like of a stretch of time, unless it is needless; whether its record is used.
    later: none of the stretch has been gone on with."""
    walk = pool[new]
    other = slots[bucket, walk.last, walk.memory]
    while other >= 0:
        if pool[other].time <= walk.time and pool[other].cost <= walk.cost:
            return False
        if later and pool[other].time >= walk.time and pool[other].cost >= walk.cost:
            pool[other].time, pool[other].cost, pool[other].parent = walk.time, walk.cost, walk.parent
            return False
        other = pool[other].chain
    pool[new].chain, pool[new].listed = slots[bucket, walk.last, walk.memory], -1
    slots[bucket, walk.last, walk.memory] = new
    if tails[bucket] >= 0:
        pool[tails[bucket]].listed = new
    else:
        heads[bucket] = new
    tails[bucket] = new
    return True


@compiled(_PAIR(
    _MATRIX, _MATRIX, numba.boolean, _ROW, _ROW, numba.boolean[::1], _TABLE, _ROW, numba.float64, _WALKS,
    numba.int32[:, :, ::1], numba.int64[::1], numba.int64))
def best_walk(
    go: FloatArray, cost: FloatArray, waits: bool, early: FloatArray, late: FloatArray, may_end: BoolArray,
    memory_after: NDArray[np.int16], price: FloatArray, step: float, pool: Records, slots: NDArray[np.int32],
    visits: IntArray, most: int,
) -> tuple[float, int]:
    """The least value of a walk from start to end with the prices of its items, and how many walks were gone on with
    (-1: there are more than `most`, or no room for all); fills how often the best one does each item.

    step: length of a stretch of time, no longer than any leg, so that walks are worked off stretch by stretch.
    """
    nodes, buckets = len(go), len(slots)
    slots[:] = -1
    heads, tails = np.full(buckets, -1, np.int32), np.full(buckets, -1, np.int32)
    least = np.full((nodes, slots.shape[2]), np.inf)
    pool[0].time, pool[0].cost, pool[0].parent, pool[0].listed, pool[0].last, pool[0].memory = 0.0, 0.0, -1, -1, 0, 0
    heads[0], tails[0] = 0, 0
    used, made, best, end = 1, 0, np.inf, -1
    for now in range(buckets):
        walk = heads[now]
        while walk >= 0:
            at, memory, time, spent = pool[walk].last, pool[walk].memory, pool[walk].time, pool[walk].cost
            if at == 0 or not _forgone(least, at, memory, spent):
                made += 1
                value = spent + (time + go[at, 0] if waits else cost[at, 0])
                if at > 0 and may_end[at] and value < best:
                    best, end = value, walk
                for node in range(1, nodes):
                    after = memory_after[at, node, memory]
                    then = max(time + go[at, node], early[node])
                    if after < 0 or then > late[node]:
                        continue
                    whole = spent + price[node] + (0.0 if waits else cost[at, node])
                    if least[node, after] <= whole or least[node, 0] <= whole:
                        continue
                    if used >= len(pool) or made > most:
                        return -np.inf, -1
                    pool[used].time, pool[used].cost, pool[used].parent = then, whole, walk
                    pool[used].last, pool[used].memory = node, after
                    bucket = min(int(then / step), buckets - 1)
                    used += _put(pool, slots, heads, tails, used, bucket, bucket > now)
            walk = pool[walk].listed
        walk = heads[now]
        while walk >= 0:  # those of later stretches are later: here they can be no better
            at, memory = pool[walk].last, pool[walk].memory
            least[at, memory] = min(least[at, memory], pool[walk].cost)
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
    if best < upper * (1 - CLOSE):
        price = leave + enter
        price[0] = 0.0  # every walk begins and ends there once
        best = max(best, _climbed(task, ground, upper, price, until))
    return min(best, upper)


def _climbed(task: Task, ground: _Ground, upper: float, price: FloatArray, until: float) -> float:
    """The best bound over prices that start as given and climb."""
    remembered = min(REMEMBERED, len(price) - 2)
    near, pool = np.ascontiguousarray(ground.nearest[:, :remembered]), np.empty(POOL, WALK)
    slots = np.empty((ground.buckets, len(price), 1 << remembered), np.int32)
    memory_after = np.empty((len(price), len(price), 1 << remembered), np.int16)
    _remember(near, ground.may, memory_after)
    visits, way = np.zeros(len(price), np.int64), np.zeros(len(price))
    best, kept, length, stale, work = 0.0, price, LENGTH, 0, 0
    for _ in range(TURNS):
        if work > WORK or perf_counter() > until:
            break
        value, made = best_walk(task.go, task.cost, task.waits, task.early, ground.late, ground.may[:, 0].copy(),
                                memory_after, price, ground.step, pool, slots, visits,
                                (WORK - work) // len(price))
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
    return best


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
    if last >= MOST_BUCKETS * step:
        return None
    return _Ground(late, may, np.argsort(apart, axis=1, kind="stable"), step, int(last / step) + 1)
