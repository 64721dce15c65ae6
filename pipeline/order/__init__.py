"""The best sequence, and how good it is at most.

task -> bound (cuts), exact (labels) -> rounds (patch, tour), ruin -> best; lookahead (subsets) stands by itself, for
parts that move.
"""

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from pipeline.order.best import Order, best_order

__all__ = ["Order", "best_order"]


def __getattr__(name: str) -> Any:
    """`best_order` and `Order` when they are asked for: a replay compiles the look-ahead alone."""
    if name not in __all__:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    from pipeline.order import best

    return getattr(best, name)
