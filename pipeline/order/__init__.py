"""The best sequence, and how good it is at most.

task -> bound, exact (labels) -> tour, ruin -> best; lookahead (subsets) stands by itself, for parts that move.
"""

from pipeline.order.best import Order, best_order

__all__ = ["Order", "best_order"]
