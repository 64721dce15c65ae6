"""Cases for tests of sweeps: small streams as a sweep takes them."""

from pathlib import Path

from some_streams import Stream, belt, scattered, tray

from pipeline.cell import load_cell
from pipeline.study import Source, see
from pipeline.sweep.case import Case, case_of

ENDLESS = {"places": [{"name": "tray", "origin_mm": [-60.0, 260.0, -40.0], "columns": 3, "rows": 2,
                       "pitch_mm": [40.0, 40.0], "endless": True}]}  # fmt: skip


def stream(
    parts: int = 10, gap_mm: float = 80.0, seconds: float = 20.0, speed: float = 100.0, **changes: object
) -> Stream:
    """Parts on a belt, with a place that is never full."""
    return belt(scattered(4, parts, gap_mm), seconds, speed, **{**ENDLESS, **changes})


def still(trays: int = 4, **changes: object) -> Stream:
    """Parts on trays."""
    laid = [type(part)(part.x_mm, (-60.0, 40.0)[k % 2], part.yaw_deg, first=k // 2)
            for k, part in enumerate(scattered(5, 2 * trays, 50.0))]  # fmt: skip
    return tray(laid, trays, 8.0, **{**ENDLESS, **changes})


def case(folder: Path, made: Stream) -> Case:
    """A stream written down and read as a sweep reads it."""
    made.written(folder)
    cell = load_cell(folder / "cell.toml")
    return case_of(see(cell, folder, Source(located=folder / "located.csv")), folder.name)
