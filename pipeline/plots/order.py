"""The order of the picks, drawn over the belt: where each part was gripped, joined one to the next."""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Polygon

from pipeline.plots.axes import COLOURS, GREY, MARKS, RED, axes_of
from pipeline.replay import Run, Setting

NUMBERED = 150  # picks that get their number; more would hide one another


def plot_order(run: Run, setting: Setting, ax: Axes | None = None) -> Axes:
    """Grips by kind in the cell frame, numbered in their order; base, places, keep-outs and window beside them."""
    ax = axes_of(ax, (7.0, 7.0))
    cycles = [pick.cycle for pick in run.picks]
    at = np.array([c.hold.at_mm + setting.belt.shift_mm(c.grasp_start_s) for c in cycles]).reshape(-1, 2)
    ax.plot(at[:, 0], at[:, 1], color=GREY, linewidth=0.6, alpha=0.6)
    for k, kind in enumerate(setting.cell.parts):
        own = np.array([pick.part.kind == kind for pick in run.picks], bool)
        ax.scatter(at[own, 0], at[own, 1], color=COLOURS[k % len(COLOURS)], marker=MARKS[k % len(MARKS)], label=kind)
    for n, (x, y) in enumerate(at[:NUMBERED].tolist(), 1):
        ax.annotate(str(n), (x, y), xytext=(4, 4), textcoords="offset points", fontsize=7)
    surroundings(ax, setting)
    ax.set(xlabel="x, mm", ylabel="y, mm", aspect="equal")
    for text in ax.legend(frameon=False).get_texts():
        text.set_parse_math(False)
    return ax


def surroundings(ax: Axes, setting: Setting) -> None:
    """Base, places, keep-outs and window of a cell."""
    base = setting.mover.arm.base_mm
    ax.plot(base[0], base[1], marker="+", markersize=14, color="black")
    for place in setting.grasping.places.values():
        ax.scatter(place.slots_mm[:, 0], place.slots_mm[:, 1], marker="s", facecolors="none", edgecolors=GREY, s=30)
        middle = place.slots_mm[:, :2].mean(axis=0)
        ax.annotate(place.name, middle.tolist(), xytext=(0, 12), textcoords="offset points", ha="center",
                    parse_math=False)
    for keepout in setting.cell.keepouts:
        ax.add_patch(Polygon(np.array(keepout.polygon_mm), fill=False, hatch="///", edgecolor=RED))
    belt = setting.cell.belt
    if belt is not None and belt.window_mm is not None:
        heading = setting.belt.heading
        across = np.array([-heading[1], heading[0]]) * 1000
        for along in belt.window_mm:
            ends = np.array([along * heading - across, along * heading + across])
            ax.axline(ends[0].tolist(), ends[1].tolist(), color=GREY, linestyle="--", linewidth=0.8)
