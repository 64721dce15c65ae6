"""Prices on sets of nodes: every set without node 0 is entered and left at least once by any round.

The dual of the shortest branching (Edmonds 1967) raised set by set, taken off the costs before other bounds go on:
additive bounds (Fischetti & Toth 1992). It sees at once what prices on nodes climb to slowly, heaps of nodes that are
dear to enter or to leave.
"""

import numpy as np
from numpy.typing import NDArray

from pipeline.order.compiled import compiled

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@compiled("i8(f8[:,::1], i8, b1, f8, b1[::1])")
def _connected(cost: FloatArray, node: int, ahead: bool, hair: float, found: BoolArray) -> int:
    """Mark the nodes that reach a node (`ahead`: that it reaches) over legs that cost nothing; how many."""
    size, count, top = len(cost), 1, 1
    stack = np.empty(size, np.int64)
    found[:] = False
    found[node], stack[0] = True, node
    while top > 0:
        top -= 1
        i = stack[top]
        for j in range(size):
            if not found[j] and (cost[i, j] if ahead else cost[j, i]) <= hair:
                found[j], stack[top] = True, j
                top += 1
                count += 1
    return count


@compiled("f8(f8[:,::1], b1, f8)")
def price_sets(cost: FloatArray, leaving: bool, hair: float) -> float:
    """Price sets that nothing free enters (`leaving`: leaves), the smallest first, until node 0 has a free way to every
    node (from every node); the prices are taken off the costs, which stay non-negative. The sum of all prices."""
    size, total, node = len(cost), 0.0, 1
    inside, other = np.zeros(size, np.bool_), np.zeros(size, np.bool_)
    while node < size:
        least = _connected(cost, node, leaving, hair, inside)
        if inside[0]:
            node += 1
            continue
        heart = node
        for j in range(1, size):
            if inside[j]:
                count = _connected(cost, j, leaving, hair, other)
                if count < least:
                    heart, least = j, count
        _connected(cost, heart, leaving, hair, inside)
        price = np.inf
        for i in range(size):
            for j in range(size):
                if inside[i] == leaving and inside[j] != leaving:
                    price = min(price, cost[i, j])
        for i in range(size):
            for j in range(size):
                if inside[i] == leaving and inside[j] != leaving:
                    cost[i, j] = max(cost[i, j] - price, 0.0)
        total += price
    return total
