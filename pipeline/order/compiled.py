"""Compiled kernels: numba with a typed face, so that strict typing sees through the decorator."""

from collections.abc import Callable
from typing import Any, TypeVar, cast

import numba
import numpy as np

Kernel = TypeVar("Kernel", bound=Callable[..., object])


def compiled(signature: object) -> Callable[[Kernel], Kernel]:
    """Compile a function for the one signature given when its module is imported; the machine code is kept on disk.

    The signature is a string, or the result type called with the argument types where a record is among them.
    """
    return cast(Callable[[Kernel], Kernel], numba.njit(signature, cache=True, error_model="numpy"))


def rows_of(record: "np.dtype[np.void]") -> Any:
    """The numba type of a contiguous row of records."""
    return numba.types.Array(numba.from_dtype(record), 1, "C")
