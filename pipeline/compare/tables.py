"""Figures of runs compared: compare.csv, a row for every run; and as text, a column for every run."""

from collections.abc import Sequence
from pathlib import Path

from pipeline.compare.runs import Tried
from pipeline.page.head import words
from pipeline.tables import write_rows

COLUMNS = ("parts_seen", "picked", "picks_per_min", "duration_s", "waiting_s", "arm_busy", "joint_travel_deg",
           "joint_travel_deg_per_pick", "gap", "decisions_best")
SHOWN = (("picks_per_min", "picks a minute", ".1f"), ("picked", "picked", "d"), ("parts_seen", "parts seen", "d"),
         ("joint_travel_deg_per_pick", "joint travel a pick, °", ".0f"), ("waiting_s", "waiting, s", ".1f"),
         ("arm_busy", "arm busy, of the time", ".0%"), ("gap", "decisions short of their bound by, mean", ".2%"),
         ("decisions_best", "decisions at their bound", ".0%"))  # fmt: skip


def reasons_of(tried: Sequence[Tried]) -> list[str]:
    """Every reason a part was missed for in any run."""
    return sorted({reason for one in tried for reason in one.figures["missed"]})


def write_compare(path: Path, tried: Sequence[Tried]) -> None:
    """The table: what was tried, figures, misses by reason, decision times in ms."""
    reasons = reasons_of(tried)
    header = ["run", "cell", "order", "horizon", *COLUMNS, *(f"missed_{reason}" for reason in reasons),
              "decide_ms_median", "decide_ms_max"]
    rows = []
    for one in tried:
        figures, decide = one.figures, one.figures["decide_ms"]
        values = ("" if figures[name] is None else figures[name] for name in COLUMNS)
        rows.append([one.label, str(one.cell.file), figures["order"], figures["horizon"], *values,
                     *(figures["missed"].get(reason, 0) for reason in reasons), decide["median"], decide["max"]])
    write_rows(path, ",".join(header), rows)


def figure_rows(tried: Sequence[Tried]) -> list[list[str]]:
    """A row a figure, a column a run, as text: name, then values; \"-\" where a run has none."""
    reasons = [[f"missed: {words(reason)}", *(f"{one.figures['missed'].get(reason, 0)}" for one in tried)]
               for reason in reasons_of(tried)]  # fmt: skip
    decide = [["to decide, median and most, ms",
               *("{median:.1f}, {max:.1f}".format(**one.figures["decide_ms"]) for one in tried)]]  # fmt: skip
    told = [[name, *(_shown(one.figures[key], form) for one in tried)] for key, name, form in SHOWN]
    return [*told[:3], *reasons, *told[3:], *decide]


def _shown(figure: float | None, form: str) -> str:
    return "-" if figure is None else format(figure, form).replace("%", " %")
