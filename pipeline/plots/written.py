"""All plots of a run as files."""

from collections import Counter
from pathlib import Path

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from cameras.written import written_whole
from pipeline.account.loads import loads_of
from pipeline.account.pace import pace_of
from pipeline.account.phases import split_of
from pipeline.plots.cycle_split import plot_cycle_split
from pipeline.plots.joint_loads import plot_joint_loads
from pipeline.plots.misses import plot_misses
from pipeline.plots.order import plot_order
from pipeline.plots.reach import plot_reach_picks
from pipeline.plots.throughput import plot_throughput
from pipeline.reach_picks import picks_on_reach
from pipeline.replay import Run, Setting

PLAIN = {"Software": None}  # no version in the files: the same run makes the same bytes


def write_plots(folder: Path, setting: Setting, run: Run) -> list[Path]:
    """Write throughput, order, reach, misses, cycle_split and joint_loads as PNG, those that have something to show."""
    drawn = {"throughput": plot_throughput(pace_of(run, setting)), "order": plot_order(run, setting),
             "reach": plot_reach_picks(picks_on_reach(setting, run), setting)}
    missed = Counter(fate.reason for fate in run.fates if fate)
    loads = loads_of(run)
    if missed:
        drawn["misses"] = plot_misses(missed)
    if run.picks:
        drawn["cycle_split"] = plot_cycle_split(split_of(run))
    if loads is not None:
        drawn["joint_loads"] = plot_joint_loads(loads)
    return [saved(ax, folder / f"{name}.png") for name, ax in sorted(drawn.items())]


def saved(ax: Axes, path: Path) -> Path:
    """Write the figure of these axes as PNG; its path."""
    with written_whole(path) as part:
        if isinstance(ax.figure, Figure):
            ax.figure.savefig(part, dpi=130, format="png", metadata=PLAIN)
    return path
