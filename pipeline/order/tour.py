"""A good round through every node with no windows: local search by moved and turned segments, kicked again and again.

Segments exchanged (the 3-exchange that keeps directions, after Or 1976, any length), turned (2-exchange, Croes 1958,
with what turning costs where legs differ by direction), moved and turned (up to three nodes). Iterated local search
with the double bridge as the kick (Martin, Otto & Felten 1991), its segments short so that little must be repaired.
"""

import numpy as np
from numpy.typing import NDArray

from pipeline.order.chance import draw, pick, seeded
from pipeline.order.compiled import compiled

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

@compiled("void(i8[::1], i8[::1], i8, i8, i8)")
def _exchange(tour: IntArray, place: IntArray, start: int, first: int, second: int) -> None:
    """Swap the adjacent segments of `first` and `second` nodes that begin at place `start`, going round."""
    size = len(tour)
    moved = np.empty(first + second, np.int64)
    for i in range(second):
        moved[i] = tour[(start + first + i) % size]
    for i in range(first):
        moved[second + i] = tour[(start + i) % size]
    for i in range(first + second):
        at = (start + i) % size
        tour[at] = moved[i]
        place[moved[i]] = at


@compiled("void(i8[::1], i8[::1], i8, i8)")
def _turn(tour: IntArray, place: IntArray, start: int, length: int) -> None:
    """Turn round the segment of `length` nodes that begins at place `start`."""
    size = len(tour)
    for i in range(length // 2):
        a, b = (start + i) % size, (start + length - 1 - i) % size
        tour[a], tour[b] = tour[b], tour[a]
        place[tour[a]], place[tour[b]] = a, b


@compiled("f8(f8[:,::1], i8[:,::1], i8[::1], i8[::1], i8, f8)")
def _exchanged(cost: FloatArray, near: IntArray, tour: IntArray, place: IntArray, a: int, hair: float) -> float:
    """Best exchange of adjacent segments that begins behind node a, made if it gains; what it gains."""
    size = len(tour)
    at = place[a]
    b = tour[(at + 1) % size]
    best, most_first, most_second = hair, 0, 0
    for c in near[a]:
        gain = cost[a, b] - cost[a, c]
        if gain <= hair:
            break
        first = (place[c] - at - 1) % size
        if first == 0:
            continue
        p = tour[(at + first) % size]
        gain += cost[p, c]
        d = c
        for second in range(1, size - first):
            e = tour[(at + first + second + 1) % size]
            now = gain + cost[d, e] - cost[d, b] - cost[p, e]
            if now > best:
                best, most_first, most_second = now, first, second
            d = e
    if most_first:
        _exchange(tour, place, (at + 1) % size, most_first, most_second)
        return best
    return 0.0


@compiled("f8(f8[:,::1], i8[::1], i8[::1], i8, f8)")
def _turned(cost: FloatArray, tour: IntArray, place: IntArray, a: int, hair: float) -> float:
    """Best turn of a segment that begins or ends next to node a, made if it gains; what it gains."""
    size = len(tour)
    at = place[a]
    best, start, most = hair, 0, 0
    b = tour[(at + 1) % size]
    behind, c = 0.0, b
    for length in range(2, size - 1):  # a | b .. c | d
        before, c = c, tour[(at + length) % size]
        behind += cost[before, c] - cost[c, before]
        d = tour[(at + length + 1) % size]
        now = cost[a, b] + cost[c, d] - cost[a, c] - cost[b, d] + behind
        if now > best:
            best, start, most = now, (at + 1) % size, length
    b = tour[(at - 1) % size]
    behind, c = 0.0, b
    for length in range(2, size - 1):  # d | c .. b | a
        before, c = c, tour[(at - length) % size]
        behind += cost[c, before] - cost[before, c]
        d = tour[(at - length - 1) % size]
        now = cost[b, a] + cost[d, c] - cost[c, a] - cost[d, b] + behind
        if now > best:
            best, start, most = now, (at - length) % size, length
    if most:
        _turn(tour, place, start, most)
        return best
    return 0.0


@compiled("f8(f8[:,::1], i8[::1], i8[::1], i8, f8)")
def _moved_turned(cost: FloatArray, tour: IntArray, place: IntArray, a: int, hair: float) -> float:
    """Best move of up to three nodes from a on, turned round, to another place, made if it gains; what it gains."""
    size = len(tour)
    at = place[a]
    p = tour[(at - 1) % size]
    best, most, target = hair, 0, 0
    turning, z = 0.0, a
    for length in range(1, min(3, size - 3) + 1):
        if length > 1:
            before, z = z, tour[(at + length - 1) % size]
            turning += cost[before, z] - cost[z, before]
        e = tour[(at + length) % size]
        freed = cost[p, a] + cost[z, e] - cost[p, e] + turning
        if freed <= hair:
            continue
        x = e
        for gap in range(1, size - length):
            y = tour[(at + length + gap) % size]
            now = freed + cost[x, y] - cost[x, z] - cost[a, y]
            if now > best:
                best, most, target = now, length, gap
            x = y
    if most:
        _turn(tour, place, at, most)
        _exchange(tour, place, at, most, target)
        return best
    return 0.0


@compiled("i8(i8[::1], i8[:,::1], i8[::1], b1[::1], i8, i8)")
def _queue_changed(
    tour: IntArray, beside: IntArray, queue: IntArray, queued: NDArray[np.bool_], head: int, waiting: int,
) -> int:
    """Queue every node whose two neighbours are not the ones noted, and note them; how many wait then."""
    size = len(tour)
    for i in range(size):
        x, before, then = tour[i], tour[i - 1], tour[(i + 1) % size]
        low, high = min(before, then), max(before, then)
        if beside[x, 0] != low or beside[x, 1] != high:
            beside[x, 0], beside[x, 1] = low, high
            if not queued[x]:
                queue[(head + waiting) % size] = x
                waiting += 1
                queued[x] = True
    return waiting


@compiled("f8(f8[:,::1], i8[:,::1], i8[::1], i8[::1], i8[:,::1], f8)")
def _settle(
    cost: FloatArray, near: IntArray, tour: IntArray, place: IntArray, beside: IntArray, hair: float,
) -> float:
    """Improve round the nodes whose neighbours are not the ones noted, until nothing gains; what was gained in all."""
    size = len(tour)
    queue, queued = np.empty(size, np.int64), np.zeros(size, np.bool_)
    total, head = 0.0, 0
    waiting = _queue_changed(tour, beside, queue, queued, head, 0)
    while waiting > 0:
        a = queue[head]
        head, waiting = (head + 1) % size, waiting - 1
        queued[a] = False
        gain = _exchanged(cost, near, tour, place, a, hair)
        if gain <= 0.0:
            gain = _turned(cost, tour, place, a, hair)
        if gain <= 0.0:
            gain = _moved_turned(cost, tour, place, a, hair)
        if gain > 0.0:
            total += gain
            waiting = _queue_changed(tour, beside, queue, queued, head, waiting)
            if not queued[a]:
                queue[(head + waiting) % size] = a
                waiting += 1
                queued[a] = True
    return total


@compiled("f8(f8[:,::1], i8[::1])")
def _length(cost: FloatArray, tour: IntArray) -> float:
    total = 0.0
    for i in range(len(tour)):
        total += cost[tour[i - 1], tour[i]]
    return total


@compiled("f8(f8[:,::1], i8[:,::1], i8[::1], f8, i8, i8, f8)")
def improve_round(
    cost: FloatArray, near: IntArray, tour: IntArray, target: float, kicks: int, seed: int, warmth: float,
) -> float:
    """Improve `tour` in place by kicks from a seed until they are spent or its cost is `target` or less; its cost.

    near (N, K): the nodes that cost least from each.  warmth: a kicked tour is gone on from where it is longer by no
    more than this times a random number that thins out as kicks are spent (threshold accepting, Dueck & Scheuer 1990).
    """
    size = len(tour)
    chance = seeded(seed)
    hair = 1e-9 + 1e-14 * size * cost.max()  # what rounding can make of nothing
    place = np.empty(size, np.int64)
    for i in range(size):
        place[tour[i]] = i
    beside = np.full((size, 2), -1, np.int64)
    _settle(cost, near, tour, place, beside, hair)
    now = _length(cost, tour)
    best, kept = now, tour.copy()
    was, was_beside = tour.copy(), beside.copy()
    longest = max(1, min(size // 3 - 1, 12)) if size >= 8 else 0
    for kick in range(kicks if longest else 0):
        if best <= target + hair:
            break
        start = pick(chance, size)
        first, second = 1 + pick(chance, longest), 1 + pick(chance, longest)
        third = 1 + pick(chance, longest)
        _exchange(tour, place, start, first + second, third)  # B C D -> D B C -> D C B
        _exchange(tour, place, (start + third) % size, first, second)
        _settle(cost, near, tour, place, beside, hair)
        then = _length(cost, tour)
        if then < best - hair:
            best = then
            kept[:] = tour
        if then <= now + warmth * draw(chance) * (1.0 - kick / kicks):
            now = then
            was[:], was_beside[:] = tour, beside
        else:
            tour[:], beside[:] = was, was_beside
            for i in range(size):
                place[tour[i]] = i
    tour[:] = kept
    return best
