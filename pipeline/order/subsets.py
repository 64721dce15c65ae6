"""Kernels of the look-ahead: subsets of parts, clusters of grasps, legs that depend on their start.

Shared shapes: table (G + 1, K, G) finish of the leg to node b started at t0 + k dt, row 0 from the start, nodes of a
part adjacent; begins (m + 1,) first node of each part; blocked (m,) masks; earliest (2^m, G) by set and last node.
"""

from heapq import heappop, heappush

import numpy as np
from numpy.typing import NDArray

from pipeline.order.compiled import compiled

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

NEVER = 1e100  # and above: not possible
BLANK = 1e250  # stands for inf in a table, so that interpolating gives no nan, and NEVER even from a sliver of it


@compiled("f8[:,:,::1](f8[:,:,::1], i8[::1], i8[::1])")
def made_monotone(finish: FloatArray, rows: IntArray, nodes: IntArray) -> FloatArray:
    """The table as the kernels want it: rows and nodes in the order given, start times before nodes, and waiting
    allowed: the finish at a start time is the least over it and all later ones."""
    count, steps = len(nodes), finish.shape[2]
    table = np.empty((len(rows), steps, count))
    for a in range(len(rows)):
        for b in range(count):
            least = BLANK
            for k in range(steps - 1, -1, -1):
                least = min(least, finish[rows[a], nodes[b], k])
                table[a, k, b] = least
    return table


@compiled("Tuple((i8, f8))(f8, f8, f8, i8)")
def _placed(start: float, t0: float, dt: float, steps: int) -> tuple[int, float]:
    """Grid step at or before a start time and the share of the way to the next; step -1: past the grid."""
    at = max((start - t0) / dt, 0.0)
    step = int(min(at, 1e15))
    if step >= steps - 1:
        return (steps - 1, 0.0) if at <= steps - 1 + 1e-9 else (-1, 0.0)
    return step, at - step


@compiled("f8(f8[:,:,::1], i8, i8, f8, f8, f8)")
def leg_finish(table: FloatArray, row: int, node: int, start: float, t0: float, dt: float) -> float:
    """When a leg started at a time is done; NEVER or more where it cannot be."""
    k, share = _placed(start, t0, dt, table.shape[1])
    if k < 0:
        return NEVER
    here, there = table[row, k, node], table[row, min(k + 1, table.shape[1] - 1), node]
    return float(here + (there - here) * share)


@compiled("f8(f8[:,::1], i8[::1], f8[::1], f8, i8)")
def _slowest_kept(earliest: FloatArray, sets: IntArray, set_weight: FloatArray, t_start: float, share: int) -> float:
    """Seconds a weight up to which a state of these sets goes on, so that about `share` do; inf: all of them."""
    pace = np.empty(earliest.shape[1] * len(sets))
    live = 0
    for s in sets:
        for a in range(earliest.shape[1]):
            if earliest[s, a] < NEVER:
                pace[live] = (earliest[s, a] - t_start) / max(set_weight[s], 1e-300)
                live += 1
    return float(np.sort(pace[:live])[share - 1]) if live > share else np.inf


@compiled("void(f8[:,:,::1], i8[::1], i8[::1], f8[:,::1], i2[:,::1], f8, f8, f8, i8, i8, i8)")
def _go_on(
    table: FloatArray, begins: IntArray, blocked: IntArray, earliest: FloatArray, parent: NDArray[np.int16],
    start: float, t0: float, dt: float, first: int, s: int, a: int,
) -> None:
    """From node a (-1: the start) after set s, free at `start`, to every node that may be next."""
    steps = table.shape[1]
    k, part = _placed(start, t0, dt, steps)
    if k < 0:
        return
    here, there = table[a + 1, k], table[a + 1, min(k + 1, steps - 1)]
    for p in range(len(begins) - 1):
        if (s >> p) & 1 or (blocked[p] & s) != blocked[p]:
            continue
        then = s | (1 << p)
        for b in range(begins[p], begins[p + 1]):
            done = here[b] + (there[b] - here[b]) * part
            if done < earliest[then, b] and (s > 0 or first < 0 or b == first):
                earliest[then, b] = done
                parent[then, b] = a


