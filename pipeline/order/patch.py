"""Rounds to start from: an assignment, its circles patched into one; costs blurred at random give another each time.

Patching is Karp's (1979), starts from blurred costs are after Codenotti, Manzini, Margara & Resta (1996).
"""

import numpy as np
from numpy.typing import NDArray

from pipeline.order.bound import assignment
from pipeline.order.chance import State, draw
from pipeline.order.compiled import compiled

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@compiled("i8(i8[::1], i8[::1])")
def _circles(then: IntArray, circle: IntArray) -> int:
    """Number the circles that the nodes make, each followed by `then`; how many there are."""
    circle[:] = -1
    count = 0
    for first in range(len(then)):
        node = first
        if circle[node] < 0:
            while circle[node] < 0:
                circle[node] = count
                node = then[node]
            count += 1
    return count


@compiled("void(f8[:,::1], f8, u8[::1], i8[::1])")
def patched_round(cost: FloatArray, blur: float, chance: State, tour: IntArray) -> None:
    """Fill in a round. blur: what is added to each cost on average; the diagonal must hold what forbids it."""
    size = len(cost)
    blurred = cost.copy()
    for i in range(size):
        for j in range(size):
            blurred[i, j] -= blur * np.log(1.0 - draw(chance))
    _, _, _, then = assignment(blurred)
    circle = np.empty(size, np.int64)
    while _circles(then, circle) > 1:
        least, a, b = np.inf, 0, 0
        for i in range(size):
            for j in range(i + 1, size):
                if circle[i] != circle[j]:
                    more = blurred[i, then[j]] + blurred[j, then[i]] - blurred[i, then[i]] - blurred[j, then[j]]
                    if more < least:
                        least, a, b = more, i, j
        then[a], then[b] = then[b], then[a]
    node = 0
    for i in range(size):
        tour[i] = node
        node = then[node]
