"""Joint speeds over time as shares of their limits."""

from matplotlib.axes import Axes

from pipeline.account.loads import JOINTS, Loads
from pipeline.plots.axes import COLOURS, RED, axes_of


def plot_joint_loads(loads: Loads, ax: Axes | None = None) -> Axes:
    """The greatest share of the speed limit in each stretch of the run, joint by joint."""
    ax = axes_of(ax)
    for j, name in enumerate(JOINTS):
        ax.plot(loads.times_s, 100 * loads.speed[:, j], color=COLOURS[j], linewidth=0.9,
                label=f"{name}, at most {100 * loads.peak_speed[j]:.0f} %")
    ax.axhline(100, color=RED, linewidth=1)
    ax.set(xlabel="time, s", ylabel="speed, % of limit", ylim=(0, 110))
    ax.legend(frameon=False, ncols=2)
    return ax
