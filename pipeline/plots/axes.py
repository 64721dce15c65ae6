"""Axes to draw into, and the page's colours, which colour-blind readers can tell apart."""

from matplotlib.axes import Axes
from matplotlib.figure import Figure

BLUE, ORANGE, GREEN, RED, SKY, PINK, GREY = "#0162ba", "#c06a04", "#0b6547", "#882805", "#1c6c9f", "#993a6f", "#5a6a72"
COLOURS = (BLUE, ORANGE, GREEN, RED, SKY, PINK)
MARKS = ("o", "s", "^", "D", "v", "P")


def axes_of(ax: Axes | None, size: tuple[float, float] = (7.0, 4.0)) -> Axes:
    """The axes given, or those of a new figure (inches)."""
    ax = Figure(figsize=size, layout="constrained").subplots() if ax is None else ax
    ax.spines[["top", "right"]].set_visible(False)
    return ax
