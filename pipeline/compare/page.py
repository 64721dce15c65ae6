"""compare.html: the runs side by side in one self-contained file that needs no network and no script."""

import base64
import hashlib
from collections.abc import Callable, Iterable, Sequence
from importlib.resources import files
from pathlib import Path

import numpy as np

from pipeline.account.phases import SPLIT, split_of
from pipeline.account.windows import windows_of
from pipeline.compare.runs import Tried
from pipeline.compare.tables import figure_rows
from pipeline.page.charts import Frame, chart, key, stacked
from pipeline.page.head import words
from pipeline.page.listings import plain_table
from pipeline.page.markup import Markup, joined, tag
from pipeline.page.measures import STYLE

MOST_PARTS = 300
Best = Callable[[Iterable[float]], float]
BEST: dict[str, Best] = {"picks a minute": max, "picked": max, "joint travel a pick, °": min}
STYLES = (("pipeline.page", "page.css"), ("pipeline.page", "desk.css"), ("pipeline.compare", "compare.css"))


def write_compare_page(path: Path, tried: Sequence[Tried]) -> None:
    """Write the page of at least one run."""
    path.write_text(compare_page(tried), encoding="utf-8")


def compare_page(tried: Sequence[Tried]) -> str:
    """The page as HTML: a table of all runs, the runs side by side, and the parts they do not agree on."""
    style = Markup("\n".join(files(package).joinpath(name).read_text("utf-8") for package, name in STYLES))
    allowed = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()
    policy = f"default-src 'none'; img-src data:; style-src 'sha256-{allowed}'; base-uri 'none'; form-action 'none'"
    name = tried[0].seen.recording.folder.resolve().name or "recording"
    head = tag("head", tag("meta", charset="utf-8"), tag("meta", http_equiv="Content-Security-Policy", content=policy),
               tag("meta", name="viewport", content="width=device-width, initial-scale=1"),
               tag("meta", name="color-scheme", content="light dark"), tag("title", f"{name}: runs compared"),
               tag("link", rel="icon", href="data:,"), tag("style", style))  # fmt: skip
    sections = (("Figures", _figures(tried)), ("Side by side", _side_by_side(tried)),
                ("Parts on which the runs differ", _differing(tried)))
    body = tag("body", tag("header", tag("h1", f"{name}: runs compared"), tag("p", _sentence(tried), class_="lead")),
               tag("main", *(tag("section", tag("h2", title), content) for title, content in sections)))  # fmt: skip
    return joined(Markup("<!doctype html>\n"), tag("html", head, "\n", body, lang="en"), "\n")


def _sentence(tried: Sequence[Tried]) -> str:
    best, least = (one(tried, key=lambda run: float(run.figures["picks_per_min"])) for one in (max, min))
    told = f"{len(tried)} run{'s' * (len(tried) > 1)} of {len(best.seen.recording)} frames. "
    if best.figures["picks_per_min"] == least.figures["picks_per_min"]:
        return told + f"{best.figures['picks_per_min']:.1f} picks a minute in every one."
    return told + (f"Most picks: {best.label}, {best.figures['picks_per_min']:.1f} a minute; least: {least.label}, "
                   f"{least.figures['picks_per_min']:.1f}.")


def _figures(tried: Sequence[Tried]) -> Markup:
    """A row a figure, a column a run; the best of some rows is marked where runs differ."""
    rows: list[list[str]] = [_marked(row, BEST[row[0]]) if row[0] in BEST else row for row in figure_rows(tried)]
    return plain_table("All runs", [("figure", False), *((one.label, True) for one in tried)], rows)


def _marked(row: list[str], best: Best) -> list[str]:
    if len(set(row[1:])) < 2:
        return row
    top = best(float(text) for text in row[1:])
    return [row[0], *(tag("span", text, class_="best") if float(text) == top else text for text in row[1:])]


def _side_by_side(tried: Sequence[Tried]) -> Markup:
    lasts = max(one.run.end_s - one.run.start_s for one in tried)
    most = max(max(len(one.run.picks), len(one.run.parts)) for one in tried)
    cycle = max((float(np.sum(split_of(one.run).mean(axis=0))) for one in tried if one.run.picks), default=1.0)
    return tag("div", *(_card(one, lasts, max(most, 1), cycle) for one in tried), class_="runs")


