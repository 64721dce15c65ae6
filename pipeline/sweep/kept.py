"""Results of points, kept one by one, so that a sweep goes on where it was."""

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from cameras.written import written_whole
from pipeline.sweep.points import Point

FORMAT = 1


@dataclass(frozen=True)
class Outcome:
    """What became of a point. figures: as in summary.json and some more; failed: why there are none, or empty.

    ran_s: seconds the replay took. again: it was done in an earlier run and taken from there.
    """

    point: Point
    figures: dict[str, Any]
    failed: str = ""
    ran_s: float = 0.0
    again: bool = False


class Kept:
    """A folder with one small file for each point that is done."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def find(self, point: Point, key: str) -> Outcome | None:
        """The point's outcome, where it was done before; a file that is damaged counts as none."""
        try:
            told = json.loads((self.folder / f"{key}.json").read_text(encoding="utf-8"))
            if told["format"] == FORMAT and told["key"] == key and isinstance(told["figures"], dict):
                return Outcome(point, told["figures"], ran_s=float(told["ran_s"]), again=True)
        except (OSError, ValueError, KeyError, TypeError, RecursionError):
            pass
        return None

    def keep(self, outcome: Outcome, key: str) -> None:
        """Write an outcome down, unless it failed: what failed is tried anew the next time."""
        if outcome.failed:
            return
        point = outcome.point
        told = {"format": FORMAT, "key": key, "recording": point.recording, "settings": dict(point.settings),
                "seed": point.seed, "length_s": point.length_s, "ran_s": outcome.ran_s, "figures": outcome.figures}
        with written_whole(self.folder / f"{key}.json") as part:
            part.write_text(json.dumps(told, indent=1, ensure_ascii=False, allow_nan=False) + "\n", encoding="utf-8")
