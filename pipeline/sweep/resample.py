"""Longer runs from short recordings: arrivals drawn anew from those that were recorded.

A belt: parts come in runs of successive recorded ones, each with the gap that was ahead of it, its place across the
belt, its angle, kind and side (stationary bootstrap: Politis, Romano, J. Amer. Statist. Assoc. 89, 1994, section 2;
runs of random length keep clumps together). Each part is known as far upstream as it was when recorded. A tray: whole
trays are drawn.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from cameras.faults import InputFault
from cameras.recording import Recording
from pipeline.follow import Known, Part
from pipeline.sweep.case import Case
from pipeline.sweep.settings import faster

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MEAN_RUN = 6  # parts: longer than most clumps, short beside most recordings
LONGEST_S = 24 * 3600.0
BEYOND_MM = 50.0  # the run ends when the last part is this far behind the window


@dataclass(frozen=True)
class Arrivals:
    """The parts of a recording in order of arrival, n of them.

    along_mm (n,): along the heading at counts 0, falling.  gap_mm (n,): to the part ahead; the first has the mean one.
    across_mm (n,): to the left of the heading.  radius_mm (n,): of the disc that holds the part.
    donor (n,): whose sightings are told of it: its own where the recording saw it come and go.
    """

    parts: tuple[Part, ...]
    along_mm: FloatArray
    gap_mm: FloatArray
    across_mm: FloatArray
    radius_mm: FloatArray
    donor: IntArray


@dataclass(frozen=True)
class Laid:
    """m parts laid on an endless belt: index of each in the recorded Arrivals, and where it lies at counts 0."""

    index: IntArray
    along_mm: FloatArray


def resampled(case: Case, length_s: float, seed: int, rate: float = 1.0) -> Case:
    """A recording of parts that come over `length_s` seconds, and the time until the last of them has left.

    Same seed, same parts. rate: factor on how many come a second. Raises InputFault where nothing can be drawn.
    """
    if not 0 < length_s <= LONGEST_S:
        raise InputFault("--length-s", "", f"{length_s:g} s will not do", f"give up to {LONGEST_S:.0f} s")
    rng = np.random.default_rng(seed)
    if case.cell.belt is None:
        return faster(_trays(case, length_s * rate, rng), rate)
    recorded = arrivals_of(case)
    start = int(rng.integers(2 * len(case.recording) - 2))
    first = _first_mm(case, recorded)
    fed_mm = float(np.ptp(_travel(case, _frames(case, length_s, start))))
    laid = lay_out(recorded, _runs(len(recorded.parts), rng), first, first - fed_mm, rate)
    return _told(case, recorded, laid, _until_gone(case, laid, length_s, start))


def spread(case: Case, rate: float) -> Case:
    """The recorded arrivals in their order, `rate` times as many a second on a belt that runs as it did."""
    if case.cell.belt is None:
        return faster(case, rate)
    recorded = arrivals_of(case)
    order = np.arange(len(recorded.parts))
    laid = lay_out(recorded, order, float(recorded.along_mm[0]), -np.inf, rate)
    return _told(case, replace(recorded, donor=order), laid, _until_gone(case, laid, case.lasts_s, 0))


def arrivals_a_minute(case: Case) -> float:
    """How many parts came a minute, on the mean, while any did."""
    if case.cell.belt is None:
        return 60.0 * len(case.parts) / (case.lasts_s * len(case.recording) / (len(case.recording) - 1))
    speed_mm_s = float(np.ptp(case.travel_mm)) / case.lasts_s
    return 60.0 * speed_mm_s / float(arrivals_of(case).gap_mm.mean())


def arrivals_of(case: Case) -> Arrivals:
    """What came in a recording. Raises InputFault where fewer than two parts did."""
    if len(case.parts) < 2 or len(case.recording) < 3:
        raise InputFault(case.name, "", "fewer than two parts or three frames: nothing to draw arrivals from",
                         "give a longer recording")
    heading, left = case.heading, np.array([-case.heading[1], case.heading[0]])
    parts = sorted(case.parts, key=lambda part: (-float(part.xy_mm @ heading), part.number))
    along = np.array([float(part.xy_mm @ heading) for part in parts])
    gaps = -np.diff(along)
    return Arrivals(tuple(parts), along, np.append(gaps.mean(), gaps), np.array([float(p.xy_mm @ left) for p in parts]),
                    np.array([_radius(part, case.outlines) for part in parts]), _donors(parts, len(case.recording)))


def lay_out(recorded: Arrivals, order: IntArray, first_mm: float, last_mm: float, rate: float) -> Laid:
    """Recorded parts laid one behind the other in this order, from first_mm down to last_mm or till the order ends.

    Gaps are the recorded ones over `rate`. A part that would lie on one before it is moved back until their discs are
    clear, or as near as they were when recorded; those after it do not move for that.
    """
    index: list[int] = []
    along: list[float] = []
    due = first_mm
    widest = 2 * float(recorded.radius_mm.max(initial=0.0))
    for k, this in enumerate(order.tolist()):
        due -= recorded.gap_mm[this] / rate if k else 0.0
        at = due
        for back in range(1, k + 1):
            before = index[-back]
            if along[-back] - at > widest:
                break
            apart = recorded.radius_mm[this] + recorded.radius_mm[before]
            if this - before == back:
                apart = min(apart, np.hypot(recorded.along_mm[before] - recorded.along_mm[this],
                                            recorded.across_mm[before] - recorded.across_mm[this]))
            aside = recorded.across_mm[before] - recorded.across_mm[this]
            at = min(at, along[-back] - np.sqrt(max(apart**2 - aside**2, 0.0)))
        at = min(at, along[-1]) if along else at
        if at < last_mm:
            break
        index.append(this)
        along.append(at)
    return Laid(np.array(index, np.int64), np.array(along))


def _runs(parts: int, rng: np.random.Generator) -> IntArray:
    """Enough parts for any length, in runs of successive ones, the first following the last."""
    many = 100 * parts + 100_000
    new = rng.random(many) < 1 / min(MEAN_RUN, parts)
    new[0] = True
    starts = np.flatnonzero(new)
    begin = np.repeat(rng.integers(parts, size=len(starts)) - starts, np.diff(np.append(starts, many)))
    return np.asarray((begin + np.arange(many)) % parts)


def _radius(part: Part, outlines: Mapping[str, FloatArray | float]) -> float:
    outline = part.outline_mm if len(part.outline_mm) else outlines.get(part.kind, 0.0)
    return float(np.max(np.hypot(*outline.T))) if isinstance(outline, np.ndarray) else float(outline)


def _donors(parts: list[Part], frames: int) -> IntArray:
    """For each part one that was seen to come and go: itself, otherwise the nearest in order of its kind and side."""
    whole = np.array([part.first_row > 0 and part.last_row < frames - 1 for part in parts])
    alike = np.unique([f"{part.kind}\n{part.side}" for part in parts], return_inverse=True)[1]
    donor = np.arange(len(parts))
    for k in np.flatnonzero(~whole):
        able = np.flatnonzero(whole & (alike == alike[k]))
        able = able if len(able) else np.flatnonzero(whole)
        if len(able):
            donor[k] = able[np.abs(able - k).argmin()]
    return donor


def _first_mm(case: Case, recorded: Arrivals) -> float:
    """Where the first part may lie at counts 0, so that every part comes into view after the first frame."""
    travel, donors = case.travel_mm, [recorded.parts[d] for d in recorded.donor]
    upstream = min(float(donor.xy_mm @ case.heading) + travel[donor.first_row] for donor in donors)
    return float(upstream - travel[0] - max(recorded.gap_mm[0], 1.0))


def _frames(case: Case, length_s: float, start: int) -> Recording:
    """Frames over at least length_s: the recorded ones from one of them on to the end, back again, and so on.

    start: 0 to 2n - 3, of n frames; from n - 1 on the way back. The belt goes as recorded, stops and all; forwards and
    backwards in turn, so that its speed never jumps. Raises InputFault for a belt that gets nowhere.
    """
    recording, last = case.recording, len(case.recording) - 1
    if case.travel_mm[-1] <= case.travel_mm[0]:
        raise InputFault(case.name, "counts", "the belt does not move forwards", "give a recording in which it does")
    turned = np.roll(np.concatenate([np.arange(last), np.arange(last)[::-1]]), -start)
    ends = np.roll(np.concatenate([np.arange(last) + 1, np.arange(last)[::-1]]), -start)
    rounds = int(length_s / (2 * case.lasts_s)) + 2
    passed = np.append(0.0, np.cumsum(np.tile(np.diff(recording.times_s)[turned], rounds)))
    many = int(np.searchsorted(passed, length_s - 1e-9)) + 1
    moved = np.append(0.0, np.cumsum(np.tile(np.diff(recording.counts)[turned], rounds)))
    cameras = recording.cameras[np.append(ends[-1], np.tile(ends, rounds))]
    rows = np.arange(many)
    return Recording(recording.folder, rows, (), recording.times_s[0] + passed[:many],
                     recording.counts[0] + moved[:many], cameras[:many], rows.copy())


def _travel(case: Case, frames: Recording) -> FloatArray:
    return replace(case, recording=frames).travel_mm


def _until_gone(case: Case, laid: Laid, length_s: float, start: int) -> Recording:
    """Frames over length_s and on until the last part has left window and view."""
    recorded = case.travel_mm
    window = (case.cell.belt.window_mm if case.cell.belt else None) or (0.0, 0.0)
    seen_mm = max(float(part.xy_mm @ case.heading) + recorded[part.last_row] for part in case.parts)
    needed = max(window[1], seen_mm) + BEYOND_MM - float(laid.along_mm[-1])
    while True:
        frames = _frames(case, length_s, start)
        missing = needed - float(_travel(case, frames)[-1])
        if missing <= 0:
            return frames
        length_s += max(missing * case.lasts_s / (recorded[-1] - recorded[0]), 1.0)


def _told(case: Case, recorded: Arrivals, laid: Laid, frames: Recording) -> Case:
    """The case of the parts laid out, each with its sightings in those of the frames that show it where it was seen."""
    travel, recorded_travel = _travel(case, frames), case.travel_mm
    rows_of = {str(name): np.flatnonzero(frames.cameras == name) for name in np.unique(frames.cameras)}
    left = np.array([-case.heading[1], case.heading[0]])
    parts = []
    for index, along in zip(laid.index.tolist(), laid.along_mm.tolist(), strict=True):
        part, donor = recorded.parts[index], recorded.parts[recorded.donor[index]]
        seen_mm = float(donor.xy_mm @ case.heading) + recorded_travel[donor.known.row]
        cameras = case.recording.cameras[donor.known.row]
        row = np.array([_nearest(rows_of[str(camera)], travel, at - along)
                        for at, camera in zip(seen_mm.tolist(), cameras, strict=True)])
        parts.append(_moved(part, donor, row, along * case.heading + recorded.across_mm[index] * left))
    parts.sort(key=lambda part: part.first_row)
    numbered = tuple(replace(part, number=k) for k, part in enumerate(parts, 1))
    return replace(case, recording=frames, parts=numbered)


def _nearest(rows: IntArray, travel: FloatArray, wanted: float) -> int:
    """Of these rows the one at which the belt has come nearest to a travel."""
    at = int(np.searchsorted(travel[rows], wanted))
    around = rows[max(at - 1, 0) : at + 1]
    return int(around[np.abs(travel[around] - wanted).argmin()])


def _moved(part: Part, donor: Part, row: IntArray, xy_mm: FloatArray) -> Part:
    """A part at a place of its own, with a donor's sightings in these rows (k,), the last one in each."""
    order = np.argsort(row, kind="stable")
    kept = order[np.append(np.diff(row[order]) > 0, True)]
    known = donor.known
    history = Known(
        row[kept], known.xy_mm[kept] - donor.xy_mm + xy_mm, known.yaw_rad[kept] - donor.yaw_rad + part.yaw_rad,
        np.where(known.kind[kept] == donor.kind, part.kind, known.kind[kept]),
        np.where(known.side[kept] == donor.side, part.side, known.side[kept]),
        np.clip(known.score[kept] - donor.score + part.score, 0.0, 1.0),
    )  # fmt: skip
    return replace(part, xy_mm=xy_mm, first_row=int(row.min()), last_row=int(row.max()), frames_seen=len(kept),
                   known=history)


def _trays(case: Case, length_s: float, rng: np.random.Generator) -> Case:
    """Whole trays drawn anew, each there as long as it was; the last one as long as the mean."""
    recording = case.recording
    if len(recording) < 2:
        raise InputFault(case.name, "", "a single tray: nothing to draw arrivals from", "give a longer recording")
    lasts = np.append(np.diff(recording.times_s), np.diff(recording.times_s).mean())
    drawn = rng.integers(len(lasts), size=int(length_s / lasts.min()) + 2)
    drawn = drawn[: int(np.searchsorted(np.cumsum(lasts[drawn]), length_s)) + 1]
    times = recording.times_s[0] + np.append(0.0, np.cumsum(lasts[drawn])[:-1])
    rows = np.arange(len(drawn))
    frames = Recording(recording.folder, rows, (), times, recording.counts[drawn], recording.cameras[drawn],
                       rows.copy())
    parts = [(row, part) for row, tray in enumerate(drawn.tolist()) for part in case.parts if part.first_row == tray]
    moved = (_moved(part, part, np.full(len(part.known.row), row), part.xy_mm) for row, part in parts)
    return replace(case, recording=frames, parts=tuple(replace(part, number=k) for k, part in enumerate(moved, 1)))
