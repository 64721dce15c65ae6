"""The exact search, driven: what it needs made from a task, worked off bucket by bucket, read back as an order."""

from dataclasses import dataclass
from time import perf_counter

import numpy as np
from numpy.typing import NDArray

from pipeline.order import labels
from pipeline.order.bound import allowed, assignment, shortest
from pipeline.order.task import FloatArray, Task

MOST_ITEMS = 62


@dataclass(frozen=True)
class Found:
    """The best order of a search (None: nothing better than asked for), its weight lost and value; what is proven.

    floor: no order that loses nothing is below it (in a search where nothing may be lost; else 0).
    cut: some partial orders were left out for want of room or time, so that a better order may have been missed.
    """

    nodes: tuple[int, ...] | None
    lost: float
    value: float
    floor: float
    cut: bool
    made: int


def search(
    task: Task, *, strict: bool, width: int, upper: float = np.inf, most_lost: float = 0.0, bend: float = 0.0,
    most_made: float = np.inf, until: float = np.inf,
) -> Found:
    """Search all orders, or as many as `width` labels for each size of the rest allow.

    strict: every item must be done, and only orders below `upper` are sought; else orders that lose at most
    `most_lost` of the weight. most_made: labels to make about in all; where they run out too early, `width` is halved.
    until: clock reading (perf_counter) after which no further bucket is begun.
    """
    n = len(task.go) - 1
    nodes = _nodes(task, strict)
    room = min((n + 3) * width + 2 * width, 1 << 21)
    pool = np.empty(room, labels.LABEL)
    heads = np.full(1 << max(int(room).bit_length(), 4), -1, np.int32)
    buckets, counts = np.full(n + 1, -1, np.int32), np.zeros(n + 1, np.int32)
    rules = np.array([(upper, most_lost, bend, width, task.waits, strict)], labels.RULES)
    state = np.array([(task.weight.sum(), 0.0, np.inf, 1, -1, 0, -1, 0, False)], labels.SEARCH)
    limit, gone = _limits(task)
    _plant(pool, buckets, nodes, limit, gone, task)
    for bucket in range(n, -1, -1):
        if 1.5 * n * state["made"] > most_made * (1.5 * n - bucket) and rules["width"] > 50:
            rules["width"] //= 2
        if perf_counter() > until:
            _abandon(pool, buckets[: bucket + 1], state)
            break
        labels.expand(pool, heads, buckets, counts, nodes, task.go, task.cost, limit, gone, rules, state, bucket)
    return _found(pool, state[0], strict, upper)


def _nodes(task: Task, strict: bool) -> NDArray[np.void]:
    nodes = np.zeros(len(task.go), labels.NODE)
    nodes["early"], nodes["late"], nodes["weight"] = task.early, task.late, task.weight
    bit = np.concatenate([[0], 1 << np.arange(len(task.go) - 1, dtype=np.int64)])
    nodes["needs"] = (task.before * bit[:, None]).sum(axis=0)
    if strict and len(task.go) > 1:
        may = allowed(task) & np.isfinite(task.cost)
        large = 2.0 * (task.cost[may].max(initial=0.0) * len(task.go) + 1.0)
        _, leave, enter, _ = assignment(np.where(may, task.cost, large))
        nodes["leave"], nodes["enter"] = leave, enter
    return nodes


def _limits(task: Task) -> tuple[FloatArray, NDArray[np.int64]]:
    """Latest starts at each node from which the others can be reached, rising, and the sets past each."""
    way = shortest(task.go)[:, 1:]
    latest = np.where(np.isinf(way), -np.inf, task.late[None, 1:] - np.where(np.isinf(way), 0.0, way))
    latest[np.arange(1, len(task.go)), np.arange(len(task.go) - 1)] = np.inf
    order = np.argsort(latest, axis=1, kind="stable")
    past = np.cumsum(np.int64(1) << order.astype(np.int64), axis=1)
    gone = np.concatenate([np.zeros((len(task.go), 1), np.int64), past], axis=1)
    return np.ascontiguousarray(np.take_along_axis(latest, order, axis=1)), np.ascontiguousarray(gone)


def _plant(
    pool: NDArray[np.void], buckets: NDArray[np.int32], nodes: NDArray[np.void], limit: FloatArray,
    gone: NDArray[np.int64], task: Task,
) -> None:
    """The first label: at the start, nothing done."""
    n = len(nodes) - 1
    rest = ((1 << n) - 1) & ~int(gone[0, np.searchsorted(limit[0], 0.0)])
    for k in range(1, n + 1):
        if int(nodes["needs"][k]) & ~rest:
            rest &= ~(1 << (k - 1))
    missing = [k for k in range(1, n + 1) if not rest >> (k - 1) & 1]
    toll = float((nodes["leave"] + nodes["enter"])[1:].sum())
    floor = float(nodes["leave"][0] + toll + nodes["enter"][0])
    pool[0] = (0, rest, 0.0, 0.0, task.weight[missing].sum(), toll, floor, 0.0, -1, -1, -1, 0, True)
    buckets[n - len(missing)] = 0


def _abandon(pool: NDArray[np.void], buckets: NDArray[np.int32], state: NDArray[np.void]) -> None:
    state["cut"] = True
    for label in buckets:
        while label >= 0:
            if pool[label]["alive"]:
                state["cut_floor"] = min(float(state["cut_floor"][0]), float(pool[label]["floor"]))
            label = pool[label]["listed"]


def _found(pool: NDArray[np.void], state: np.void, strict: bool, upper: float) -> Found:
    nodes: list[int] = []
    if state["parent"] >= 0:
        label, last = int(state["parent"]), int(state["last"])
        while last:
            nodes.append(last)
            last, label = int(pool[label]["last"]), int(pool[label]["parent"])
    whole = not strict or (state["parent"] >= 0 and state["lost"] <= labels.HAIR)
    best = float(state["value"]) if strict and whole else upper
    floor = min(best, float(state["cut_floor"])) if strict else 0.0
    return Found(tuple(nodes[::-1]) if whole else None, float(state["lost"]), float(state["value"]), floor,
                 bool(state["cut"]), int(state["made"]))
