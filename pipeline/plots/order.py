"""The order of the picks, drawn over the belt: where each part was gripped, joined one to the next."""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Polygon

from pipeline.plots.axes import COLOURS, GREY, MARKS, RED, axes_of
from pipeline.replay import Run, Setting

NUMBERED = 150  # picks that get their number; more would hide one another
BESIDE_MM = 40.0  # of the window's edges drawn beside the outermost parts


def plot_order(run: Run, setting: Setting, ax: Axes | None = None) -> Axes:
    """Grips by kind in the cell frame, numbered in their order; base, places, keep-outs and window beside them."""
    ax = axes_of(ax, (8.0, 8.0))
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
    for text in ax.figure.legend(loc="outside lower center", ncols=4, frameon=False).get_texts():
        text.set_parse_math(False)
    return ax


def surroundings(ax: Axes, setting: Setting) -> None:
    """Base, places, keep-outs and window of a cell."""
    base = setting.mover.arm.base_mm
    ax.plot(base[0], base[1], marker="+", markersize=14, color="black", linestyle="none", label="base of the arm")
    for place in setting.grasping.places.values():
        x, y = place.slots_mm[:, 0], place.slots_mm[:, 1]
        ax.scatter(x, y, marker="s", facecolors="none", edgecolors=GREY, s=30)
        ax.annotate(place.name, (float(x.mean()), float(y.max())), xytext=(0, 9), textcoords="offset points",
                    ha="center", parse_math=False)
    for keepout in setting.cell.keepouts:
        ax.add_patch(Polygon(np.array(keepout.polygon_mm), fill=False, hatch="///", edgecolor=RED))
    belt = setting.cell.belt
    if belt is not None and belt.window_mm is not None:
        heading = setting.belt.heading
        left = np.array([-heading[1], heading[0]])
        lanes = [float(part.xy_mm @ left) for part in setting.parts] or [0.0]
        for along in belt.window_mm:
            ends = np.array([along * heading + across * left
                             for across in (min(lanes) - BESIDE_MM, max(lanes) + BESIDE_MM)])
            ax.plot(*ends.T, color=GREY, linestyle="--", linewidth=0.8)
