"""The picture of what an arm can grip: at which part angles, with which elbow, how fast a belt it can follow."""

from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colorbar import Colorbar
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Circle, Polygon
from numpy.typing import NDArray

from pipeline.reach import Floats, Reacher, Spots

ELBOWS = ("left", "right", "either")
ELBOW_COLOURS = ListedColormap(["#4477aa", "#ddaa33", "#66aa77"])


def plot_reach(reacher: Reacher, window: Spots, slots: list[Spots], path: Path) -> None:
    """Draw maps of the share of part angles, of the elbows and, with a belt, of the speed, to a PNG file."""
    panels = 3 if reacher.cell.belt else 2
    figure = Figure(figsize=(6.5 * panels, 6), layout="constrained")
    axes = figure.subplots(1, panels)
    right, left, either = (window.share[:, k] > 0 for k in range(3))
    for ax in axes:
        ax.scatter(window.tip_mm[~either, 0], window.tip_mm[~either, 1], c="0.85", s=5, marker="s", linewidths=0)
    _dots(axes[0], window, 100 * window.share[:, 2], either, "part angles that can be gripped, %", "viridis", (0, 100))
    elbow = np.where(right & left, 2.0, np.where(right, 1.0, 0.0))
    bar = _dots(axes[1], window, elbow, either, "elbow", ELBOW_COLOURS, (-0.5, 2.5))
    bar.set_ticks([0, 1, 2], labels=ELBOWS)
    if panels == 3:
        top = float(np.nanmax(window.follow_mm_s[either], initial=1.0))
        _dots(axes[2], window, window.follow_mm_s, either, "belt that can be followed, mm/s", "viridis", (0, top))
    for ax in axes:
        _places(ax, slots)
        _surroundings(ax, reacher)
        ax.set(xlabel="x, mm", ylabel="y, mm", aspect="equal")
        ax.grid(alpha=0.2)
    figure.legend(*axes[0].get_legend_handles_labels(), loc="outside lower center", ncols=3, frameon=False)
    figure.savefig(path, dpi=100, format="png")


def _dots(
    ax: Axes, spots: Spots, values: Floats, shown: NDArray[np.bool_], label: str, colours: str | ListedColormap,
    span: tuple[float, float],
) -> Colorbar:  # fmt: skip
    """A coloured square a point; answers its colour bar."""
    dots = ax.scatter(spots.tip_mm[shown, 0], spots.tip_mm[shown, 1], c=values[shown], s=30, marker="s", cmap=colours,
                      vmin=span[0], vmax=span[1], linewidths=0)
    return ax.figure.colorbar(dots, ax=ax, label=label, shrink=0.8)


def _places(ax: Axes, slots: list[Spots]) -> None:
    """Each slot, marked where it can't be served."""
    for place in slots:
        x, y = place.tip_mm[:, 0], place.tip_mm[:, 1]
        served = place.share[:, 2] > 0
        ax.scatter(x[served], y[served], facecolors="white", edgecolors="black", s=30)
        ax.scatter(x[~served], y[~served], c="crimson", marker="x", s=30)
        ax.annotate(place.where[0], (float(x.mean()), float(y.max())), xytext=(0, 8), textcoords="offset points",
                    ha="center", parse_math=False)


def _surroundings(ax: Axes, reacher: Reacher) -> None:
    """The arm in its home posture, its keep-outs, and the way the belt runs."""
    shoulder, elbow, quill = reacher.arm.pivots(reacher.arm.home)
    x, y = np.stack([shoulder, elbow, quill]).T
    ax.plot(x, y, "o-", color="0.25", lw=2.5, ms=6, label="arm at home")
    for keepout in reacher.cell.keepouts:
        ax.add_patch(Polygon(np.array(keepout.polygon_mm), closed=True, hatch="///", fill=False, ec="crimson"))
    along, across, reach = reacher.span_mm()
    ax.add_patch(Circle((float(shoulder[0]), float(shoulder[1])), reach, fill=False, ec="0.6", ls=":"))
    if reacher.cell.belt is not None:
        start, end = (reacher.along * (along + share * reach) + reacher.across * (across + 1.15 * reach)
                      for share in (-0.25, 0.25))
        ax.plot([start[0], end[0]], [start[1], end[1]], alpha=0)  # so that the arrow lies within the axes
        ax.annotate("belt", (float(end[0]), float(end[1])), (float(start[0]), float(start[1])), ha="center",
                    va="center", arrowprops={"arrowstyle": "->", "lw": 1.5})
    ax.plot([], [], "o", mfc="white", mec="black", label="slot")
    ax.plot([], [], "x", color="crimson", label="slot out of reach")
