"""Kernels of the exact search: partial orders as labels, the worse of two that can go on alike thrown out.

Dynamic programming over sets (Held & Karp 1962) with windows (Dumas, Desrosiers, Gélinas & Solomon 1995). A label is
a partial order: the set done, the set that can still be done (`rest`), the last node, when its service starts, what
the legs cost, the weight no longer to be had. Two labels of one last node and one rest can go on alike, so one that is
no later, no dearer and has lost no more makes the other needless. Labels are worked off by the size of their rest,
which every step lessens.

No cut leans on the triangle inequality, which rounded times break: what can still be reached is judged by the shortest
way through any nodes. Sets are bits of an int64, node k at bit k - 1: at most 62 items.
"""

import numba
import numpy as np
from numpy.typing import NDArray

from pipeline.order.compiled import compiled, rows_of

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Records = NDArray[np.void]

HAIR = 1e-9

LABEL = np.dtype([
    ("done", "i8"), ("rest", "i8"), ("time", "f8"), ("cost", "f8"), ("lost", "f8"), ("toll", "f8"), ("floor", "f8"),
    ("rank", "f8"), ("parent", "i4"), ("chain", "i4"), ("listed", "i4"), ("last", "i2"), ("alive", "?"),
], align=True)
"""toll: prices the rest still has to pay; floor: no completion ends below; chain, listed: next of the same hash slot,
of the same bucket."""
NODE = np.dtype([
    ("early", "f8"), ("late", "f8"), ("weight", "f8"), ("leave", "f8"), ("enter", "f8"), ("needs", "i8"),
], align=True)
"""leave + enter of the next: prices nowhere above what a leg costs; needs: the set that must be done before."""
RULES = np.dtype([
    ("upper", "f8"), ("most_lost", "f8"), ("bend", "f8"), ("width", "i8"), ("waits", "?"), ("strict", "?"),
], align=True)
"""upper: only ends below it are sought; most_lost: weight that may be lost; strict: nothing may be lost, prices hold;
bend: what a unit of time (strict) or of lost weight (else) adds to the rank; width: labels a bucket may hold."""
SEARCH = np.dtype([
    ("lost", "f8"), ("value", "f8"), ("cut_floor", "f8"), ("used", "i8"), ("free", "i8"), ("made", "i8"),
    ("parent", "i4"), ("last", "i4"), ("cut", "?"),
], align=True)
"""Best end so far (weight lost, value, the label before its last node), the lowest floor of a label left out."""

_LABELS, _NODES, _RULES, _SEARCH = (rows_of(record) for record in (LABEL, NODE, RULES, SEARCH))
_IDS, _MATRIX, _SETS = numba.int32[::1], numba.float64[:, ::1], numba.int64[:, ::1]


@compiled(numba.int64(numba.int64, numba.int64, numba.int64))
def _slot(rest: int, last: int, slots: int) -> int:
    mixed = (rest * 0x1E3779B97F4A7C15) ^ (last * 0x2545F4914F6CDD1D)
    return ((mixed ^ (mixed >> 29)) * 0x1F58476D1CE4E5B9 >> 20) & (slots - 1)


@compiled(numba.int64(numba.int64))
def _size(members: int) -> int:
    size = 0
    while members:
        members &= members - 1
        size += 1
    return size


@compiled(numba.void(_LABELS, _IDS, _SEARCH, numba.int64))
def _leave_out(pool: Records, heads: NDArray[np.int32], search: Records, label: int) -> None:
    """Drop a label for want of room, note its floor, and give its place back."""
    search[0].cut = True
    search[0].cut_floor = min(search[0].cut_floor, pool[label].floor)
    slot = _slot(pool[label].rest, pool[label].last, len(heads))
    if heads[slot] == label:
        heads[slot] = pool[label].chain
    else:
        before = heads[slot]
        while pool[before].chain != label:
            before = pool[before].chain
        pool[before].chain = pool[label].chain
    pool[label].alive = False
    pool[label].chain = search[0].free
    search[0].free = label


@compiled(numba.int64(_LABELS, _IDS, _IDS, _SEARCH, numba.int64, numba.int64))
def narrow(
    pool: Records, heads: NDArray[np.int32], buckets: NDArray[np.int32], search: Records, bucket: int, width: int,
) -> int:
    """Keep the `width` labels of best rank in a bucket, leave the others out; how many are kept."""
    count, label = 0, buckets[bucket]
    while label >= 0:
        count += pool[label].alive
        label = pool[label].listed
    limit, ties = np.inf, 0
    if count > width:
        ranks = np.empty(count)
        i, label = 0, buckets[bucket]
        while label >= 0:
            if pool[label].alive:
                ranks[i] = pool[label].rank
                i += 1
            label = pool[label].listed
        ranks.sort()
        limit = ranks[width - 1]
        ties = width - np.searchsorted(ranks, limit)
    kept, label = 0, buckets[bucket]
    buckets[bucket] = -1
    while label >= 0:
        then = pool[label].listed
        if pool[label].alive:
            ties -= pool[label].rank == limit
            if pool[label].rank < limit or (pool[label].rank == limit and ties >= 0):
                pool[label].listed = buckets[bucket]
                buckets[bucket] = label
                kept += 1
            else:
                _leave_out(pool, heads, search, label)
        label = then
    return kept


@compiled(numba.boolean(_LABELS, numba.int64, numba.int64, numba.boolean))
def _no_worse(pool: Records, one: int, other: int, waits: bool) -> bool:
    a, b = pool[one], pool[other]
    return bool(a.time <= b.time + HAIR and a.lost <= b.lost + HAIR and (waits or a.cost <= b.cost + HAIR))


