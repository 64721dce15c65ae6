"""The same recording under several orders and cells. What lies in it is looked for once for all that see it alike."""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from pipeline.account.choices import EQUAL, choices_of
from pipeline.cell import Cell
from pipeline.follow import follow
from pipeline.replay import LEAST_SCORE, Run, Setting
from pipeline.study import Rows, Seen, Source, outlines, run, see, setting
from pipeline.tables import summary


@dataclass(frozen=True)
class Tried:
    """One of the runs compared. figures: as in summary.json, and waiting_s, gap (mean share by which decisions fall
    short of their bound; None where the order gives none) and decisions_best (share of them at their bound)."""

    label: str
    cell: Cell
    seen: Seen
    setting: Setting
    run: Run
    figures: dict[str, Any]


def compare(
    cells: Sequence[Cell], folder: Path, source: Source, orders: Sequence[str] = (), horizon: int = 0,
    least_score: float = LEAST_SCORE, rows: Rows = iter,
    ticking: Callable[[Iterable[tuple[str, Seen, str]], int], Iterable[tuple[str, Seen, str]]] = lambda work, n: work,
) -> list[Tried]:
    """Replay a recording in each cell under each order; no orders: each cell's own. horizon 0: the cell's.

    rows wraps the frames looked at, ticking the runs, for progress bars. Raises InputFault.
    """
    seen = _seen_by_each(cells, folder, source, rows)
    names = cell_names(cells)
    work = [(name, one, order) for name, one in zip(names, seen, strict=True)
            for order in (orders or [one.cell.order.policy])]  # fmt: skip
    tried = []
    for name, one, order in ticking(work, len(work)):
        chosen, ahead = setting(one, least_score), horizon or one.cell.horizon
        done = run(chosen, order, ahead)
        label = order if len(cells) == 1 else name if len(work) == len(cells) else f"{name}, {order}"
        tried.append(Tried(label, one.cell, one, chosen, done, figures_of(done, ahead, one)))
    return tried


def figures_of(done: Run, horizon: int, seen: Seen) -> dict[str, Any]:
    """The figures of one run."""
    choices = choices_of(done)
    busy_s = sum(pick.busy_s for pick in done.picks)
    return summary(done, horizon, seen.find_s.tolist(), {
        "waiting_s": round(max(done.end_s - done.start_s - busy_s, 0.0), 3),
        "gap": float(np.mean(choices.gaps)) if choices.gaps else None,
        "decisions_best": float(np.mean(np.array(choices.gaps) <= EQUAL)) if choices.gaps else None,
    })  # fmt: skip


def cell_names(cells: Sequence[Cell]) -> list[str]:
    """A name for each cell: its own where they differ, otherwise its file's, numbered where those are alike too."""
    files = [cell.file for cell in cells]
    for names in ([cell.name for cell in cells], [file.stem for file in files], [str(file) for file in files]):
        if all(names) and len(set(names)) == len(names):
            return names
    return [f"{cell.name or cell.file.stem} ({k})" for k, cell in enumerate(cells, 1)]


def _seen_by_each(cells: Sequence[Cell], folder: Path, source: Source, rows: Rows) -> list[Seen]:
    """What each cell sees in the recording; cells with the same cameras, parts and surface share what was found."""
    first: dict[tuple[object, ...], Seen] = {}
    told = []
    for cell in cells:
        looks = _looks(cell)
        if looks in first:
            one = first[looks]
            followed = follow(one.sightings, one.recording, cell, outlines(cell))
            told.append(Seen(cell, one.recording, one.sightings, followed, one.find_s))
        else:
            told.append(see(cell, folder, source, rows))
            first[looks] = told[-1]
    return told


def _looks(cell: Cell) -> tuple[object, ...]:
    """All of a cell that finding depends on."""
    def file(name: str | None) -> Path | None:
        return cell.beside(name).resolve() if name else None

    cameras = [(camera.name, file(camera.calibration)) for camera in cell.cameras]
    parts = [(name, file(part.model), part.height_mm, part.turns) for name, part in cell.parts.items()]
    return tuple(cameras), tuple(parts), cell.surface_mm, cell.belt.counts_modulus if cell.belt else None
