"""Pictures of a sweep: a curve for one setting, a heat map for two, misses by reason."""

from collections.abc import Callable, Iterator, Sequence
from functools import partial
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from cameras.faults import printable
from cameras.written import written_whole
from pipeline.plots.axes import COLOURS, MARKS, axes_of
from pipeline.plots.written import PLAIN
from pipeline.sweep.find import Answer
from pipeline.sweep.kept import Outcome
from pipeline.sweep.points import Row
from pipeline.sweep.settings import Value, with_unit
from pipeline.sweep.tables import setting_names

PANELS = (("picks_per_min", "picks a minute"), ("lost_share", "lost, % of those that can be had"))
MOST_LINES = 6


def draw_sweep(folder: Path, outcomes: Sequence[Outcome]) -> list[Path]:
    """Every picture the points allow, as PNG files; their paths. Means over recordings and seeds."""
    done = [outcome for outcome in outcomes if not outcome.failed]
    swept = [name for name in setting_names(done) if len(_values(done, name)) > 1]
    drawn = []
    for name in swept:
        others = [other for other in swept if other != name]
        if all(isinstance(value, (int, float)) for value in _values(done, name)):
            by = next((other for other in others if len(_values(done, other)) <= MOST_LINES), None)
            drawn.append(_saved(folder / f"curve_{_file(name)}.png", (11, 4.2),
                                partial(_curves, done=done, name=name, by=by)))
            drawn.append(_saved(folder / f"missed_{_file(name)}.png", (7, 4.2),
                                partial(_misses, done=done, name=name)))
    if len(swept) >= 2:
        across, up = sorted(swept, key=lambda name: isinstance(_values(done, name)[0], str))[:2]  # numbers before words
        drawn.append(_saved(folder / "heat.png", (11, 4.6), partial(_heat, done=done, across=across, up=up)))
    return drawn


def draw_answers(path: Path, answers: Sequence[tuple[Row, Answer]]) -> None:
    """Every point that was run for the answers, and the answers with their intervals, as a PNG file."""
    _saved(path, (8, 4.4), partial(_answers, answers=answers))


def _answers(figure: Figure, answers: Sequence[tuple[Row, Answer]]) -> None:
    ax, setting = axes_of(figure.subplots()), answers[0][1].setting
    figure_name, label = PANELS[0] if setting == "horizon" else PANELS[1]
    for k, (row, answer) in enumerate(answers):
        at = [float(dict(outcome.point.settings)[setting]) for outcome in answer.outcomes]
        name = ", ".join(f"{name} {value}" for name, value in row)
        found = [_figure_of(outcome, figure_name) for outcome in answer.outcomes]
        colour = COLOURS[k % 6]
        ax.scatter(at, found, s=18, marker=MARKS[k % 6], color=colour, label=_shown(name or "one replay"), alpha=0.8)
        if not answer.why:
            ax.axvline(answer.value, color=colour, lw=1.5)
            if np.isfinite([answer.low, answer.high]).all():
                ax.axvspan(answer.low, answer.high, color=colour, alpha=0.15, lw=0)
    ax.set(xlabel=with_unit(setting), ylabel=label, ylim=(0, None))
    ax.grid(alpha=0.25)
    ax.legend(frameon=False, fontsize="small", title="lines: answers, bands: 95 % intervals", title_fontsize="small")


def _values(outcomes: Sequence[Outcome], name: str) -> list[Value]:
    """The values a setting takes, numbers rising, then words."""
    found = {dict(outcome.point.settings)[name] for outcome in outcomes if name in dict(outcome.point.settings)}
    numbers = sorted(value for value in found if not isinstance(value, str))
    return [*numbers, *sorted(value for value in found if isinstance(value, str))]


def _figure_of(outcome: Outcome, figure: str) -> float:
    return float(outcome.figures[figure]) * (100 if figure == "lost_share" else 1)


def _spread(outcomes: Sequence[Outcome], figure: str) -> tuple[float, float, float]:
    """Mean, least and greatest of a figure; NaN where there is none."""
    found = [_figure_of(outcome, figure) for outcome in outcomes] or [np.nan]
    return float(np.mean(found)), min(found), max(found)


def _where(outcomes: Sequence[Outcome], name: str, value: Value) -> list[Outcome]:
    return [outcome for outcome in outcomes if dict(outcome.point.settings).get(name) == value]


