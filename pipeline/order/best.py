"""`best_order`: which method answers, in which order they help each other, and what is proven in the end."""

from collections.abc import Iterable
from dataclasses import dataclass, replace
from time import perf_counter

import numpy as np
from numpy.typing import ArrayLike

from pipeline.order.bound import part_bound, whole_bound
from pipeline.order.exact import MOST_ITEMS, search
from pipeline.order.relaxed import walk_bound
from pipeline.order.rounds import best_round
from pipeline.order.ruin import improve_order
from pipeline.order.task import Task, checked_task

QUICK = 1000  # labels of each size a first search may keep
SMALL = 14  # items for which the exact search needs no limit
LABELS, MADE = 300_000, 2_000_000  # of larger ones: what the exact search may keep and make, over all sizes
ROUNDS = 3_000_000  # over the number of items: how long is improved
BEATS = 8  # between which the clock is looked at
SAME = 1e-9


@dataclass(frozen=True)
class Order:
    """An order and how good it is at most.

    order: items 0..n-1 in turn.  dropped: items left out, rising.  value: the objective.
    bound: no order that does at least as much weight is below it; equal to `value` when proven.
    proven: no order does more weight, nor as much at a lower value.
    """

    order: tuple[int, ...]
    value: float
    bound: float
    proven: bool
    dropped: tuple[int, ...]

    @property
    def gap(self) -> float:
        """Share of the value by which it might be too high; 0 when proven."""
        return 0.0 if self.proven or self.value <= 0 else max(0.0, 1.0 - self.bound / self.value)


@dataclass(frozen=True)
class _Best:
    """The best so far: nodes in turn, weight lost, value; the bound on it, and whether nothing is better."""

    nodes: tuple[int, ...]
    lost: float
    value: float
    bound: float = 0.0
    proven: bool = False

    @property
    def whole(self) -> bool:
        """Whether every item is done."""
        return self.lost <= SAME

    def or_better(self, other: "_Best") -> "_Best":
        """The other order where it is better."""
        more = other.lost < self.lost - SAME
        return other if more or (other.lost <= self.lost + SAME and other.value < self.value) else self

    def judged(self, bound: float, searched: bool) -> "_Best":
        """With a bound, and proven by it or by a search that left nothing out."""
        proven = searched or (self.whole and self.value <= bound + SAME * abs(self.value))
        return replace(self, bound=min(bound, self.value), proven=proven)


def best_order(
    legs: ArrayLike, windows: ArrayLike | None = None, service: ArrayLike | None = None,
    weights: ArrayLike | None = None, after: Iterable[tuple[int, int]] | None = None, objective: str = "finish",
    close: bool = False, budget_s: float | None = None, seed: int = 0,
) -> Order:
    """The order of most weight done, of those the one of least finish or travel.

    legs (n + 1, n + 1): time from row to column, row 0 the start, row i + 1 item i; inf: no way; diagonal not read.
    windows (n, 2): earliest and latest start of service, counted from leaving the start; waiting is free; None or
    (0, inf): any time. service (n,): time spent at an item before leaving it.  weights (n,) > 0, 1 by default.
    after: pairs (i, j): j may be done only once i is done, so where i is dropped j is dropped too.
    objective: "finish", when the last service ends, with `close` when the start is reached again; or "travel", the sum
    of the legs, waiting and service not counted. An order that does nothing has value 0.

    Up to 14 items, and more where windows or precedence are narrow, the order is exact and `proven`. Larger ones are
    improved for a fixed number of rounds and bounded: about 0.2 s for 60 items without windows, up to 2 s with. So the
    same input and seed give the same answer. `budget_s` is an upper cut only: where it ends the search early, the
    answer depends on the speed of the machine; at least one beat of improvement is made whatever the budget.
    Raises ValueError for arguments that do not fit together; a circle in `after` is named.
    """
    task = checked_task(legs, windows, service, weights, after, objective, close)
    if budget_s is not None and not budget_s > 0:
        raise ValueError(f"budget_s must be positive, got {budget_s}")
    until = np.inf if budget_s is None else perf_counter() + float(budget_s)
    best = _solved(task, int(seed) % 2**31, until)
    done = set(best.nodes)
    return Order(
        tuple(node - 1 for node in best.nodes), best.value * task.scale,
        (best.value if best.proven else best.bound) * task.scale, best.proven,
        tuple(node - 1 for node in range(1, len(task.go)) if node not in done))


