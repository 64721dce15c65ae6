"""What is to be ordered, checked at the door: times from node to node, windows, weights, what must come before what."""

from collections.abc import Iterable
from dataclasses import dataclass

import networkx as nx
import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class Task:
    """N = n + 1 nodes: node 0 the start (and the end), node i + 1 item i. Times are divided by `scale`, weights by the
    greatest, so that a hair (1e-9) means the same for every task; both by a power of two, so that nothing is rounded.

    go (N, N): from the start of service at the row to the arrival at the column; to column 0: to the end.
    cost (N, N): what the objective counts of that, waiting aside.  waits: the objective counts waiting too (finish).
    early, late (N,): first and last start of service, a hair of rounding allowed; late inf: no limit.
    weight (N,): 0 at node 0.  before (N, N): row must be done before column, closed under "and so".
    unit: every cost is a whole number of these; 0: there is no such unit.
    """

    go: FloatArray
    cost: FloatArray
    waits: bool
    early: FloatArray
    late: FloatArray
    weight: FloatArray
    before: BoolArray
    scale: float
    unit: float

    @property
    def timeless(self) -> bool:
        """Whether no window and no impossible leg can keep an item from being done."""
        off = ~np.eye(len(self.go), dtype=bool)
        return bool(np.all(self.early <= 0) and np.all(np.isinf(self.late)) and np.all(np.isfinite(self.go[off])))

    def value(self, nodes: Iterable[int]) -> float:
        """The objective of an order, term by term; inf where it breaks a window."""
        time, cost, at = 0.0, 0.0, 0
        for node in [*nodes, 0]:
            if node == at == 0:
                return 0.0
            time, cost = time + self.go[at, node], cost + self.cost[at, node]
            if node:
                time = max(time, self.early[node])
                if time > self.late[node]:
                    return float("inf")
            at = node
        return float(time if self.waits else cost)


def checked_task(
    legs: ArrayLike, windows: ArrayLike | None, service: ArrayLike | None, weights: ArrayLike | None,
    after: Iterable[tuple[int, int]] | None, objective: str, close: bool,
) -> Task:
    """The task, or a ValueError that says which argument is wrong and how."""
    leg = np.array(legs, dtype=np.float64, order="C")
    if leg.ndim != 2 or leg.shape[0] != leg.shape[1] or not len(leg):
        raise ValueError(f"legs must be square, row and column 0 the start; got shape {leg.shape}")
    n = len(leg) - 1
    np.fill_diagonal(leg, 0.0)
    if np.any(np.isnan(leg)) or np.any(leg < 0):
        row, column = np.argwhere(np.isnan(leg) | (leg < 0))[0]
        raise ValueError(f"legs must not be NaN or negative; leg {row} to {column} is {leg[row, column]}")
    if objective not in ("finish", "travel"):
        raise ValueError(f'objective must be "finish" or "travel", got {objective!r}')
    serving = _row("service", service, n, 0.0)
    weight = _row("weights", weights, n, 1.0)
    early, late = _windows(windows, n)
    if np.any(weight == 0):
        raise ValueError("weights must be positive; leave items of no weight out")
    go = leg + np.concatenate([[0.0], serving])[:, None]
    if not close:
        leg[1:, 0] = 0.0
        go[1:, 0] = serving
    cost = go if objective == "finish" else leg
    whole = bool(np.all(cost[np.isfinite(cost)] == np.round(cost[np.isfinite(cost)])))
    scale = _power_of_two(go[(go > 0) & np.isfinite(go)])
    return Task(
        go / scale, cost / scale, objective == "finish", early / scale, late / scale,
        np.concatenate([[0.0], weight / _power_of_two(weight)]), _precedence(after, n), scale,
        1.0 / scale if whole else 0.0)


def _power_of_two(values: FloatArray) -> float:
    """The power of two at or below the median; 1 for no values."""
    return float(2.0 ** np.floor(np.log2(np.median(values)))) if len(values) else 1.0


def _row(name: str, given: ArrayLike | None, n: int, default: float) -> FloatArray:
    row = np.full(n, default) if given is None else np.asarray(given, dtype=np.float64)
    if row.shape != (n,):
        raise ValueError(f"{name} must hold one number for each of {n} items, got shape {row.shape}")
    if not np.all(np.isfinite(row)) or np.any(row < 0):
        at = int(np.argmax(~np.isfinite(row) | (row < 0)))
        raise ValueError(f"{name} must be finite and not negative; item {at} has {row[at]}")
    return row


def _windows(given: ArrayLike | None, n: int) -> tuple[FloatArray, FloatArray]:
    window = np.tile([0.0, np.inf], (n, 1)) if given is None else np.asarray(given, dtype=np.float64)
    if window.shape != (n, 2) and not (n == 0 and window.size == 0):
        raise ValueError(f"windows must hold earliest and latest for each of {n} items, got shape {window.shape}")
    window = window.reshape(n, 2)
    wrong = np.any(np.isnan(window), axis=1) | (window[:, 0] > window[:, 1]) | (window[:, 0] == np.inf)
    if np.any(wrong):
        at = int(np.argmax(wrong))
        raise ValueError(f"a window is earliest, then latest, neither NaN; item {at} has {window[at, 0]} and "
                         f"{window[at, 1]}")
    early = np.concatenate([[0.0], np.maximum(window[:, 0], 0.0)])
    late = np.concatenate([[np.inf], window[:, 1] + 1e-9 * np.abs(np.where(np.isinf(window[:, 1]), 0.0, window[:, 1]))])
    return early, late


def _precedence(after: Iterable[tuple[int, int]] | None, n: int) -> BoolArray:
    graph: nx.DiGraph[int] = nx.DiGraph()
    graph.add_nodes_from(range(n))
    for pair in after or ():
        try:
            i, j = (int(one) for one in pair)
        except (TypeError, ValueError):
            raise ValueError(f"after must hold pairs (i, j), i before j; got {pair!r}") from None
        if not (0 <= i < n and 0 <= j < n):
            raise ValueError(f"after names an item that is not there: ({i}, {j}) of {n} items")
        graph.add_edge(i, j)
    if not nx.is_directed_acyclic_graph(graph):
        cycle = [edge[0] for edge in nx.find_cycle(graph)]
        raise ValueError(f"after goes round in a circle: {' before '.join(map(str, [*cycle, cycle[0]]))}")
    before = np.zeros((n + 1, n + 1), dtype=bool)
    if graph.number_of_edges():
        for i, j in nx.transitive_closure_dag(graph).edges:
            before[i + 1, j + 1] = True
    return before
