"""The exact look-ahead over parts that move: which grasp of which part next, and what then.

Dynamic programming over subsets (Held & Karp 1962) with legs that depend on when they start. Kept per set of picked
parts and last grasp: the earliest finish. That is exact because a leg started later never finishes earlier (first in,
first out: waiting is allowed, so the finish is made monotone), hence of two ways into one state the earlier is never
worse. Several grasps of one part are nodes of one cluster: the generalised travelling salesman (Noon & Bean 1991).

With m parts and G grasps: 2^m G states of 10 bytes (26 with travel), half of them reachable, and at most 2^m G^2 / 4
legs looked up. 12 parts of 4 grasps: 100,000 states, 2.4 million legs, some milliseconds.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pipeline.order.subsets import NEVER, earliest_finish, least_travel, leg_finish, made_monotone, travel_to_go

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MOST_PARTS = 16
SAME = 1e-9  # weights nearer than this share are equal: sums in another order differ by rounding


@dataclass(frozen=True)
class PickSequence:
    """The best sequence of grasps from one moment on.

    nodes: grasps in the order picked.  parts: the part of each.  finish_s: when each is done (release end).
    weight: picked in all.  finish: when the last is done, s (the start where nothing is picked).
    travel: joint travel of the sequence, nan without a travel matrix.
    weight_bound: no sequence picks more; equal to `weight` unless cut.  states: how many were looked at.
    cut: the budget ran out, the sequence is the best found and not proven.
    first_weight, first_finish, first_travel (G,): the best that can follow each first choice (with the choice itself);
    weight 0 and finish inf where it cannot be the first; None unless asked for.  first_nodes: those sequences.
    """

    nodes: tuple[int, ...]
    parts: tuple[int, ...]
    finish_s: tuple[float, ...]
    weight: float
    finish: float
    travel: float
    weight_bound: float
    states: int
    cut: bool
    first_weight: FloatArray | None = None
    first_finish: FloatArray | None = None
    first_travel: FloatArray | None = None
    first_nodes: tuple[tuple[int, ...], ...] = ()


@dataclass(frozen=True)
class _Task:
    """The question with nodes sorted by part. Row 0 of table and travel is the start, row b + 1 node b."""

    table: FloatArray  # (G + 1, K, G)
    begins: IntArray  # (m + 1,) first node of each part
    weights: FloatArray  # (m,)
    set_weight: FloatArray  # (2^m,)
    blocked_by: IntArray  # (m,)
    travel: FloatArray | None  # (G + 1, G)
    t_start: float
    t0: float
    dt: float
    budget: int


def best_pick_sequence(
    finish: ArrayLike, part_of: ArrayLike, weights: ArrayLike, blocked_by: ArrayLike, t_start: float, t0: float,
    dt: float, travel: ArrayLike | None = None, budget_states: int = 2_000_000, alternatives: bool = False,
) -> PickSequence:
    """The sequence of most weight, then the earliest finish; with `travel`: most weight, then least travel.

    finish (G + 1, G, K): when node b is done if its leg from node a starts at t0 + k dt, at [a + 1, b, k]; row 0 is
    the start; inf where it cannot be done. Between two times of the grid it is interpolated (so it is impossible from
    the first impossible time's predecessor on), before t0 one waits for t0, after the last time nothing can start.
    part_of (G,): part of each node, 0..m-1, m <= 16.  weights (m,) >= 0.  blocked_by (m,): bit p set where part p must
    be picked first (a part whose blocker is not picked is not picked either).  travel (G + 1, G) >= 0.
    budget_states: (set, last) states to look at, spread evenly over the sizes of set; where a size has more, those
    with most weight a second are kept. alternatives: also solve once for every first choice (G times the work).
    Same input, same answer: nothing depends on the clock. Raises ValueError for arrays that do not fit together.
    """
    part_of = np.asarray(part_of, np.int64)
    by_part = np.argsort(part_of, kind="stable")
    task = _checked(finish, part_of, by_part, weights, blocked_by, travel, (t_start, t0, dt), budget_states)
    nodes, times, states, cut = _solved(task, -1)
    weight = float(task.set_weight[_picked(task, nodes)])
    first: dict[str, Any] = {}
    if alternatives:
        first = _after_each_first(task, by_part)
    chosen = tuple(int(by_part[node]) for node in nodes)
    return PickSequence(
        nodes=chosen, parts=tuple(int(part_of[node]) for node in chosen), finish_s=times, weight=weight,
        finish=times[-1] if times else float(t_start), travel=_travelled(task, nodes),
        weight_bound=max(weight, _most_weight(task)) if cut else weight, states=states, cut=cut, **first)


def _checked(
    finish: ArrayLike, part_of: IntArray, by_part: IntArray, weights: ArrayLike, blocked_by: ArrayLike,
    travel: ArrayLike | None, clock: tuple[float, float, float], budget: int,
) -> _Task:
    table, worth = np.asarray(finish, np.float64), np.asarray(weights, np.float64)
    blocked = np.asarray(blocked_by, np.int64)
    m, count = len(worth), len(part_of)
    if worth.ndim != 1 or m > MOST_PARTS:
        raise ValueError(f"weights must be a row of at most {MOST_PARTS}, one a part; got shape {worth.shape}")
    if not np.all(np.isfinite(worth)) or np.any(worth < 0):
        raise ValueError("weights must be finite and not negative")
    if blocked.shape != (m,) or np.any(blocked < 0) or np.any(blocked >> m):
        raise ValueError(f"blocked_by must hold one mask of {m} bits a part")
    if part_of.ndim != 1 or np.any(part_of < 0) or np.any(part_of >= m):
        raise ValueError(f"part_of must name a part 0 to {m - 1} for each node")
    if table.ndim != 3 or table.shape[:2] != (count + 1, count) or (count and table.shape[2] < 1):
        raise ValueError(f"finish must have shape ({count + 1}, {count}, K), got {table.shape}")
    if np.any(np.isnan(table)):
        raise ValueError("finish holds NaN; say inf where a leg is impossible")
    if not np.all(np.isfinite(clock)) or clock[2] <= 0:
        raise ValueError(f"t_start, t0 and dt must be finite and dt positive, got {clock}")
    rows = np.concatenate([[0], by_part + 1])
    cost = None if travel is None else np.asarray(travel, np.float64)
    if cost is not None:
        if cost.shape != (count + 1, count) or not np.all(np.isfinite(cost)) or np.any(cost < 0):
            raise ValueError(f"travel must have shape ({count + 1}, {count}), finite and not negative")
        cost = np.ascontiguousarray(cost[rows][:, by_part])
    set_weight = np.zeros(1)
    for one in worth:
        set_weight = np.concatenate([set_weight, set_weight + one])
    return _Task(
        made_monotone(np.ascontiguousarray(table), rows, by_part),
        np.searchsorted(part_of[by_part], np.arange(m + 1)).astype(np.int64), worth, set_weight, blocked, cost,
        float(clock[0]), float(clock[1]), float(clock[2]), max(int(budget), m + 1))


def _solved(task: _Task, first: int) -> tuple[list[int], tuple[float, ...], int, bool]:
    """Nodes in order, when each is done, states looked at, whether cut; `first` >= 0: only sequences that start so."""
    clock = (task.t_start, task.t0, task.dt)
    earliest, parent, states, cut = earliest_finish(
        task.table, task.begins, task.blocked_by, task.set_weight, *clock, first, task.budget)
    best_of_set = earliest.min(axis=1, initial=NEVER)
    best_of_set[0] = task.t_start
    reached = best_of_set < NEVER
    most = task.set_weight[reached].max()
    enough = reached & (task.set_weight >= most - SAME * max(most, 1.0))
    goal = int(np.argmin(np.where(enough, best_of_set, np.inf)))
    nodes = _walked_back(parent, task.begins, goal, int(np.argmin(earliest[goal])) if goal else -1)
    if task.travel is not None and nodes:
        to_go = travel_to_go(
            task.table, task.begins, task.blocked_by, task.travel, enough, earliest, task.t0, task.dt)
        found, labels = least_travel(
            task.table, task.begins, task.blocked_by, task.travel, enough, to_go, *clock, first, task.budget)
        states, cut = states + labels, cut or not len(found)
        nodes = [int(node) for node in found] if len(found) else nodes
    return nodes, _times(task, nodes), int(states), bool(cut)


def _walked_back(parent: NDArray[np.int16], begins: IntArray, picked: int, last: int) -> list[int]:
    nodes: list[int] = []
    while last >= 0:
        nodes.append(last)
        part = int(np.searchsorted(begins, last, side="right")) - 1
        last, picked = int(parent[picked, last]), picked & ~(1 << part)
    return nodes[::-1]


def _times(task: _Task, nodes: list[int]) -> tuple[float, ...]:
    times = [task.t_start]
    for before, node in zip([-1, *nodes], nodes, strict=False):
        times.append(leg_finish(task.table, before + 1, node, times[-1], task.t0, task.dt))
    return tuple(times[1:])


def _travelled(task: _Task, nodes: list[int]) -> float:
    if task.travel is None:
        return float("nan")
    return float(sum(task.travel[a + 1, b] for a, b in zip([-1, *nodes], nodes, strict=False)))


def _picked(task: _Task, nodes: list[int]) -> int:
    return sum(1 << (int(np.searchsorted(task.begins, node, side="right")) - 1) for node in nodes)


def _after_each_first(task: _Task, by_part: IntArray) -> dict[str, Any]:
    weight, finish, travel = np.zeros(len(by_part)), np.full(len(by_part), np.inf), np.full(len(by_part), np.nan)
    sequences: list[tuple[int, ...]] = [()] * len(by_part)
    for node in range(len(by_part)):
        nodes, times, _, _ = _solved(task, node)
        if nodes:
            at = by_part[node]
            weight[at], finish[at] = task.set_weight[_picked(task, nodes)], times[-1]
            travel[at] = _travelled(task, nodes)
            sequences[at] = tuple(int(by_part[node]) for node in nodes)
    return {"first_weight": weight, "first_finish": finish, "first_travel": travel, "first_nodes": tuple(sequences)}


def _most_weight(task: _Task) -> float:
    """No sequence picks more weight: parts as fractions of work before deadlines (a relaxation solved by greed,
    since sets of parts due by a time are nested: Edmonds 1971)."""
    step = np.arange(task.table.shape[1])
    begun = np.maximum(task.t0 + task.dt * step, task.t_start)[:, None]
    later = np.minimum(step + 1, len(step) - 1)  # a leg may start up to the next time of the grid
    usable = (task.t0 + task.dt * (step + 1) > task.t_start)[None, :, None] & (task.table < NEVER)
    takes = np.where(usable, task.table - np.maximum(begun[later], begun), np.inf).min(axis=(0, 1), initial=np.inf)
    due = np.where(usable, task.table, -np.inf).max(axis=(0, 1), initial=-np.inf)
    rows = [slice(a, b) for a, b in zip(task.begins[:-1], task.begins[1:], strict=True)]
    work = np.array([max(takes[row].min(initial=np.inf), 1e-12) for row in rows])
    last = np.array([due[row].max(initial=-np.inf) for row in rows])
    room = np.maximum(last - task.t_start, 0.0)  # what still fits by the deadline of each part
    total = 0.0
    for p in np.argsort(-task.weights / work, kind="stable"):
        done = min(work[p], room[last >= last[p]].min()) if np.isfinite(work[p]) else 0.0
        room[last >= last[p]] -= done
        total += task.weights[p] * done / work[p]
    return float(total)
