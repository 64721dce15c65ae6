"""Which sightings are of one thing: frame after frame, each sighting goes to at most one thing seen before."""

from collections.abc import Iterable, Iterator
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SAME_MM = 2.5  # nearer than this in one frame, two sightings are one thing listed twice
GATE_MM = 2.0  # how far, noise apart, the next sighting of a thing may lie: what calibration leaves over the field
GATE_SIGMAS = 4.0
GATE_SHARE = 0.01  # and this share of the belt's travel in between
MOST_GATE_MM = 6.0
OTHER_KIND_MM = 1.0  # another kind costs as much as this distance
FOLLOWING = 0.3  # share of the step to a new sighting that a thing's place takes, at the least
ROUGH_MM = 25.0  # a drift is looked for between sightings of neighbouring frames up to this distance
ROUGH_PAIRS = 12


class Pair(NamedTuple):
    """A sighting that may be of a thing, at a cost in mm squared."""

    cost: float
    sighting: int
    thing: int


def associate(row: IntArray, at_mm: FloatArray, kind: IntArray, sigma_mm: FloatArray, score: FloatArray,
              travel_mm: FloatArray | None) -> IntArray:
    """The thing (0, 1, ... by first sighting) each of n sightings is of; -1 for one listed twice in its frame.

    row (n,) rising; at_mm (n, 2): places at counts 0; kind (n,): any codes; travel_mm (n,): of the belt at the
    sighting, None for trays, where no thing is seen in two frames.

    Within a gate of its place each sighting goes to a thing seen before: in each frame most pairs, then least sum of
    squared distances (Kuhn, Naval Res. Logist. Q. 2, 1955, by scipy). A drift that many neighbouring frames agree on is
    taken out first, so that a wrong scale is followed too.
    """
    things = np.full(len(row), -1, dtype=np.int64)
    if travel_mm is not None:
        at_mm = at_mm - rough_drift(row, at_mm, travel_mm) * travel_mm[:, None]
    travel = np.zeros(len(row)) if travel_mm is None else travel_mm
    seen = _Things()
    for first, last in _frames(row):
        if travel_mm is None:
            seen.forget()
        frame = _distinct(range(first, last), at_mm, score)
        sightings = {i: _Sighting(float(at_mm[i, 0]), float(at_mm[i, 1]), float(sigma_mm[i]), int(kind[i]),
                                  float(travel[i])) for i in frame}
        pairs = best_pairs([pair for i, one in sightings.items() for pair in seen.near(i, one)])
        for i, one in sightings.items():
            things[i] = seen.moved(pairs[i], one) if i in pairs else seen.added(one)
    return things


def best_pairs(pairs: list[Pair]) -> dict[int, int]:
    """Thing of each sighting paired: most pairs, each thing and sighting once, then the least sum of costs."""
    sightings, things = {p.sighting for p in pairs}, {p.thing for p in pairs}
    if len(sightings) == len(pairs) == len(things):
        return {p.sighting: p.thing for p in pairs}
    chosen: dict[int, int] = {}
    for cluster in _clusters(pairs):
        rows, columns = np.unique([p.sighting for p in cluster]), np.unique([p.thing for p in cluster])
        none = 1.0 + sum(p.cost for p in cluster)  # dearer than any pairs together, so that most pairs come first
        table = np.full((len(rows), len(columns)), none)
        for p in cluster:
            table[np.searchsorted(rows, p.sighting), np.searchsorted(columns, p.thing)] = p.cost
        chosen.update({int(rows[r]): int(columns[c]) for r, c in zip(*linear_sum_assignment(table), strict=True)
                       if table[r, c] < none})
    return chosen


def _clusters(pairs: list[Pair]) -> list[list[Pair]]:
    """Pairs in groups that share no sighting and no thing."""
    nodes = np.unique([[p.sighting, -1 - p.thing] for p in pairs], return_inverse=True)[1].reshape(-1, 2)
    links = coo_matrix((np.ones(len(pairs)), nodes.T), shape=(nodes.max() + 1,) * 2)
    label = connected_components(links, directed=False)[1][nodes[:, 0]]
    groups: dict[int, list[Pair]] = {}
    for one, p in zip(label.tolist(), pairs, strict=True):
        groups.setdefault(one, []).append(p)
    return list(groups.values())


