"""Compiled kernels: numba with a typed face, so that strict typing sees through the decorator."""

from collections.abc import Callable
from typing import TypeVar, cast

from numba import njit

Kernel = TypeVar("Kernel", bound=Callable[..., object])


def compiled(signature: str) -> Callable[[Kernel], Kernel]:
    """Compile a function for the one signature given when its module is imported; the machine code is kept on disk."""
    return cast(Callable[[Kernel], Kernel], njit(signature, cache=True, error_model="numpy"))
