"""Pictures of runs compared: throughput, misses by reason, how a cycle splits."""

from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from cameras.faults import printable
from cameras.written import written_whole
from pipeline.account.phases import SPLIT, split_of
from pipeline.compare.runs import Tried
from pipeline.compare.tables import reasons_of
from pipeline.plots.axes import COLOURS, axes_of
from pipeline.plots.cycle_split import COLOURS as STEP_COLOURS
from pipeline.plots.written import PLAIN

FloatArray = NDArray[np.float64]
HATCHES = ("", "//", "..", "xx", "\\\\", "++", "oo", "--", "**")
DASHES = ("-", "--", "-.", ":")


def draw_compare(folder: Path, tried: Sequence[Tried]) -> list[Path]:
    """Every picture, as PNG files; their paths."""
    return [_saved(folder / name, draw, tried) for name, draw in (("picks.png", _picks), ("missed.png", _missed),
                                                                  ("cycle.png", _cycle))]


def _picks(figure: Figure, tried: Sequence[Tried]) -> None:
    """Picks so far over time; the steeper, the better."""
    ax = axes_of(figure.subplots())
    for k, one in enumerate(tried):
        released = np.sort([pick.release_end_s for pick in one.run.picks]) - one.run.start_s
        times = np.concatenate([[0.0], released, [one.run.end_s - one.run.start_s]])
        counts = np.concatenate([[0], np.arange(1, len(released) + 1), [len(released)]])
        ax.step(times, counts, where="post", lw=1.5, ls=DASHES[k % 4], color=COLOURS[k % 6], label=_shown(one.label))
    ax.set(xlabel="time, s", ylabel="picks so far", ylim=(0, None), xlim=(0, None))
    ax.grid(alpha=0.25)
    ax.legend(frameon=False)


def _missed(figure: Figure, tried: Sequence[Tried]) -> None:
    rows = {reason: [one.figures["missed"].get(reason, 0) for one in tried] for reason in reasons_of(tried)}
    _bars(figure, tried, {reason.replace("_", " "): np.array(many, float) for reason, many in rows.items()},
          "parts missed", [(COLOURS[k % 6], HATCHES[k % 9]) for k in range(len(rows))])


def _cycle(figure: Figure, tried: Sequence[Tried]) -> None:
    split = [split_of(one.run) for one in tried]
    means = np.array([one.mean(axis=0) if len(one) else np.zeros(len(SPLIT)) for one in split])
    looks = [(colour, HATCHES[k > 3]) for k, colour in enumerate(STEP_COLOURS)]
    _bars(figure, tried, {name: means[:, k] for k, name in enumerate(SPLIT)}, "mean cycle, s", looks)


def _bars(figure: Figure, tried: Sequence[Tried], amounts: dict[str, FloatArray], label: str,
          looks: Sequence[tuple[str, str]]) -> None:
    """A stacked bar a run; looks: colour and hatch of each amount."""
    ax, at = axes_of(figure.subplots()), np.zeros(len(tried))
    for (name, many), (colour, hatch) in zip(amounts.items(), looks, strict=True):
        ax.barh(np.arange(len(tried)), many, left=at, label=name, color=colour, hatch=hatch, edgecolor="white", lw=0.5)
        at += many
    ax.set_yticks(np.arange(len(tried)), [_shown(one.label) for one in tried])
    ax.invert_yaxis()
    ax.set(xlabel=label)
    ax.xaxis.set_major_locator(MaxNLocator(6, integer=label == "parts missed"))
    ax.grid(axis="x", alpha=0.25)
    if amounts:
        figure.legend(loc="outside lower center", ncols=4, frameon=False, fontsize="small")


def _saved(path: Path, draw: Callable[[Figure, Sequence[Tried]], None], tried: Sequence[Tried]) -> Path:
    figure = Figure(figsize=(8, 4.2), layout="constrained")
    draw(figure, tried)
    with written_whole(path) as part:
        figure.savefig(part, dpi=120, format="png", metadata=PLAIN)
    return path


def _shown(label: str) -> str:
    """A label; matplotlib would read dollar signs as formulas."""
    return printable(label, 60).replace("$", r"\$")
