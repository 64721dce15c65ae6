"""Missed parts by reason."""

from collections.abc import Mapping

from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from pipeline.plots.axes import ORANGE, axes_of


def plot_misses(missed: Mapping[str, int], ax: Axes | None = None) -> Axes:
    """Counts by reason, as in summary.json; the most frequent on top."""
    ax = axes_of(ax, (7.0, 0.8 + 0.45 * max(len(missed), 2)))
    reasons = sorted(missed, key=lambda reason: (missed[reason], reason))
    names = [reason.replace("_", " ") for reason in reasons]
    bars = ax.barh(names, [missed[reason] for reason in reasons], color=ORANGE)
    ax.bar_label(bars, padding=3)
    ax.xaxis.set_major_locator(MaxNLocator(integer=True))
    ax.set(xlabel="parts missed", xlim=(0, 1.1 * max(missed.values(), default=1)))
    return ax