@compiled(numba.void(_LABELS, _IDS, _IDS, _IDS, _RULES, _SEARCH, numba.int64))
def _insert(
    pool: Records, heads: NDArray[np.int32], buckets: NDArray[np.int32], counts: NDArray[np.int32], rules: Records,
    search: Records, label: int,
) -> None:
    """Put a label filled in but not yet listed among its like; it or those it makes needless go."""
    slot = _slot(pool[label].rest, pool[label].last, len(heads))
    other = heads[slot]
    while other >= 0:
        alike = pool[other].rest == pool[label].rest and pool[other].last == pool[label].last and pool[other].alive
        if alike and _no_worse(pool, other, label, rules[0].waits):
            pool[label].chain = search[0].free
            search[0].free = label
            return
        if alike and _no_worse(pool, label, other, rules[0].waits):
            pool[other].alive = False
        other = pool[other].chain
    bucket = _size(pool[label].rest)
    pool[label].alive = True
    pool[label].chain, heads[slot] = heads[slot], label
    pool[label].listed, buckets[bucket] = buckets[bucket], label
    counts[bucket] += 1
    if counts[bucket] > 2 * rules[0].width:
        counts[bucket] = narrow(pool, heads, buckets, search, bucket, rules[0].width)


@compiled(numba.boolean(
    _LABELS, _NODES, _MATRIX, _MATRIX, _MATRIX, _SETS, _RULES, numba.int64, numba.int64, numba.int64))
def _follow(
    pool: Records, nodes: Records, go: FloatArray, cost: FloatArray, limit: FloatArray, gone: IntArray, rules: Records,
    parent: int, node: int, label: int,
) -> bool:
    """Fill in the label of going on to a node; False where that cannot be, or leads to nothing that is sought."""
    before, then = pool[parent], pool[label]
    time = max(before.time + go[before.last, node], nodes[node].early)
    if time > nodes[node].late or not time < np.inf:
        return False
    bit = 1 << (node - 1)
    done, rest = before.done | bit, before.rest & ~bit
    missed = rest & gone[node, np.searchsorted(limit[node], time)]
    if missed and rules[0].strict:
        return False
    lost = before.lost
    if missed:
        rest &= ~missed
        for k in range(1, len(nodes)):
            if rest >> (k - 1) & 1 and nodes[k].needs & ~(done | rest):
                missed |= 1 << (k - 1)
        rest &= ~missed
        for k in range(1, len(nodes)):
            if missed >> (k - 1) & 1:
                lost += nodes[k].weight
    then.done, then.rest, then.time, then.lost, then.last, then.parent = done, rest, time, lost, node, parent
    then.cost = before.cost + cost[before.last, node]
    then.toll = before.toll - nodes[node].leave - nodes[node].enter
    then.floor = (time if rules[0].waits else then.cost) + nodes[node].leave + then.toll + nodes[0].enter
    if rules[0].strict:
        then.rank = then.floor + rules[0].bend * time
        return bool(then.floor < rules[0].upper - HAIR)
    then.rank = time + rules[0].bend * lost
    return bool(lost <= rules[0].most_lost + HAIR)


@compiled(numba.void(
    _LABELS, _IDS, _IDS, _IDS, _NODES, _MATRIX, _MATRIX, _MATRIX, _SETS, _RULES, _SEARCH, numba.int64))
def expand(
    pool: Records, heads: NDArray[np.int32], buckets: NDArray[np.int32], counts: NDArray[np.int32], nodes: Records,
    go: FloatArray, cost: FloatArray, limit: FloatArray, gone: IntArray, rules: Records, search: Records, bucket: int,
) -> None:
    """Go on from every label of a bucket, the best ends noted. limit, gone: past the k-th limit at a node (its start
    of service), the set gone[node, k] cannot be reached any more."""
    narrow(pool, heads, buckets, search, bucket, rules[0].width)
    whole = 0.0
    for k in range(1, len(nodes)):
        whole += nodes[k].weight
    parent = buckets[bucket]
    while parent >= 0:
        for node in range(1, len(nodes)):
            if not pool[parent].rest >> (node - 1) & 1 or nodes[node].needs & ~pool[parent].done:
                continue
            label = search[0].free
            if label >= 0:
                search[0].free = pool[label].chain
            elif search[0].used < len(pool):
                label = search[0].used
                search[0].used += 1
            else:
                search[0].cut, search[0].cut_floor = True, min(search[0].cut_floor, pool[parent].floor)
                break
            if not _follow(pool, nodes, go, cost, limit, gone, rules, parent, node, label):
                pool[label].chain = search[0].free
                search[0].free = label
                continue
            search[0].made += 1
            value = go[node, 0] + pool[label].time if rules[0].waits else cost[node, 0] + pool[label].cost
            lost = whole
            for k in range(1, len(nodes)):
                if pool[label].done >> (k - 1) & 1:
                    lost -= nodes[k].weight
            better = lost < search[0].lost - HAIR or (lost <= search[0].lost + HAIR and value < search[0].value - HAIR)
            if better and go[node, 0] < np.inf and cost[node, 0] < np.inf:
                search[0].lost, search[0].value = lost, value
                search[0].parent, search[0].last = parent, node
                if rules[0].strict and lost <= HAIR:
                    rules[0].upper = min(rules[0].upper, value)
            _insert(pool, heads, buckets, counts, rules, search, label)
        parent = pool[parent].listed
