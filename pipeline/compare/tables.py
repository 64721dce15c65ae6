"""compare.csv: a row for every run."""

from collections.abc import Sequence
from pathlib import Path

from pipeline.compare.runs import Tried
from pipeline.tables import write_rows

COLUMNS = ("parts_seen", "picked", "picks_per_min", "duration_s", "waiting_s", "arm_busy", "joint_travel_deg",
           "joint_travel_deg_per_pick", "gap", "decisions_best")


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
