"""Random numbers for the kernels: xorshift (Marsaglia 2003), the same on every machine for the same seed."""

import numpy as np
from numpy.typing import NDArray

from pipeline.order.compiled import compiled

State = NDArray[np.uint64]


@compiled("f8(u8[::1])")
def draw(state: State) -> float:
    """A number from 0 up to but not 1."""
    x = state[0]
    x ^= x << np.uint64(13)
    x ^= x >> np.uint64(7)
    x ^= x << np.uint64(17)
    state[0] = x
    return float(x >> np.uint64(11)) / 9007199254740992.0


@compiled("u8[::1](i8)")
def seeded(seed: int) -> State:
    """A state to draw from, never zero, and stirred so that near seeds part."""
    state = np.empty(1, np.uint64)
    state[0] = np.uint64(seed + 1) * np.uint64(0x9E3779B97F4A7C15) | np.uint64(1)
    for _ in range(8):
        draw(state)
    return state


@compiled("i8(u8[::1], i8)")
def pick(state: State, below: int) -> int:
    """A whole number from 0 up to but not `below`."""
    return int(draw(state) * below)
