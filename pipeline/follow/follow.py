"""Sightings of a whole recording to its parts."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from cameras.recording import Recording
from cameras.sightings import Sightings
from pipeline.cell import Cell
from pipeline.follow.associate import associate
from pipeline.follow.drift import Drift, fit_drift
from pipeline.follow.estimate import Estimates, estimate, merged_sigma
from pipeline.follow.part import Known, Part

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SIDES = ("", "up", "down")


@dataclass(frozen=True)
class Followed:
    """What a recording holds: its parts, in order of number, and how their sightings drift.

    drift: None for a tray, or where too few parts were seen in several places.
    part_of (n,): index in `parts` of what each sighting was of; -1 where it was listed twice in its frame, or was an
    unrecognised view of something else.
    """

    parts: tuple[Part, ...]
    drift: Drift | None
    part_of: IntArray


@dataclass(frozen=True)
class _Sorted:
    """Sightings sorted by thing, then row; those of thing p are start[p] to start[p + 1]."""

    order: IntArray
    start: IntArray

    @property
    def thing(self) -> IntArray:
        return np.repeat(np.arange(len(self.start) - 1), np.diff(self.start))


def follow(sightings: Sightings, recording: Recording, cell: Cell) -> Followed:
    """Parts of a recording from its sightings: one row each, however often seen.

    Parts on a belt are carried to counts 0 by the counts recorded with each frame; on a tray every frame is a fresh
    one. Parts are numbered from 1 by first sighting, then from furthest downstream. Same input, same numbers.
    """
    names = ["", *sorted(cell.parts)]
    kind, side = _codes(sightings.kind, names), _codes(sightings.side, list(SIDES))
    heading, travel_mm = _carried(recording, cell)
    shift = travel_mm[sightings.row, None] * heading
    at_mm = sightings.xy_mm - shift
    thing = _associated(sightings, kind, at_mm, None if cell.belt is None else travel_mm[sightings.row])
    thing = _without_unrecognised(thing, sightings, kind, at_mm)
    thing = _numbered(thing, sightings.row, at_mm @ heading)
    by_thing = _sorted(thing, sightings.row)
    turns = np.array([0, *(cell.parts[name].turns for name in names[1:])], dtype=np.int64)
    o = by_thing.order
    known = estimate(by_thing.start, kind[o], side[o], at_mm[o], sightings.yaw_rad[o], sightings.sigma_mm[o],
                     sightings.sigma_rad[o], sightings.score[o], turns)
    drift = _drift(by_thing, known, sightings, at_mm, recording, travel_mm, cell)
    return Followed(_parts(by_thing, known, sightings, at_mm, turns, names), drift, thing)


def _codes(values: NDArray[np.str_], names: list[str]) -> IntArray:
    """Index of each value in `names`; 0 for one that is not there."""
    codes = np.zeros(len(values), dtype=np.int64)
    for code, name in enumerate(names[1:], 1):
        codes[values == name] = code
    return codes


def _carried(recording: Recording, cell: Cell) -> tuple[FloatArray, FloatArray]:
    """Heading (2,), and travel (rows,) in mm since counts 0 as recorded; no travel on a tray."""
    if cell.belt is None:
        return np.array([1.0, 0.0]), np.zeros(len(recording))
    angle = np.radians(cell.belt.heading_deg)
    return np.array([np.cos(angle), np.sin(angle)]), recording.counts * cell.belt.mm_per_count


def _associated(sightings: Sightings, kind: IntArray, at_mm: FloatArray, travel_mm: FloatArray | None) -> IntArray:
    order = np.argsort(sightings.row, kind="stable")
    thing = np.empty(len(sightings), dtype=np.int64)
    thing[order] = associate(sightings.row[order], at_mm[order], kind[order], sightings.sigma_mm[order],
                             sightings.score[order], None if travel_mm is None else travel_mm[order])
    return thing


def _without_unrecognised(thing: IntArray, sightings: Sightings, kind: IntArray, at_mm: FloatArray) -> IntArray:
    """Things without those never recognised in whose outline lies the place of one that was, in other frames.

    Such a thing is a part seen before or after it was recognised, about another point than its grip.
    """
    recognised = np.unique(thing[(thing >= 0) & (kind > 0)])
    other = np.setdiff1d(thing[thing >= 0], recognised)
    if not len(other) or not len(recognised):
        return thing
    order = np.argsort(thing, kind="stable")
    first = order[np.searchsorted(thing[order], recognised)]
    gone = [one for one in other.tolist()
            if _is_a_view(np.flatnonzero(thing == one), thing, recognised, first, sightings, at_mm)]
    return np.where(np.isin(thing, gone), -1, thing)


def _is_a_view(mine: IntArray, thing: IntArray, recognised: IntArray, first: IntArray, sightings: Sightings,
               at_mm: FloatArray) -> bool:
    rows = sightings.row[mine]
    for i in mine:
        inside = _inside(sightings.outline_mm[i], at_mm[first] - at_mm[i])
        for known in recognised[inside]:
            if not np.isin(sightings.row[thing == known], rows).any():
                return True
    return False


def _inside(polygon: FloatArray, points: FloatArray) -> NDArray[np.bool_]:
    """Which points (n, 2) lie in a polygon (k, 2): an odd number of its edges is crossed on the way out along +x."""
    if len(polygon) < 3:
        return np.zeros(len(points), dtype=bool)
    (x, y), (ax, ay), (bx, by) = points.T[:, :, None], polygon.T, np.roll(polygon, -1, axis=0).T
    spans = (ay > y) != (by > y)
    with np.errstate(divide="ignore", invalid="ignore"):
        crossing = ax + (y - ay) / (by - ay) * (bx - ax)
    return np.asarray((spans & (x < crossing)).sum(axis=1) % 2 == 1)


def _numbered(thing: IntArray, row: IntArray, along_mm: FloatArray) -> IntArray:
    """Things numbered 0, 1, ... by first row, then furthest along; -1 stays."""
    order = np.lexsort((-along_mm, row))
    order = order[thing[order] >= 0]
    names, first = np.unique(thing[order], return_index=True)
    number = np.full(int(thing.max(initial=-1)) + 2, -1, dtype=np.int64)
    number[names[np.argsort(first, kind="stable")]] = np.arange(len(names))
    return number[thing]


def _sorted(thing: IntArray, row: IntArray) -> _Sorted:
    order = np.lexsort((row, thing))
    order = order[thing[order] >= 0]
    edges = np.flatnonzero(np.diff(thing[order], prepend=-1))
    return _Sorted(order, np.append(edges, len(order)).astype(np.int64))


def _drift(by_thing: _Sorted, known: Estimates, sightings: Sightings, at_mm: FloatArray, recording: Recording,
           travel_mm: FloatArray, cell: Cell) -> Drift | None:
    if cell.belt is None or len(recording) < 2:
        return None
    last = by_thing.start[1:] - 1
    of_kind = known.kind[last][by_thing.thing]
    order = by_thing.order
    same = (of_kind > 0) & (sightings.kind[order] == np.array(["", *sorted(cell.parts)])[of_kind])
    order, thing = order[same], by_thing.thing[same]
    if not len(order):
        return None
    row = sightings.row[order]
    camera = np.unique(recording.cameras, return_inverse=True)[1][row]
    group = np.unique(thing * (len(recording) + 1) + camera, return_inverse=True)[1]
    speed = np.gradient(travel_mm, recording.times_s)
    heading = _carried(recording, cell)[0]
    return fit_drift(group, thing, at_mm[order], sightings.sigma_mm[order], travel_mm[row], speed[row], heading,
                     cell.belt.mm_per_count)


def _parts(by_thing: _Sorted, known: Estimates, sightings: Sightings, at_mm: FloatArray, turns: IntArray,
           names: list[str]) -> tuple[Part, ...]:
    order, start, thing = by_thing.order, by_thing.start, by_thing.thing
    if not len(order):
        return ()
    last = start[1:] - 1
    off_mm = at_mm[order] - known.xy_mm[last][thing]
    turn = turns[known.kind[last]][thing]
    off_rad = _wrapped((sightings.yaw_rad[order] - known.yaw_rad[last][thing]) * turn) / np.maximum(turn, 1)
    sigma_mm = merged_sigma(start, off_mm, sightings.sigma_mm[order], known.used)
    sigma_rad = merged_sigma(start, off_rad[:, None], sightings.sigma_rad[order], known.used_yaw)
    row, kind, side = sightings.row[order], np.array(names)[known.kind], np.array(SIDES)[known.side]
    yaw_rad = _wrapped(known.yaw_rad)
    parts = []
    for k, (a, b) in enumerate(pairwise(start.tolist())):
        seen = slice(a, b)
        outline = _outline(order[seen], known.kind[b - 1], sightings, names, at_mm, known.xy_mm[b - 1])
        parts.append(Part(
            number=k + 1, kind=str(kind[b - 1]), side=str(side[b - 1]), xy_mm=known.xy_mm[b - 1],
            yaw_rad=float(yaw_rad[b - 1]), score=float(known.score[b - 1]), first_row=int(row[a]),
            last_row=int(row[b - 1]), frames_seen=int(b - a), sigma_mm=float(sigma_mm[k]),
            sigma_rad=float(sigma_rad[k]), outline_mm=outline,
            known=Known(row[seen], known.xy_mm[seen], yaw_rad[seen], kind[seen], side[seen], known.score[seen]),
        ))  # fmt: skip
    return tuple(parts)


def _outline(mine: IntArray, kind: int, sightings: Sightings, names: list[str], at_mm: FloatArray,
             xy_mm: FloatArray) -> FloatArray:
    """The largest outline seen of a thing, about its place."""
    best, most = np.zeros((0, 2)), 0.0
    for i in mine:
        polygon = sightings.outline_mm[i]
        if len(polygon) < 3 or sightings.kind[i] != names[kind]:
            continue
        x, y = polygon.T
        area = abs(float(x @ np.roll(y, -1) - y @ np.roll(x, -1)))
        if area > most:
            best, most = polygon + at_mm[i] - xy_mm, area
    return best


def _wrapped(angle: FloatArray) -> FloatArray:
    return np.asarray(np.arctan2(np.sin(angle), np.cos(angle)))
