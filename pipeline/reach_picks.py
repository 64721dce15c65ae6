"""The reach map with a run on it: where the arm can grip, where it did, and where parts left it unpicked."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.reach import Reacher, Spots, stations, yaws_of
from pipeline.replay import Run, Setting

Floats = NDArray[np.float64]

STEP_MM, ANGLES = 15.0, 24  # of the map
BESIDE_MM = 60.0  # mapped beside the outermost part, and on a tray around all of them


@dataclass(frozen=True, eq=False)
class PicksOnReach:
    """p picks and m misses over a map of n points, all in the cell frame.

    A miss lies where the part left the pick window; where there is no window, abreast of the arm; on a tray, where it
    lay.
    """

    spots: Spots  # (n,) the map, rows of points across the belt, one row after the other along it
    rows: int  # how many there are
    slots: tuple[Spots, ...]
    picks_mm: Floats  # (p, 2) of the tool tip as it grips
    elbows: NDArray[np.int64]  # (p,) 0 right, 1 left
    missed: NDArray[np.int64]  # (m,) indices of the parts
    missed_mm: Floats  # (m, 2)
    reasons: tuple[str, ...]  # (m,)


def picks_on_reach(setting: Setting, run: Run) -> PicksOnReach:
    """The map over the belt where parts came, or over the tray, with what became of them."""
    reacher = Reacher(setting.cell)
    cycles = [pick.cycle for pick in run.picks]
    picks = np.array([c.hold.at_mm + setting.belt.shift_mm(c.grasp_start_s) for c in cycles]).reshape(-1, 2)
    missed = np.flatnonzero([fate is not None for fate in run.fates])
    misses = np.array([_left_mm(setting, reacher, k) for k in missed.tolist()]).reshape(-1, 2)
    along, across = _stretches(setting, reacher, np.vstack([picks, misses]))
    spots = reacher.spots("map", reacher.grid_mm(along, across), yaws_of(ANGLES))
    return PicksOnReach(spots, len(along), tuple(reacher.slots(ANGLES)), picks,
                        np.array([c.hold.elbow for c in cycles], np.int64), missed, misses,
                        tuple(fate.reason for fate in run.fates if fate is not None))


def _left_mm(setting: Setting, reacher: Reacher, k: int) -> Floats:
    """Where part k is drawn that was not picked (2,)."""
    at, belt = setting.parts[k].xy_mm, setting.cell.belt
    if belt is None:
        return at
    end = belt.window_mm[1] if belt.window_mm else reacher.span_mm()[0]
    return np.asarray(at + (end - at @ reacher.along) * reacher.along)


def _stretches(setting: Setting, reacher: Reacher, shown: Floats) -> tuple[Floats, Floats]:
    """Distances along the heading, and to the left of it, that the map spans: where parts are, or all in reach."""
    along, across, reach = reacher.span_mm()
    window = setting.cell.belt.window_mm if setting.cell.belt else None
    spans = []
    for middle, places, given in ((along, shown @ reacher.along, window), (across, shown @ reacher.across, None)):
        low, high = (places.min() - BESIDE_MM, places.max() + BESIDE_MM) if len(shown) else (middle, middle)
        low, high = given or (max(low, middle - 1.2 * reach), min(high, middle + 1.2 * reach))
        spans.append(stations(low, high, STEP_MM) if low < high else stations(middle - reach, middle + reach, STEP_MM))
    return spans[0], spans[1]
