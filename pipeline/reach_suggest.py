"""A better window and base position: what the belt and the places ask for, looked at from other spots."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cameras.faults import InputFault
from pipeline.cell import Cell
from pipeline.reach import Reacher, stations, yaws_of

Floats = NDArray[np.float64]

STEP_MM = 10.0
SHIFTS_MM = np.arange(-120.0, 121.0, 30.0)
LANES, ROWS, ANGLES = 5, 12, 24  # points and yaws looked at for each base position
NEARLY = 0.95  # a point counts as gripped where this share of the best point's yaws can be


@dataclass(frozen=True)
class Suggestion:
    """A window for the lanes, and a base position from which they and the slots are served better, or as well."""

    lanes_mm: tuple[float, float]  # to the left of the heading, from the cell origin
    window_mm: tuple[float, float] | None  # from the present base; None: no stretch serves every lane
    base_mm: tuple[float, float]
    base_window_mm: tuple[float, float] | None  # from the suggested base
    share: tuple[float, float]  # of the yaws over window and lanes, from the present base and from the suggested one
    slots: tuple[int, int]  # that can be served, likewise
    slots_of: int


def suggest(cell: Cell, lanes_mm: tuple[float, float] | None = None) -> Suggestion:
    """Look for a window and a base. lanes_mm: the band across the belt where parts come, by default the best one.

    Raises InputFault where the cell has no belt window to start from, or nothing in it can be gripped.
    """
    if cell.belt is None or cell.belt.window_mm is None:
        raise InputFault(cell.file, "belt.window_mm", "no window to start from", "add one, as wide as the belt allows")
    here = Reacher(cell)
    lanes = lanes_mm or _best_lanes(here)
    best = max(_candidates(cell), key=lambda moved: _merit(moved, here, lanes))
    merits = [_merit(one, here, lanes) for one in (here, best)]
    return Suggestion(
        lanes, _longest_window(here, lanes), (float(best.arm.base_mm[0]), float(best.arm.base_mm[1])),
        _longest_window(best, lanes), (merits[0][1], merits[1][1]), (merits[0][0], merits[1][0]),
        sum(place.rows * place.columns for place in cell.places),
    )  # fmt: skip


def _candidates(cell: Cell) -> list[Reacher]:
    """The arm moved about, the present spot among them."""
    x, y, z = cell.arm.base_mm
    bases = [(x + dx, y + dy, z) for dx in SHIFTS_MM for dy in SHIFTS_MM]
    arms = [cell.arm.model_copy(update={"base_mm": base}) for base in bases]
    return [Reacher(cell.model_copy(update={"arm": arm})) for arm in arms]


def _merit(one: Reacher, here: Reacher, lanes: tuple[float, float]) -> tuple[int, float, float]:
    """Slots served, share of yaws gripped over window and lanes, and minus the shift from here: most is best."""
    low, high = (one.cell.belt and one.cell.belt.window_mm) or (0.0, 0.0)
    grid = one.grid_mm(np.linspace(low, high, ROWS), np.linspace(*lanes, LANES))
    share = float(one.spots("window", grid, yaws_of(ANGLES)).share[:, 2].mean())
    served = sum(int((place.share[:, 2] > 0).sum()) for place in one.slots(ANGLES))
    shift = float(np.abs(one.arm.base_mm - here.arm.base_mm).sum())
    return served, round(share, 3), -shift


def _best_lanes(here: Reacher) -> tuple[float, float]:
    """The band across the belt of which most is gripped: its width times the share of the window of its worst lane."""
    spots = here.window(STEP_MM, ANGLES)
    share = spots.share[:, 2]
    if not share.any():
        raise InputFault(here.cell.file, "belt.window_mm", "nothing in the window can be gripped",
                         "see `sanderling reach` and move the window or the base")
    across = np.round(spots.tip_mm[:, :2] @ here.across, 6)
    lanes = np.unique(across)
    gripped = share >= NEARLY * share.max()
    covered = np.array([gripped[across == lane].mean() for lane in lanes])
    bands = [(first, last) for first in range(len(lanes)) for last in range(first, len(lanes))]
    first, last = max(bands, key=lambda band: (band[1] - band[0] + 1) * covered[band[0]:band[1] + 1].min())
    return float(lanes[first]), float(lanes[last])


def _longest_window(one: Reacher, lanes: tuple[float, float]) -> tuple[float, float] | None:
    """The longest stretch along the belt on which every lane is gripped at nearly as many yaws as at the best point."""
    along, _, reach = one.span_mm()
    steps = stations(np.ceil((along - reach) / STEP_MM) * STEP_MM, along + reach, STEP_MM)
    spots = one.spots("window", one.grid_mm(steps, np.linspace(*lanes, LANES)), yaws_of(ANGLES))
    share = spots.share[:, 2].reshape(len(steps), LANES).min(axis=1)
    run = _longest_run((share >= NEARLY * share.max()) & (share > 0), steps)
    return None if run is None else (float(np.ceil(run[0])), float(np.floor(run[1])))


def _longest_run(good: NDArray[np.bool_], at: Floats) -> tuple[float, float] | None:
    """Where the longest run of True begins and ends; None where there is none."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], good, [False]]).astype(np.int8)))
    if not len(edges):
        return None
    k = int(np.argmax(edges[1::2] - edges[::2]))
    return float(at[edges[2 * k]]), float(at[edges[2 * k + 1] - 1])
