"""Joint speeds over time as shares of their limits."""

from matplotlib.axes import Axes

from pipeline.account.loads import JOINTS, Loads
from pipeline.plots.axes import COLOURS, RED, axes_of

LANE = 125.0  # % from one joint's zero to the next one's


def plot_joint_loads(loads: Loads, ax: Axes | None = None) -> Axes:
    """The greatest share of the speed limit in each stretch of the run: a lane a joint, its limit the line on top."""
    ax = axes_of(ax, (9.0, 6.0))
    zeros = [LANE * (len(JOINTS) - 1 - j) for j in range(len(JOINTS))]
    for j, zero in enumerate(zeros):
        speed = 100 * loads.speed[:, j]
        ax.fill_between(loads.times_s, zero, zero + speed, color=COLOURS[j], linewidth=0, alpha=0.25)
        ax.plot(loads.times_s, zero + speed, color=COLOURS[j], linewidth=0.8)
        ax.axhline(zero + 100, color=RED, linewidth=0.8)
    ax.set_yticks([zero + share for zero in zeros for share in (0, 50, 100)], ["0", "50", "100"] * len(zeros))
    for j, zero in enumerate(zeros):
        ax.annotate(f"{JOINTS[j]}\nat most\n{100 * loads.peak_speed[j]:.0f} %", (1.01, zero + 50), va="center",
                    xycoords=("axes fraction", "data"))
    ax.set(xlabel="time, s", ylabel="speed, % of limit", ylim=(0, LANE * len(JOINTS)))
    ax.margins(x=0)
    return ax
