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
JOINED = 60  # parts that get arrows from one to the next; of more each gets its number alone, on a shade that fades


def plot_decision(decision: Decision, ax: Axes | None = None) -> Axes:
    """Outlines of the parts that could be chosen, numbered in the order chosen, arrows from each to the next; of many
    parts without arrows, the first shaded most."""
    ax = axes_of(ax, (8.0, 8.0))
    many = len(decision.chosen.nodes) > JOINED
    order = {decision.part_no(node): n for n, node in enumerate(decision.chosen.nodes, 1)}
    firsts = {one.part.number: k for k, one in enumerate(decision.scene.candidates)}
    node_of = {decision.part_no(node): node for node in range(len(decision.scene.choice.nodes))}
    for number, k in firsts.items():
        if number in node_of:
            one = decision.scene.candidates[k]
            _outline(ax, decision.setting.outlines.get(one.part.kind, 0.0), decision.at_mm(node_of[number]),
                     one.part.yaw_rad, _face(order.get(number), len(order) if many else 0))  # fmt: skip
    ways = [decision.start_mm, *(decision.at_mm(node) for node in decision.chosen.nodes)]
    for n, (here, there) in enumerate(pairwise(ways), 1):
        if many:
            ax.text(float(there[0]), float(there[1]), str(n), fontsize=6, ha="center", va="center")
            continue
        ax.add_patch(FancyArrowPatch(tuple(here), tuple(there), arrowstyle="-|>", mutation_scale=11, color=BLUE,
                                     linewidth=1.0, alpha=0.7, shrinkA=0, shrinkB=5))
        ax.annotate(str(n), tuple(there), xytext=(6, 6), textcoords="offset points", fontsize=9, weight="bold")
    ax.plot(*decision.start_mm, marker="o", color=BLUE, label="tool now")
    surroundings(ax, decision.setting)
    ax.set(xlabel="x, mm", ylabel="y, mm", aspect="equal")
    _fit(ax, decision)
    ax.legend(frameon=False)
    return ax


def _face(turn: int | None, shaded: int) -> str:
    """Shade of a part by its turn in the order; "none" for one that is not in it."""
    if turn is None:
        return "none"
    return f"{0.6 + 0.4 * (turn - 1) / shaded:.3f}" if shaded else "0.88"


def _outline(ax: Axes, outline: FloatArray | float, at_mm: FloatArray, yaw: float, face: str) -> None:
    edge, style = (GREY, ":") if face == "none" else ("black", "-")
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
