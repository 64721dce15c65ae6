"""A decision over the belt: the parts as they lie, and the order in which they are to be picked."""

from itertools import pairwise

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Circle, FancyArrowPatch, Polygon
from numpy.typing import NDArray

from pipeline.decision import Decision
from pipeline.plots.axes import BLUE, GREY, axes_of
from pipeline.plots.order import surroundings

FloatArray = NDArray[np.float64]
NUMBERED = 60  # parts that get their number in the order; more would hide one another


def plot_decision(decision: Decision, ax: Axes | None = None) -> Axes:
    """Outlines of the parts that could be chosen, numbered in the order chosen, arrows from each to the next."""
    ax = axes_of(ax, (8.0, 8.0))
    order = {decision.part_no(node): n for n, node in enumerate(decision.chosen.nodes, 1)}
    firsts = {one.part.number: k for k, one in enumerate(decision.scene.candidates)}
    node_of = {decision.part_no(node): node for node in range(len(decision.scene.choice.nodes))}
    for number, k in firsts.items():
        if number in node_of:
            one = decision.scene.candidates[k]
            _outline(ax, decision.setting.outlines.get(one.part.kind, 0.0), decision.at_mm(node_of[number]),
                     one.part.yaw_rad, number in order)  # fmt: skip
    ways = [decision.start_mm, *(decision.at_mm(node) for node in decision.chosen.nodes)]
    for n, (here, there) in enumerate(pairwise(ways), 1):
        ax.add_patch(FancyArrowPatch(tuple(here), tuple(there), arrowstyle="-|>", mutation_scale=11, color=BLUE,
                                     linewidth=1.0, alpha=0.7, shrinkA=0, shrinkB=5))
        if n <= NUMBERED:
            ax.annotate(str(n), tuple(there), xytext=(6, 6), textcoords="offset points", fontsize=9, weight="bold")
    ax.plot(*decision.start_mm, marker="o", color=BLUE, label="tool now")
    surroundings(ax, decision.setting)
    ax.set(xlabel="x, mm", ylabel="y, mm", aspect="equal")
    _fit(ax, decision)
    ax.legend(frameon=False)
    return ax


def _outline(ax: Axes, outline: FloatArray | float, at_mm: FloatArray, yaw: float, chosen: bool) -> None:
    edge, face = ("black", "0.88") if chosen else (GREY, "none")
    style = "-" if chosen else ":"
    if isinstance(outline, float | int):
        ax.add_patch(Circle((float(at_mm[0]), float(at_mm[1])), max(float(outline), 2.0), ec=edge, fc=face, ls=style))
        return
    c, s = np.cos(yaw), np.sin(yaw)
    ax.add_patch(Polygon(outline @ np.array([[c, s], [-s, c]]) + at_mm, closed=True, ec=edge, fc=face, ls=style))


def _fit(ax: Axes, decision: Decision) -> None:
    """Everything that matters in view."""
    slots = [place.slots_mm[:, :2] for place in decision.setting.grasping.places.values()]
    parts = [decision.at_mm(node)[None] for node in range(len(decision.scene.choice.nodes))]
    shown = np.concatenate([*slots, *parts, decision.start_mm[None], decision.setting.mover.arm.base_mm[None, :2]])
    low, high = shown.min(axis=0) - 50, shown.max(axis=0) + 50
    ax.set(xlim=(low[0], high[0]), ylim=(low[1], high[1]))
