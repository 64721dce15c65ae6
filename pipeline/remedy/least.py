"""Cells with one number changed, and the least change that does what is asked."""

import math
from collections.abc import Callable
from typing import Any

from pipeline.cell import Cell, Record

Key = tuple[str | int, ...]


def with_value(cell: Cell, key: Key, value: object) -> Cell:
    """The cell with the value at a key like ("arm", "j4", "max") or ("keepouts", 0, "top_mm"); it is not checked."""
    changed = _with(cell, key, value)
    if not isinstance(changed, Cell):
        raise TypeError(f"{key} is no key of a cell")
    return changed


def _with(owner: Any, key: Key, value: object) -> Any:
    step, rest = key[0], key[1:]
    if isinstance(step, int):
        return tuple(_with(one, rest, value) if k == step and rest else value if k == step else one
                     for k, one in enumerate(owner))
    one: Record = owner
    return one.model_copy(update={step: _with(getattr(owner, step), rest, value) if rest else value})


def least(does: Callable[[float], bool], most: float, step: float) -> float | None:
    """The least multiple of step, up to most, that does, if every larger one does too; None where most does not."""
    high = math.floor(most / step + 1e-9)
    if high < 1 or not does(high * step):
        return None
    low, reach = 0, 1
    while reach < high and not does(reach * step):  # near ones first: remedies far off are seldom wanted
        low, reach = reach, 2 * reach
    high = min(reach, high)
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if does(middle * step) else (middle, high)
    return high * step


def first(does: Callable[[float], bool], most: float, step: float) -> float | None:
    """The same where a larger change may overshoot: looked for at doubling distances, then between the last two."""
    reach = step
    while not does(reach):
        reach *= 2
        if reach > most:
            return None
    return least(does, reach, step)
