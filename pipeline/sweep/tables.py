"""sweep.csv: a row for every point. find.json: answers to a question."""

import json
import math
from collections.abc import Sequence
from pathlib import Path

from pipeline.sweep.find import Answer
from pipeline.sweep.kept import Outcome
from pipeline.sweep.points import Row
from pipeline.tables import write_rows

FIGURES = ("parts_seen", "had", "picked", "lost", "lost_share", "picks_per_min", "duration_s", "arm_busy", "waiting",
           "joint_travel_deg_per_pick")


def setting_names(outcomes: Sequence[Outcome]) -> list[str]:
    """Every setting that any point has, in the order they first come."""
    return list(dict.fromkeys(name for outcome in outcomes for name, _ in outcome.point.settings))


def write_sweep(path: Path, outcomes: Sequence[Outcome], recordings: Sequence[str]) -> None:
    """The table: recording, settings, seed, figures, misses by reason, and what failed."""
    names = setting_names(outcomes)
    reasons = sorted({reason for outcome in outcomes for reason in outcome.figures.get("missed", {})})
    header = ["recording", *names, "seed", *FIGURES, *(f"missed_{reason}" for reason in reasons), "decide_ms_median",
              "decide_ms_max", "failed"]

    def row(outcome: Outcome) -> list[object]:
        figures, settings = outcome.figures, dict(outcome.point.settings)
        missed = [figures["missed"].get(reason, 0) for reason in reasons] if figures else [""] * len(reasons)
        decide = figures.get("decide_ms", {"median": "", "max": ""})
        return [recordings[outcome.point.recording], *(settings.get(name, "") for name in names),
                "" if outcome.point.seed is None else outcome.point.seed, *(figures.get(name, "") for name in FIGURES),
                *missed, decide["median"], decide["max"], outcome.failed]

    write_rows(path, ",".join(header), map(row, outcomes))


def write_answers(path: Path, answers: Sequence[tuple[Row, Answer]]) -> None:
    """An object for each of the settings the question was asked with; null where there is no answer or no end."""
    told = [{"with": dict(row), "setting": answer.setting, "value": _finite(answer.value), "low": _finite(answer.low),
             "high": _finite(answer.high), "each": [_finite(value) for value in answer.each],
             "share": _finite(answer.share), "why": answer.why} for row, answer in answers]  # fmt: skip
    path.write_text(json.dumps(told, indent=1, ensure_ascii=False, allow_nan=False) + "\n", encoding="utf-8")


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None
