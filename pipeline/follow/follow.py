"""Sightings of a whole recording to its parts."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from cameras.recording import Recording
from cameras.sightings import Sightings
from pipeline.cell import Cell
from pipeline.follow.associate import associate
from pipeline.follow.drift import Drift, fit_drift
from pipeline.follow.estimate import Estimates, estimate, merged_sigma
from pipeline.follow.level import level
from pipeline.follow.overlap import mere_views
from pipeline.follow.part import Known, Part

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SIDES = ("", "up", "down")


@dataclass(frozen=True)
class Followed:
    """What a recording holds: its parts, in order of number, and how their sightings drift.

    drift: None for a tray, or where too few parts were seen in several places.
    part_of (n,): index in `parts` of what each sighting was of; -1 where it was listed twice in its frame, or was a
    mistaken view of another part.
    """

    parts: tuple[Part, ...]
    drift: Drift | None
    part_of: IntArray


@dataclass(frozen=True)
class _Seen:
    """Sightings with their places at counts 0 (n, 2), kinds and sides (n,) as codes, 0 not known, outlines' areas."""

    sightings: Sightings
    at_mm: FloatArray
    kind: IntArray
    side: IntArray
    area: FloatArray


@dataclass(frozen=True)
class _Sorted:
    """Sightings sorted by thing, then row; those of thing p are start[p] to start[p + 1]."""

    order: IntArray
    start: IntArray

    @property
    def thing(self) -> IntArray:
        return np.repeat(np.arange(len(self.start) - 1), np.diff(self.start))


def follow(
    sightings: Sightings, recording: Recording, cell: Cell, outlines_mm: Mapping[str, FloatArray | float] | None = None
) -> Followed:
    """Parts of a recording from its sightings: one row each, however often seen.

    Parts on a belt are carried to counts 0 by the counts recorded with each frame; on a tray every frame is a fresh
    one. Parts are numbered from 1 by first sighting, then from furthest downstream. Same input, same numbers.
    outlines_mm: of each kind, (k, 2) in its grip frame. Where given, a part that was mistaken for another kind or pose
    in some of its frames is not listed twice (nor was it ever, in what is known when: a controller would have learnt
    of the mistake only with the next frame); a radius tells too little for that.
    """
    names = ["", *sorted(cell.parts)]
    heading, travel_mm = _carried(recording, cell)
    at_mm = sightings.xy_mm - travel_mm[sightings.row, None] * heading
    areas = np.array([_area(polygon) for polygon in sightings.outline_mm])
    seen = _Seen(sightings, at_mm, _codes(sightings.kind, names), _codes(sightings.side, SIDES), areas)
    turns = np.array([0, *(cell.parts[name].turns for name in names[1:])], dtype=np.int64)
    thing = _numbered(_associated(seen, None if cell.belt is None else travel_mm[sightings.row]), seen, heading)
    by_thing, drift = _sorted(thing, sightings.row), None
    if cell.belt is not None:  # what lay in one tray is no view of what lies in another
        views = _mere_views(by_thing, seen, _estimated(by_thing, seen, turns), names, outlines_mm or {})
        thing = _numbered(np.where((thing >= 0) & views[thing], -1, thing), seen, heading)
        by_thing = _sorted(thing, sightings.row)
        again = _again(by_thing, _estimated(by_thing, seen, turns), seen, recording)
        seen = _levelled(again, seen, travel_mm, heading, len(names))
        drift = _drift(again, seen, recording, travel_mm, heading, cell.belt.mm_per_count, names)
    known = _estimated(by_thing, seen, turns)
    return Followed(_parts(by_thing, known, seen, turns, names), drift, thing)


def _codes(values: NDArray[np.str_], names: Sequence[str]) -> IntArray:
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


def _associated(seen: _Seen, travel_mm: FloatArray | None) -> IntArray:
    sightings, order = seen.sightings, np.argsort(seen.sightings.row, kind="stable")
    thing = np.empty(len(sightings), dtype=np.int64)
    thing[order] = associate(sightings.row[order], seen.at_mm[order], seen.kind[order], sightings.sigma_mm[order],
                             sightings.score[order], None if travel_mm is None else travel_mm[order])
    return thing


def _estimated(by_thing: _Sorted, seen: _Seen, turns: IntArray) -> Estimates:
    o, sightings = by_thing.order, seen.sightings
    return estimate(by_thing.start, seen.kind[o], seen.side[o], seen.at_mm[o], sightings.yaw_rad[o],
                    sightings.sigma_mm[o], sightings.sigma_rad[o], sightings.score[o], turns)


def _mere_views(by_thing: _Sorted, seen: _Seen, known: Estimates, names: list[str],
                outlines_mm: Mapping[str, FloatArray | float]) -> NDArray[np.bool_]:
    """(things + 1,) whether each thing is another view of a stronger one; the last entry stands for no thing."""
    outlines, rows = [], []
    for a, b in pairwise(by_thing.start.tolist()):
        mine, kind = by_thing.order[a:b], int(known.kind[b - 1])
        own = outlines_mm.get(names[kind])
        if own is None or np.isscalar(own) or not kind:
            outlines.append(_outline(mine, kind, seen, known.xy_mm[b - 1]))
        else:
            cos, sin = np.cos(known.yaw_rad[b - 1]), np.sin(known.yaw_rad[b - 1])
            mirror = -1.0 if SIDES[known.side[b - 1]] == "down" else 1.0
            outlines.append(np.asarray(own) * [1.0, mirror] @ np.array([[cos, sin], [-sin, cos]]))
        rows.append(seen.sightings.row[mine])
    last = by_thing.start[1:] - 1
    score = np.bincount(by_thing.thing, seen.sightings.score[by_thing.order], len(last))
    recognised = np.where(known.kind[last] > 0, len(score) + score.sum(), 0.0)
    return np.append(mere_views(known.xy_mm[last], outlines, rows, recognised + score), False)