def rough_drift(row: IntArray, at_mm: FloatArray, travel_mm: FloatArray) -> FloatArray:
    """(2,) mm by which sightings of one thing drift a mm of travel, roughly.

    The median over nearest neighbours in frames next to each other; 0 where it is not clear (fewer than ROUGH_PAIRS, or
    within 5 standard errors of 0).
    """
    frame = np.unique(row, return_inverse=True)[1].astype(float)
    apart = 10 * ROUGH_MM
    tree = cKDTree(np.column_stack([at_mm, frame * apart]))
    distance, nearest = tree.query(np.column_stack([at_mm, (frame + 1) * apart]), distance_upper_bound=ROUGH_MM)
    here = np.flatnonzero(np.isfinite(distance))
    there = np.asarray(nearest)[here]
    way = travel_mm[there] - travel_mm[here]
    moved = np.abs(way) > 1.0
    if moved.sum() < ROUGH_PAIRS:
        return np.zeros(2)
    rates = (at_mm[there] - at_mm[here])[moved] / way[moved, None]
    median = np.median(rates, axis=0)
    error = 1.2533 * 1.4826 * np.median(np.abs(rates - median), axis=0) / np.sqrt(len(rates))
    return np.where(np.abs(median) > 5 * error, median, 0.0)


class _Sighting(NamedTuple):
    x: float
    y: float
    sigma: float
    kind: int
    travel: float


class _Things:
    """Things seen so far, found by place through a grid of cells as wide as the widest gate."""

    def __init__(self) -> None:
        self._last: list[_Sighting] = []
        self._times: list[int] = []
        self._cells: dict[tuple[int, int], list[int]] = {}

    def near(self, i: int, one: _Sighting) -> Iterator[Pair]:
        """Pairs of sighting i with each thing in whose gate it lies."""
        column, line = int(one.x // MOST_GATE_MM), int(one.y // MOST_GATE_MM)
        for cell in ((column + a, line + b) for a in (-1, 0, 1) for b in (-1, 0, 1)):
            for thing in self._cells.get(cell, ()):
                before = self._last[thing]
                square = (one.x - before.x) ** 2 + (one.y - before.y) ** 2
                gate = (GATE_MM + GATE_SIGMAS * (one.sigma**2 + before.sigma**2) ** 0.5
                        + GATE_SHARE * abs(one.travel - before.travel))
                if square < min(gate, MOST_GATE_MM) ** 2:
                    yield Pair(square + (OTHER_KIND_MM**2 if one.kind != before.kind else 0.0), i, thing)

    def added(self, one: _Sighting) -> int:
        """A new thing; its number."""
        self._last.append(one)
        self._times.append(1)
        self._file(len(self._last) - 1)
        return len(self._last) - 1

    def moved(self, thing: int, one: _Sighting) -> int:
        """The thing, with its place drawn towards the new sighting."""
        before = self._last[thing]
        self._times[thing] += 1
        share = max(FOLLOWING, 1 / self._times[thing])
        self._cells[self._cell(before)].remove(thing)
        self._last[thing] = one._replace(x=before.x + share * (one.x - before.x),
                                         y=before.y + share * (one.y - before.y))
        self._file(thing)
        return thing

    def forget(self) -> None:
        """Let no later sighting be of a thing seen so far."""
        self._cells.clear()

    def _file(self, thing: int) -> None:
        self._cells.setdefault(self._cell(self._last[thing]), []).append(thing)

    @staticmethod
    def _cell(one: _Sighting) -> tuple[int, int]:
        return int(one.x // MOST_GATE_MM), int(one.y // MOST_GATE_MM)


def _frames(row: IntArray) -> Iterator[tuple[int, int]]:
    """First and one past the last sighting of each frame that shows any."""
    edges = [0, *(np.flatnonzero(np.diff(row)) + 1).tolist(), len(row)]
    return pairwise(edges) if len(row) else iter(())


def _distinct(frame: Iterable[int], at_mm: FloatArray, score: FloatArray) -> list[int]:
    """The sightings of one frame without those that lie within SAME_MM of a better one."""
    frame = list(frame)
    if len(frame) < 2:
        return frame
    kept: dict[tuple[int, int], list[int]] = {}
    for i in sorted(frame, key=lambda i: -score[i]):
        x, y = at_mm[i].tolist()
        column, line = int(x // SAME_MM), int(y // SAME_MM)
        cells = [kept.get((column + a, line + b), []) for a in (-1, 0, 1) for b in (-1, 0, 1)]
        if all((x - at_mm[k, 0]) ** 2 + (y - at_mm[k, 1]) ** 2 > SAME_MM**2 for cell in cells for k in cell):
            kept.setdefault((column, line), []).append(i)
    return sorted(i for cell in kept.values() for i in cell)
