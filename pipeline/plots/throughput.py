"""Picks and arrivals a minute over time."""

from matplotlib.axes import Axes

from pipeline.account.pace import Pace
from pipeline.plots.axes import BLUE, GREY, ORANGE, axes_of


def plot_throughput(pace: Pace, ax: Axes | None = None) -> Axes:
    """The pace of a run, and its mean."""
    ax = axes_of(ax)
    ax.plot(pace.times_s, pace.arrivals_per_min, color=ORANGE, linestyle="--", label="parts entering the window")
    ax.plot(pace.times_s, pace.picks_per_min, color=BLUE, label="picks")
    ax.axhline(pace.mean_per_min, color=GREY, linestyle=":", label=f"mean {pace.mean_per_min:.1f}")
    ax.set(xlabel="time, s", ylabel=f"a minute, over {pace.span_s:.0f} s", ylim=(0, None))
    ax.legend(frameon=False)
    return ax
