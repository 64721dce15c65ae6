"""Where the arm can grip, and the run on it: its picks by elbow, its misses by reason."""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Polygon
from numpy.typing import NDArray

from pipeline.plots.axes import BLUE, GREEN, GREY, MARKS, ORANGE, RED, axes_of
from pipeline.plots.order import surroundings
from pipeline.reach_picks import PicksOnReach
from pipeline.replay import Setting

ELBOWS = (("elbow right", BLUE, ">"), ("elbow left", ORANGE, "<"))
GRIPPED = (("can be gripped: either elbow", GREEN), ("right only", BLUE), ("left only", ORANGE))
MISSES = (*MARKS, "p", "h", "*")


def plot_reach_picks(over: PicksOnReach, setting: Setting, ax: Axes | None = None) -> Axes:
    """The map shaded where the arm can grip, darker for more of the part's angles; the picks and misses drawn on it."""
    ax = axes_of(ax, (8.0, 8.0))
    _shade(ax, over)
    for k, (name, colour, mark) in enumerate(ELBOWS):
        at = over.picks_mm[over.elbows == k]
        if len(at):
            ax.scatter(at[:, 0], at[:, 1], color=colour, marker=mark, s=26, edgecolors="white", linewidths=0.5,
                       zorder=3, label=f"{len(at)} picked, {name}")
    for k, reason in enumerate(sorted(set(over.reasons))):
        at = over.missed_mm[np.array(over.reasons) == reason]
        ax.scatter(at[:, 0], at[:, 1], facecolors="none", edgecolors=RED, marker=MISSES[k], s=42, linewidths=1.3,
                   zorder=4, label=f"{len(at)} missed, {reason.replace('_', ' ')}")
    for place in over.slots:
        out = place.tip_mm[place.share[:, 2] <= 0]
        ax.scatter(out[:, 0], out[:, 1], color=RED, marker="x", s=30, label="slot out of reach" if len(out) else None)
    surroundings(ax, setting)
    ax.set(xlabel="x, mm", ylabel="y, mm", aspect="equal")
    ax.figure.legend(loc="outside lower center", ncols=3, frameon=False, fontsize="small")
    return ax


def _shade(ax: Axes, over: PicksOnReach) -> None:
    """A tile for each point of the map, by the elbows that can grip there; points that none can are dotted."""
    spots, tile = over.spots, _tile(over)
    right, left = spots.share[:, 0] > 0, spots.share[:, 1] > 0
    for (name, colour), here in zip(GRIPPED, (right & left, right & ~left, left & ~right), strict=True):
        for k in np.flatnonzero(here).tolist():
            ax.add_patch(Polygon(spots.tip_mm[k, :2] + tile, closed=True, color=colour, linewidth=0,
                                 alpha=0.08 + 0.2 * float(spots.share[k, 2])))
        if here.any():
            ax.fill([], [], color=colour, alpha=0.28, linewidth=0, label=name)
    out = spots.tip_mm[~(right | left)]
    ax.scatter(out[:, 0], out[:, 1], color=GREY, s=2, alpha=0.5, linewidths=0, label="can't be gripped")


def _tile(over: PicksOnReach) -> NDArray[np.float64]:
    """Corners (4, 2) of the tile around a point of the map."""
    points, columns = over.spots.tip_mm[:, :2], len(over.spots) // over.rows
    across, along = (points[1] - points[0]) / 2, (points[columns] - points[0]) / 2
    return np.array([across + along, along - across, -across - along, across - along])
