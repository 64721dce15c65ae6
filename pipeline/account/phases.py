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
        names = ("up", "across", "down", "dwell", "up", "across", "down", "release")
        told += [Phase(name, a, b, k) for name, a, b in zip(names, edges, edges[1:], strict=False)]
        free = edges[-1]
    return [phase for phase in told if phase.end_s > phase.start_s]


def _waiting(run: Run, start_s: float, end_s: float, pick: int) -> list[Phase]:
    """From one cycle's end to the next one's start."""
    told = []
    for way in run.waits:
        if start_s <= way.depart_s < end_s:
            told += [Phase("waiting", start_s, way.depart_s, pick), Phase("across", way.depart_s, way.end_s, pick)]
            start_s = way.end_s
    return [*told, Phase("waiting", start_s, end_s, pick)]


def split_of(run: Run) -> NDArray[np.float64]:
    """(picks, 8) seconds that each cycle spends on what SPLIT names."""
    return np.diff([_edges(pick.cycle) for pick in run.picks], axis=1) if run.picks else np.zeros((0, len(SPLIT)))


def _edges(cycle: Cycle) -> list[float]:
    return [cycle.depart_s, cycle.across_s, cycle.met_s, cycle.grasp_start_s, cycle.grasp_end_s, cycle.left_s,
            cycle.there_s, cycle.release_start_s, cycle.release_end_s]
