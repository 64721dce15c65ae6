"""The changes that each reason for a miss suggests: the least of each, and the nearest of them told in a sentence.

Every sentence has been tried out: with exactly the number it names, and nothing else changed, the part is gripped.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial

import numpy as np

from pipeline.cell import Cell
from pipeline.grasp import Refusal
from pipeline.neighbours import ROOM_MM
from pipeline.remedy.least import Key, first, least, with_value
from pipeline.remedy.trial import Trials

JOINT_STEP, MOVE_STEP_MM = 0.1, 1.0
MOST_TURN_DEG, MOST_BEND_DEG, MOST_STROKE_MM, MOST_MOVE_MM = 360.0, 60.0, 200.0, 256.0
AXES = {"+x": (1.0, 0.0), "-x": (-1.0, 0.0), "+y": (0.0, 1.0), "-y": (0.0, -1.0)}
BENT_DEG = 179.0  # J1 and J2 mean nothing beyond half a turn


@dataclass(frozen=True)
class Remedy:
    """One number of the cell changed by `by` (degrees or mm), what it becomes, and the sentence that says so."""

    by: float
    cell: Cell
    sentence: str


def nearest(trials: Trials, k: int, refusal: Refusal) -> str | None:
    """What would have saved part k; None where no single number would. Raises OutOfTrials."""
    for ways in _ways(trials, k, refusal.reason):
        found = list(ways(trials, k))
        if found:
            return min(found, key=lambda one: one.by).sentence
    return None


def _joint_limit(trials: Trials, k: int) -> Iterator[Remedy]:
    cell = trials.set.cell
    for n, joint in enumerate(cell.arm.joints, 1):
        for end, sign in (("max", 1.0), ("min", -1.0)):
            limit = getattr(joint, end)
            bend = min(MOST_BEND_DEG, BENT_DEG - sign * limit)
            most = MOST_STROKE_MM if n == 3 else MOST_TURN_DEG if n == 4 else bend
            told = f"a J{n} range {'to' if sign > 0 else 'from'} {{:g}} {'mm' if n == 3 else 'deg'} would do"
            yield from _changed(trials, k, ("arm", f"j{n}", end), limit, sign, most, JOINT_STEP, told)
    yield from _changed(trials, k, ("motion", "singularity_deg"), cell.motion.singularity_deg, -1.0,
                        cell.motion.singularity_deg, JOINT_STEP, "a singularity_deg of {:g} would do")


def _base(trials: Trials, k: int) -> Iterator[Remedy]:
    """The base moved towards the part, or square to the belt towards its lane."""
    cell, part = trials.set.cell, trials.set.parts[k]
    heading, base = trials.set.belt.heading, np.array(cell.arm.base_mm[:2])
    way = part.xy_mm - base
    if cell.belt is not None:
        way = way - way @ heading * heading
    far = float(np.hypot(*way))

    def moved(by: float) -> Cell:
        x, y = (base + by * way / far).tolist()
        return with_value(cell, ("arm", "base_mm"), (x, y, cell.arm.base_mm[2]))

    by = first(lambda mm: trials.alone(moved(mm), k), min(MOST_MOVE_MM, far), MOVE_STEP_MM)
    if by is not None:
        to = "part" if cell.belt is None else "belt"
        yield Remedy(by, moved(by), f"the base {by:g} mm nearer to the {to} would do")


def _window_end(trials: Trials, k: int) -> Iterator[Remedy]:
    """One end of the window moved."""
    yield from _sooner(trials, k)
    window = trials.set.mover.window_mm
    if window is not None:
        by = first(lambda mm: trials.alone(_window(trials, window[0], window[1] + mm), k), MOST_MOVE_MM, MOVE_STEP_MM)
        if by is not None:
            yield _later(trials, by)


def _sooner(trials: Trials, k: int) -> Iterator[Remedy]:
    window = trials.set.mover.window_mm
    if window is None:
        return
    first_mm, last_mm = window
    by = least(lambda mm: trials.alone(_window(trials, first_mm - mm, last_mm), k), MOST_MOVE_MM, MOVE_STEP_MM)
    if by is not None:
        edge = first_mm - by
        yield Remedy(by, _window(trials, edge, last_mm),
                     f"a window that begins {by:g} mm sooner, at {edge:g} mm, would do")


def _later(trials: Trials, by: float) -> Remedy:
    first_mm, last_mm = trials.set.mover.window_mm or (0.0, 0.0)
    edge = last_mm + by
    return Remedy(by, _window(trials, first_mm, edge), f"a window that ends {by:g} mm later, at {edge:g} mm, would do")


def _window(trials: Trials, first_mm: float, last_mm: float) -> Cell:
    return with_value(trials.set.cell, ("belt", "window_mm"), (first_mm, last_mm))


def _too_late(trials: Trials, k: int) -> Iterator[Remedy]:
    fitted = trials.fitted_in(trials.set.cell, k)
    if fitted is not None:
        moment, _ = fitted
        when = f"after pick {moment.after}" if moment.after else "first"
        yield Remedy(0.0, trials.set.cell, f"another order would do: picked {when}, at no cost to the others")
        return
    window = trials.set.mover.window_mm
    if window is None:
        return
    first_mm, last_mm = window
    fitted = trials.fitted_in(_window(trials, first_mm, last_mm + MOST_MOVE_MM), k)
    if fitted is None:
        return
    _, cycle = fitted
    gripped_mm = float(trials.set.belt.travel_mm(cycle.grasp_end_s) + cycle.hold.at_mm @ trials.set.belt.heading)
    by = float(np.ceil(max(gripped_mm - last_mm, MOVE_STEP_MM) / MOVE_STEP_MM) * MOVE_STEP_MM)
    while by <= MOST_MOVE_MM:  # the wide window looks at other points of the lane: a little more may be needed
        if trials.fitted_in(_window(trials, first_mm, last_mm + by), k) is not None:
            yield _later(trials, by)
            return
        by = float(np.ceil(1.2 * by))


def _keepout(trials: Trials, k: int) -> Iterator[Remedy]:
    """One keep-out lower, or somewhere else, where the part could be had without it."""
    cell = trials.set.cell
    for n, keepout in enumerate(cell.keepouts):
        rest = tuple(one for m, one in enumerate(cell.keepouts) if m != n)
        if not trials.alone(with_value(cell, ("keepouts",), rest), k):
            continue
        name = keepout.name or f"keep-out {n + 1}"
        room = keepout.top_mm - cell.surface_mm
        told = name.replace("{", "{{").replace("}", "}}") + " no higher than {:g} mm would do"
        yield from _changed(trials, k, ("keepouts", n, "top_mm"), keepout.top_mm, -1.0, room, MOVE_STEP_MM, told)
        for axis, way in AXES.items():
            moved = partial(_moved, cell, n, way)
            by = first(lambda mm, moved=moved: trials.alone(moved(mm), k), MOST_MOVE_MM, MOVE_STEP_MM)  # type: ignore[misc]
            if by is not None:
                yield Remedy(by, moved(by), f"{name} {by:g} mm further to {axis} would do")


def _moved(cell: Cell, n: int, way: tuple[float, float], mm: float) -> Cell:
    """The cell with a keep-out moved along (2,)."""
    polygon = tuple((x + mm * way[0], y + mm * way[1]) for x, y in cell.keepouts[n].polygon_mm)
    return with_value(cell, ("keepouts", n, "polygon_mm"), polygon)


def _no_room(trials: Trials, k: int) -> Iterator[Remedy]:
    others = trials.around(k, trials.passed_s(k))
    seen = trials.room(trials.set.cell, k, others)
    if seen is None:
        return
    for row in others[(seen[1] < ROOM_MM).any(axis=0)].tolist():
        if trials.alone(trials.set.cell, k, frozenset([row])):
            yield Remedy(0.0, trials.set.cell, f"with part {trials.set.parts[row].number} gone it could be gripped")
            return


def _place_full(trials: Trials, k: int) -> Iterator[Remedy]:
    cell, kind = trials.set.cell, trials.set.parts[k].kind
    for n, place in enumerate(cell.places):
        if place.name in cell.parts[kind].places:
            yield from _more_rows(trials, k, n)


def _more_rows(trials: Trials, k: int, n: int) -> Iterator[Remedy]:
    place = trials.set.cell.places[n]
    if place.rows * place.columns > 1 and place.pitch_mm[1] == 0:
        return
    for rows in range(place.rows + 1, 2 * place.rows + 3):
        more = with_value(trials.set.cell, ("places", n, "rows"), rows)
        if trials.fitted_in(more, k) is not None:
            added = rows - place.rows
            yield Remedy(float(added), more, f"{added} more {'row' if added == 1 else 'rows'} of slots in {place.name} "
                                             "would do")
            return


def _changed(trials: Trials, k: int, key: Key, value: float, sign: float, most: float, step: float,
             told: str) -> Iterator[Remedy]:
    """The least change of one number, if that does."""
    def changed(by: float) -> Cell:
        return with_value(trials.set.cell, key, round(value + sign * by, 6))

    by = least(lambda amount: trials.alone(changed(amount), k), most, step)
    if by is not None:
        yield Remedy(by, changed(by), told.format(round(value + sign * by, 6)))


Ways = Callable[[Trials, int], Iterator[Remedy]]
# of each reason what is looked for, the later ones where the earlier ones find nothing
_WAYS: dict[str, tuple[Ways, ...]] = {
    "joint_limit": (_joint_limit, _window_end, _base), "out_of_reach": (_window_end, _base, _joint_limit),
    "keepout": (_keepout,), "no_room": (_no_room,), "place_full": (_place_full,),
}  # fmt: skip


def _ways(trials: Trials, k: int, reason: str) -> Iterator[Ways]:
    """What to look for. A part that an arm with nothing else to do would have had is but a matter of time."""
    if reason == "too_late":
        yield _too_late
        reason = "out_of_reach"
    elif reason in ("joint_limit", "out_of_reach", "keepout", "no_room") and trials.alone(trials.set.cell, k):
        yield _too_late
        return
    if reason in _WAYS and (reason == "place_full" or not trials.alone(trials.set.cell, k)):
        yield from _WAYS[reason]