def _card(one: Tried, lasts_s: float, most: int, cycle_s: float) -> Markup:
    """One run; all cards have the same scales."""
    figures = one.figures
    tiles = [("picks a minute", f"{figures['picks_per_min']:.1f}"), ("picked", f"{figures['picked']}"),
             ("missed", f"{sum(figures['missed'].values())}"), ("waiting", f"{figures['waiting_s']:.0f} s")]
    reasons = sorted(figures["missed"].items(), key=lambda item: -item[1])
    missed = ", ".join(f"{many} {words(reason)}" for reason, many in reasons) or "none"
    return tag("article", tag("h3", one.label),
               tag("p", f"{one.cell.name or one.cell.file.name}, by {figures['order']}, horizon {figures['horizon']}",
                   class_="note"),
               tag("dl", *(tag("div", tag("dt", name), tag("dd", tag("b", value))) for name, value in tiles),
                   class_="tiles"),
               _so_far(one, lasts_s, most), key(["picked so far", "in the window and known by then"]),
               _cycle(one, cycle_s), tag("p", f"Missed: {missed}.", class_="note"),
               *(tag("p", note, class_="note") for note in figures["notes"]))  # fmt: skip


def _so_far(one: Tried, lasts_s: float, most: int) -> Markup:
    """Picks over time, and parts that had entered the window by then."""
    entered = np.array([max(window.enters_s, window.known_s) for window in windows_of(one.setting)])
    released = np.array([pick.release_end_s for pick in one.run.picks])
    frame = Frame((0.0, lasts_s), (0.0, float(most)))
    lines = []
    for k, events in enumerate((released, entered)):
        at = np.clip(np.sort(events[np.isfinite(events)]) - one.run.start_s, 0.0, lasts_s)
        times = np.repeat(np.concatenate([[0.0], at]), 2)[1:]
        counts = np.repeat(np.arange(len(at) + 1.0), 2)[:-1]
        lines.append(frame.line(np.append(times, lasts_s), np.append(counts, float(len(at))), k))
    return tag("div", chart(f"{len(released)} picks over {lasts_s:.0f} s", frame.axes("s", "parts"), *reversed(lines)),
               class_="figure")


def _cycle(one: Tried, longest_s: float) -> Markup:
    """How the mean cycle splits, as long as it lasts beside the longest."""
    split = split_of(one.run)
    if not len(split):
        return tag("p", "Nothing was picked.", class_="note")
    mean = split.mean(axis=0)
    parts = [(name, float(amount), STYLE[name]) for name, amount in zip(SPLIT, mean, strict=True)]
    rest = ("", max(longest_s - float(mean.sum()), 0.0), "none")
    told = f"Mean cycle {mean.sum():.2f} s: " + ", ".join(f"{name} {amount:.2f}" for name, amount, _ in parts) + "."
    return joined(tag("div", stacked([*parts, rest], told), class_="figure wide"), tag("p", told, class_="note"))


def _differing(tried: Sequence[Tried]) -> Markup:
    """Parts that some runs picked and others did not, where all runs saw the same parts."""
    if len({len(one.run.parts) for one in tried}) > 1:
        return tag("p", "The cells do not see the same parts: part by part they can't be compared.")
    rows: list[list[str]] = []
    for k, part in enumerate(tried[0].run.parts):
        fates = [one.run.fates[k] for one in tried]
        if len({fate is None for fate in fates}) > 1:
            rows.append([f"{part.number}", part.kind or "not recognised",
                         *("picked" if fate is None else f"{words(fate.reason)}: {fate.detail}" for fate in fates)])
    if not rows:
        return tag("p", "None: every part was picked in all runs, or in none.")
    note = f"The first {MOST_PARTS} of {len(rows)}." if len(rows) > MOST_PARTS else f"{len(rows)} parts."
    table = plain_table("Picked in some runs, missed in others",
                        [("part", False), ("kind", False), *((one.label, False) for one in tried)], rows[:MOST_PARTS])
    return joined(tag("p", note, class_="note"), table)
