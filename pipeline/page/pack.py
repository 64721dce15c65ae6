"""Long series of numbers in little text: rounded, their second differences as variable-length bytes, in base64."""

import base64

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
MOST_BYTES_EACH = 8


def packed(values: FloatArray, step: float) -> str:
    """Values (n,) to the nearest multiple of step. A smooth series takes little more than a byte a value.

    Each second difference d is stored as the number 2 d (-2 d - 1 below zero), seven bits a byte, low ones first, the
    eighth bit set where more follow: the signed little-endian base 128 of the DWARF and Protocol Buffers formats.
    """
    whole = np.round(np.asarray(values, np.float64) / step).astype(np.int64)
    second = np.diff(whole, n=2, prepend=[0, 0])
    folded = np.where(second >= 0, 2 * second, -2 * second - 1)[:, None]
    groups = folded >> (7 * np.arange(MOST_BYTES_EACH))
    more = np.concatenate([groups[:, 1:] > 0, np.zeros((len(groups), 1), bool)], axis=1)
    kept = np.concatenate([np.ones((len(groups), 1), bool), groups[:, 1:] > 0], axis=1)
    return base64.b64encode(((groups & 127) | (more * 128))[kept].astype(np.uint8).tobytes()).decode()