def _numbered(thing: IntArray, seen: _Seen, heading: FloatArray) -> IntArray:
    """Things numbered 0, 1, ... by first row, then furthest along; -1 stays."""
    order = np.lexsort((-seen.at_mm @ heading, seen.sightings.row))
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


@dataclass(frozen=True)
class _Again:
    """Sightings of a thing as what it is: their indices, things, and groups of one thing seen by one camera (n,)."""

    order: IntArray
    thing: IntArray
    group: IntArray


def _again(by_thing: _Sorted, known: Estimates, seen: _Seen, recording: Recording) -> _Again:
    kind_of = known.kind[by_thing.start[1:] - 1]
    same = (kind_of[by_thing.thing] > 0) & (seen.kind[by_thing.order] == kind_of[by_thing.thing])
    order, thing = by_thing.order[same], by_thing.thing[same]
    camera = np.unique(recording.cameras, return_inverse=True)[1][seen.sightings.row[order]]
    return _Again(order, thing, np.unique(thing * (len(recording) + 1) + camera, return_inverse=True)[1])


def _levelled(again: _Again, seen: _Seen, travel_mm: FloatArray, heading: FloatArray, kinds: int) -> _Seen:
    """The sightings with their kinds' edges as high as the sightings themselves tell."""
    sightings, look, o = seen.sightings, seen.kind + kinds * (seen.side == SIDES.index("down")), again.order
    levels = level(look[o], 2 * kinds, again.group, seen.at_mm[o], sightings.sigma_mm[o], sightings.lean_mm[o],
                   travel_mm[sightings.row[o]], heading)
    told = 0.5 * np.sum(sightings.lean_mm**2, axis=1) * (1 - levels.sigma[look] ** 2)
    sigma_mm = np.sqrt(np.maximum(sightings.sigma_mm**2 - told, 0.1 * sightings.sigma_mm**2))
    return replace(seen, at_mm=seen.at_mm - sightings.lean_mm * levels.raised[look, None],
                   sightings=replace(sightings, sigma_mm=sigma_mm))


def _drift(again: _Again, seen: _Seen, recording: Recording, travel_mm: FloatArray, heading: FloatArray,
           mm_per_count: float, names: list[str]) -> Drift | None:
    order, thing, group = again.order, again.thing, again.group
    if not len(order) or len(recording) < 2:
        return None
    speed = np.gradient(travel_mm, recording.times_s)

    def fitted(which: NDArray[np.bool_]) -> Drift | None:
        row = seen.sightings.row[order[which]]
        return fit_drift(group[which], thing[which], seen.at_mm[order[which]], seen.sightings.sigma_mm[order[which]],
                         travel_mm[row], speed[row], heading, mm_per_count)

    drift = fitted(np.ones(len(order), dtype=bool))
    kinds = ((names[code], fitted(seen.kind[order] == code)) for code in np.unique(seen.kind[order]))
    by_kind = tuple((name, one.along_mm, one.along_error_mm) for name, one in kinds if one is not None)
    return None if drift is None else replace(drift, by_kind=by_kind)


def _parts(by_thing: _Sorted, known: Estimates, seen: _Seen, turns: IntArray, names: list[str]) -> tuple[Part, ...]:
    order, start, sightings = by_thing.order, by_thing.start, seen.sightings
    if not len(order):
        return ()
    last = start[1:] - 1
    of_sighting = last[by_thing.thing]
    turn = turns[known.kind[of_sighting]]
    off_rad = _wrapped((sightings.yaw_rad[order] - known.yaw_rad[of_sighting]) * turn) / np.maximum(turn, 1)
    sigma_mm = merged_sigma(start, seen.at_mm[order] - known.xy_mm[of_sighting], sightings.sigma_mm[order], known.used)
    sigma_rad = merged_sigma(start, off_rad[:, None], sightings.sigma_rad[order], known.used_yaw)
    kind, side, yaw_rad = np.array(names)[known.kind], np.array(SIDES)[known.side], _wrapped(known.yaw_rad)
    everything = Known(sightings.row[order], known.xy_mm, yaw_rad, kind, side, known.score)
    return tuple(
        Part(
            number=k + 1, kind=str(kind[b - 1]), side=str(side[b - 1]), xy_mm=known.xy_mm[b - 1],
            yaw_rad=float(yaw_rad[b - 1]), score=float(known.score[b - 1]), frames_seen=b - a,
            first_row=int(everything.row[a]), last_row=int(everything.row[b - 1]), sigma_mm=float(sigma_mm[k]),
            sigma_rad=float(sigma_rad[k]), known=everything.part(a, b),
            outline_mm=_outline(order[a:b], int(known.kind[b - 1]), seen, known.xy_mm[b - 1]),
        )
        for k, (a, b) in enumerate(pairwise(start.tolist()))
    )  # fmt: skip


def _outline(mine: IntArray, kind: int, seen: _Seen, xy_mm: FloatArray) -> FloatArray:
    """The largest outline seen of a thing, about its place; (0, 2) where its sightings have none."""
    area = np.where(seen.kind[mine] == kind, seen.area[mine], 0.0)
    best = mine[np.argmax(area)]
    return seen.sightings.outline_mm[best] + seen.at_mm[best] - xy_mm if area.any() else np.zeros((0, 2))


def _area(polygon: FloatArray) -> float:
    if len(polygon) < 3:
        return 0.0
    x, y = polygon.T
    return abs(float(x @ np.roll(y, -1) - y @ np.roll(x, -1))) / 2


def _wrapped(angle: FloatArray) -> FloatArray:
    return np.asarray(np.arctan2(np.sin(angle), np.cos(angle)))
