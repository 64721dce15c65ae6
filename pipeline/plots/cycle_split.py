"""How cycles split into their steps."""

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

from pipeline.account.phases import SPLIT
from pipeline.plots.axes import BLUE, GREEN, GREY, ORANGE, PINK, axes_of

COLOURS = (GREEN, BLUE, PINK, ORANGE, GREEN, BLUE, PINK, GREY)


def plot_cycle_split(split_s: NDArray[np.float64], ax: Axes | None = None) -> Axes:
    """Each pick's cycle as a stacked bar; split_s (picks, 8): seconds of what SPLIT names."""
    ax = axes_of(ax)
    numbers = np.arange(1, len(split_s) + 1)
    below = np.zeros(len(split_s))
    for k, (name, colour) in enumerate(zip(SPLIT, COLOURS, strict=True)):
        ax.bar(numbers, split_s[:, k], bottom=below, width=0.9, color=colour, label=name, hatch="//" if k > 3 else None,
               edgecolor="white", linewidth=0.3)
        below += split_s[:, k]
    ax.set(xlabel="pick", ylabel="cycle, s")
    ax.legend(frameon=False, loc="center left", bbox_to_anchor=(1.0, 0.5), reverse=True)
    return ax