@compiled("Tuple((f8[:,::1], i2[:,::1], i8, b1))(f8[:,:,::1], i8[::1], i8[::1], f8[::1], f8, f8, f8, i8, i8)")
def earliest_finish(
    table: FloatArray, begins: IntArray, blocked: IntArray, set_weight: FloatArray, t_start: float, t0: float,
    dt: float, first: int, budget: int,
) -> tuple[FloatArray, NDArray[np.int16], int, bool]:
    """Earliest finish and the node before, per set and last node; states gone on from; whether some were left out.

    Sets go by size. Where a size holds more states than its share of the budget, those with most weight a second go on.
    """
    m, count = len(begins) - 1, table.shape[2]
    earliest = np.full((1 << m, count), NEVER)
    parent = np.full((1 << m, count), -1, np.int16)
    sizes = np.zeros(1 << m, np.int64)
    for s in range(1, 1 << m):
        sizes[s] = sizes[s >> 1] + (s & 1)
    by_size = np.argsort(sizes, kind="mergesort")
    _go_on(table, begins, blocked, earliest, parent, t_start, t0, dt, first, 0, -1)
    expanded, cut, end = 1, False, 1
    for size in range(1, m + 1):
        at = end
        while end < len(by_size) and sizes[by_size[end]] == size:
            end += 1
        share = max((budget - expanded) // (m + 1 - size), 1)
        slowest = np.inf
        if share < count * (end - at):
            slowest = _slowest_kept(earliest, by_size[at:end], set_weight, t_start, share)
            cut = cut or slowest < np.inf
        for s in by_size[at:end]:
            for a in range(count):
                pace = (earliest[s, a] - t_start) / max(set_weight[s], 1e-300)
                if earliest[s, a] < NEVER and pace <= slowest:
                    expanded += 1
                    _go_on(table, begins, blocked, earliest, parent, earliest[s, a], t0, dt, first, s, a)
    return earliest, parent, expanded, cut


@compiled("f8[:,::1](f8[:,:,::1], i8[::1], i8[::1], f8[:,::1], b1[::1], f8[:,::1], f8, f8)")
def travel_to_go(
    table: FloatArray, begins: IntArray, blocked: IntArray, travel: FloatArray, enough: NDArray[np.bool_],
    earliest: FloatArray, t0: float, dt: float,
) -> FloatArray:
    """Least travel from each state to a set that is enough, were every state reached at its earliest: a lower bound."""
    m, count, steps = len(begins) - 1, table.shape[2], table.shape[1]
    to_go = np.full((1 << m, count), NEVER)
    for s in range((1 << m) - 1, 0, -1):
        for a in range(count):
            if earliest[s, a] >= NEVER:
                continue
            if enough[s]:
                to_go[s, a] = 0.0
                continue
            k, part = _placed(earliest[s, a], t0, dt, steps)
            if k < 0:
                continue
            there = table[a + 1, k + 1] if part > 0 else table[a + 1, k]
            for p in range(m):
                if (s >> p) & 1 or (blocked[p] & s) != blocked[p]:
                    continue
                for b in range(begins[p], begins[p + 1]):
                    if there[b] < NEVER:
                        to_go[s, a] = min(to_go[s, a], travel[a + 1, b] + to_go[s | (1 << p), b])
    return to_go


@compiled("Tuple((i8[::1], i8))(f8[:,:,::1], i8[::1], i8[::1], f8[:,::1], b1[::1], f8[:,::1], f8, f8, f8, i8, i8)")
def least_travel(
    table: FloatArray, begins: IntArray, blocked: IntArray, travel: FloatArray, enough: NDArray[np.bool_],
    to_go: FloatArray, t_start: float, t0: float, dt: float, first: int, budget: int,
) -> tuple[IntArray, int]:
    """Nodes of the sequence of least travel (then earliest finish) whose set is enough, and labels looked at.

    Best first search (Hart, Nilsson & Raphael 1968) over (travel, time) labels: travel never falls from one label taken
    to the next of the same state, so a later one counts only where it is earlier. No nodes: the budget ran out.
    """
    m, count = len(begins) - 1, table.shape[2]
    soonest = np.full((1 << m, count), NEVER)
    sets, lasts, before = [0], [-1], [-1]
    heap = [(0.0, t_start, 0)]
    taken = 0
    while len(heap) > 0 and taken < budget:
        least, start, label = heappop(heap)
        s, a = sets[label], lasts[label]
        if s > 0:
            if start >= soonest[s, a]:
                continue
            soonest[s, a] = start
            if enough[s]:
                nodes = np.empty(m, np.int64)
                size = 0
                while label > 0:
                    nodes[size] = lasts[label]
                    size += 1
                    label = before[label]
                return nodes[:size][::-1].copy(), taken
        taken += 1
        gone = least - to_go[s, a] if s > 0 else 0.0
        for p in range(m):
            if (s >> p) & 1 or (blocked[p] & s) != blocked[p]:
                continue
            then = s | (1 << p)
            for b in range(begins[p], begins[p + 1]):
                if to_go[then, b] >= NEVER or (s == 0 and first >= 0 and b != first):
                    continue
                done = leg_finish(table, a + 1, b, start, t0, dt)
                if done < min(soonest[then, b], NEVER):
                    sets.append(then)
                    lasts.append(b)
                    before.append(label)
                    heappush(heap, (gone + travel[a + 1, b] + to_go[then, b], done, len(sets) - 1))
    return np.empty(0, np.int64), taken