def _curves(figure: Figure, done: Sequence[Outcome], name: str, by: str | None) -> None:
    """A figure against a setting, a line for each value of another; the band spans seeds, recordings and the rest."""
    for ax, (key, label) in zip(figure.subplots(1, 2), PANELS, strict=True):
        for k, (word, line) in enumerate(_lines(done, by)):
            values = [value for value in _values(done, name) if _where(line, name, value)]
            if not values:  # a list of points need not have every setting with every other
                continue
            mean, least, most = np.array([_spread(_where(line, name, value), key) for value in values]).T
            ax.plot(values, mean, marker=MARKS[k % 6], color=COLOURS[k % 6], ms=4, lw=1.5, label=word)
            ax.fill_between(values, least, most, color=COLOURS[k % 6], alpha=0.15, lw=0)
        ax.set(xlabel=_shown(with_unit(name)), ylabel=label)
        ax.set_ylim(bottom=0)
        ax.grid(alpha=0.25)
    if by:
        ax.legend(title=_shown(by), frameon=False, fontsize="small")


def _lines(done: Sequence[Outcome], by: str | None) -> Iterator[tuple[str, list[Outcome]]]:
    if by is None:
        yield "", list(done)
    else:
        yield from ((_shown(value), _where(done, by, value)) for value in _values(done, by))


def _misses(figure: Figure, done: Sequence[Outcome], name: str) -> None:
    """Misses by reason, stacked, in % of the parts seen."""
    ax, values = axes_of(figure.subplots()), _values(done, name)
    reasons = sorted({reason for outcome in done for reason in outcome.figures["missed"]})
    bottom = np.zeros(len(values))
    hatches = ("", "//", "..", "xx", "\\\\", "++", "oo", "--", "**")
    for k, reason in enumerate(reasons):
        share = np.array([_share(_where(done, name, value), reason) for value in values])
        ax.bar(np.arange(len(values)), share, bottom=bottom, label=reason.replace("_", " "), color=COLOURS[k % 6],
               hatch=hatches[k % 9], edgecolor="white", linewidth=0.5)
        bottom += share
    ax.set_xticks(np.arange(len(values)), [_shown(value) for value in values], rotation=45 if len(values) > 8 else 0)
    ax.set(xlabel=_shown(with_unit(name)), ylabel="missed, % of the parts seen")
    ax.grid(axis="y", alpha=0.25)
    if reasons:
        figure.legend(loc="outside lower center", ncols=4, frameon=False, fontsize="small")


def _share(outcomes: Sequence[Outcome], reason: str) -> float:
    seen = sum(outcome.figures["parts_seen"] for outcome in outcomes)
    missed = sum(int(outcome.figures["missed"].get(reason, 0)) for outcome in outcomes)
    return 100.0 * missed / max(int(seen), 1)


def _heat(figure: Figure, done: Sequence[Outcome], across: str, up: str) -> None:
    """Both figures over two settings, each field with its value."""
    columns, rows = _values(done, across), _values(done, up)
    for ax, (key, label) in zip(figure.subplots(1, 2), PANELS, strict=True):
        table = np.array([[_spread(_where(_where(done, across, column), up, row), key)[0] for column in columns]
                          for row in rows])
        image = ax.imshow(table, origin="lower", aspect="auto", cmap="cividis")
        figure.colorbar(image, ax=ax, label=label)
        turned = 45 if len(columns) > 8 else 0
        ax.set_xticks(range(len(columns)), [_shown(column) for column in columns], rotation=turned)
        ax.set_yticks(range(len(rows)), [_shown(row) for row in rows])
        ax.set(xlabel=_shown(with_unit(across)), ylabel=_shown(with_unit(up)))
        if table.size <= 150:
            middle = (np.nanmin(table) + np.nanmax(table)) / 2
            for (i, j), value in np.ndenumerate(table):
                ax.text(j, i, f"{value:.1f}", ha="center", va="center", fontsize=8,
                        color="white" if value < middle else "black")


def _saved(path: Path, size: tuple[float, float], draw: Callable[[Figure], None]) -> Path:
    figure = Figure(figsize=size, layout="constrained")
    draw(figure)
    with written_whole(path) as part:
        figure.savefig(part, dpi=120, format="png", metadata=PLAIN)
    return path


def _shown(value: object) -> str:
    """A name or value as a label; matplotlib would read dollar signs as formulas."""
    return printable(f"{value:g}" if isinstance(value, float) else value, 40).replace("$", r"\$")


def _file(name: str) -> str:
    return "".join(c if c.isalnum() or c in "-_" else "_" for c in name)