def _solved(task: Task, seed: int, until: float) -> _Best:
    n, searched = len(task.go) - 1, False
    best, floor = _Best((), float(task.weight.sum()), 0.0), 0.0
    alone = task.timeless and not task.before.any()
    if alone and n > 2:
        best = _round(task, seed, until)
    if best.proven or (alone and n > SMALL):
        return best
    if n <= MOST_ITEMS:
        best, floor, searched = _searched(task, best, QUICK, until)
    if not searched and not alone:
        best = _improved(task, best, floor, 1, seed, until)
        if best.whole and n > SMALL:
            floor = max(floor, walk_bound(task, best.value, until))
    if not (searched or best.judged(floor, searched).proven) and n <= MOST_ITEMS:
        best, other, searched = _searched(task, best, (1 << 16) if n <= SMALL else LABELS // n, until)
        floor = max(floor, other)
    if not (searched or best.judged(floor, searched).proven):
        floor = max(floor, whole_bound(task, best.value)) if best.whole else 0.0
        best = _improved(task, best, floor, BEATS, seed + BEATS, until)
        floor = max(floor, whole_bound(task, best.value)) if best.whole else part_bound(task, best.lost)
    return best.judged(floor, searched)


def _round(task: Task, seed: int, until: float) -> _Best:
    """Nothing is ever late: a round through all, its way back free where the order is open."""
    tour, bound = best_round(task.cost, task.unit, len(task.go) - 1 > SMALL, seed, until)
    nodes = tuple(int(node) for node in tour[1:])
    return _Best(nodes, 0.0, task.value(nodes)).judged(bound, searched=False)


def _improved(task: Task, best: _Best, target: float, beats: int, seed: int, until: float) -> _Best:
    """Ruin and recreate in beats, one from nothing, the next from the best so far, and so on."""
    n = len(task.go) - 1
    apart = task.cost + task.cost.T
    np.fill_diagonal(apart, np.inf)
    near = np.ascontiguousarray(np.argsort(apart, axis=1, kind="stable")[:, : min(12, n)])
    nearest = apart.min(axis=1)
    warmth = 0.75 * float(np.median(nearest[np.isfinite(nearest)])) if np.isfinite(nearest).any() else 0.0
    order = np.zeros(n + 1, np.int64)
    for beat in range(beats):
        if beat and perf_counter() > until:
            break
        given = best.nodes if beat % 2 else ()
        order[: len(given)] = given
        size, lost, value = improve_order(
            task.go, task.cost, task.early, task.late, task.weight, task.before, near, task.waits, order,
            len(given), target, ROUNDS // BEATS // n, seed + beat, warmth)
        best = best.or_better(_Best(tuple(int(node) for node in order[:size]), lost, value))
        if best.whole and best.value <= target + SAME * abs(target):
            break
    return best


def _searched(task: Task, best: _Best, width: int, until: float) -> tuple[_Best, float, bool]:
    """The best of the exact search, a bound on orders that do everything, and whether nothing was left out."""
    made = MADE if len(task.go) - 1 > SMALL else np.inf
    found = search(task, strict=True, width=width, upper=best.value if best.whole else np.inf, most_made=made,
                   until=until)
    if found.nodes is not None:
        best = best.or_better(_Best(found.nodes, 0.0, found.value))
    if best.whole or (found.cut and width <= QUICK):
        return best, found.floor if best.whole else 0.0, best.whole and not found.cut
    apart = float(np.median(task.go[np.isfinite(task.go)]))
    found = search(task, strict=False, width=width, most_lost=best.lost, bend=apart / task.weight.max(),
                   most_made=made, until=until)
    if found.nodes is not None:
        best = best.or_better(_Best(found.nodes, found.lost, found.value))
    return best, 0.0, not found.cut
