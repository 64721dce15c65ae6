"""What the arm does when."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.motion.cycle import Cycle
from pipeline.replay import Run

PHASES = ("waiting", "up", "across", "down", "dwell", "release")
SPLIT = ("up", "across to the part", "down", "dwell", "up with the part", "across to the place", "down to the slot",
         "release")  # fmt: skip


@dataclass(frozen=True)
class Phase:
    """A stretch of the run in which the arm does one thing. name: one of PHASES; pick: index of the pick it serves.

    A way to where the arm waits counts as across.
    """

    name: str
    start_s: float
    end_s: float
    pick: int


def phases_of(run: Run) -> list[Phase]:
    """The whole run from its start to the last release, without gaps."""
    told, free = [], run.start_s
    for k, pick in enumerate(run.picks):
        edges = _edges(pick.cycle)
        told += _waiting(run, free, edges[0], k)
        names = ("up", "across", "down", "dwell", "up", "across", "up" if pick.set_down else "down", "release")
        told += [Phase(name, a, b, k) for name, a, b in zip(names, edges, edges[1:], strict=False)]
        free = edges[-1]
        if pick.set_down is None:  # the end of a trip: those held before it are set down, the last picked first
            told += [phase for j in _held_before(run, k) for phase in _set_down(run, j)]
            free = run.picks[_first_of_trip(run, k)].release_end_s
    return [phase for phase in told if phase.end_s > phase.start_s]


def _first_of_trip(run: Run, last: int) -> int:
    """Index of the first pick of the trip that ends with pick `last`."""
    while last and run.picks[last - 1].set_down:
        last -= 1
    return last


def _held_before(run: Run, last: int) -> range:
    return range(last - 1, _first_of_trip(run, last) - 1, -1)


def _set_down(run: Run, k: int) -> list[Phase]:
    """How pick k, held on to, is set down."""
    down = run.picks[k].set_down
    edges = down.edges if down else ()
    names = ("up", "across", "down", "release")
    return [Phase(name, a, b, k) for name, a, b in zip(names, edges, edges[1:], strict=False)]


def _waiting(run: Run, start_s: float, end_s: float, pick: int) -> list[Phase]:
    """From one cycle's end to the next one's start."""
    told = []
    for way in run.waits:
        if start_s <= way.depart_s < end_s:
            told += [Phase("waiting", start_s, way.depart_s, pick), Phase("across", way.depart_s, way.end_s, pick)]
            start_s = way.end_s
    return [*told, Phase("waiting", start_s, end_s, pick)]


def split_of(run: Run) -> NDArray[np.float64]:
    """(picks, 8) seconds that each cycle spends on what SPLIT names, with the setting down of a part held on to."""
    split = np.diff([_edges(pick.cycle) for pick in run.picks], axis=1) if run.picks else np.zeros((0, len(SPLIT)))
    for row, pick in zip(split, run.picks, strict=True):
        if pick.set_down:
            row[4], row[6] = row[4] + row[6], 0.0
            row[4:] += np.diff(pick.set_down.edges)
    return split


def _edges(cycle: Cycle) -> list[float]:
    return [cycle.depart_s, cycle.across_s, cycle.met_s, cycle.grasp_start_s, cycle.grasp_end_s, cycle.left_s,
            cycle.there_s, cycle.release_start_s, cycle.release_end_s]
