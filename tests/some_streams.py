"""Streams for tests: parts laid on a belt or a tray, seen without error, in memory or as a folder of files."""

import csv
import io
import sys
from collections.abc import Callable, Iterable, Sequence
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from pathlib import Path
from unittest.mock import patch

import numpy as np
from some_arms import changed, written_cell

from cameras.recording import Recording, unwrapped
from cameras.sightings import Sightings
from pipeline.app import main
from pipeline.cell import Cell
from pipeline.follow import follow
from pipeline.policy import Policy
from pipeline.replay import Run, Setting, replay

FRAME_S = 0.1
SEEN_MM = (-420.0, -220.0)  # along the heading: where the camera looks


@dataclass(frozen=True)
class Laid:
    """A part as it lies: pose at counts 0 (on a tray: in the frame `first`), mm and degrees."""

    x_mm: float
    y_mm: float
    yaw_deg: float = 0.0
    kind: str = "lever"
    side: str = "up"
    score: float = 0.95
    first: int = 0


@dataclass(frozen=True)
class Stream:
    """A cell (as changes to the plain one), frames (counts as an encoder gives them), and what lies there."""

    laid: tuple[Laid, ...]
    times_s: np.ndarray
    counts: np.ndarray
    changes: dict[str, object]

    @property
    def cell(self) -> Cell:
        return changed(**self.changes)

    def recording(self) -> Recording:
        n = len(self.times_s)
        modulus = self.cell.belt.counts_modulus if self.cell.belt else None
        return Recording(Path("made"), np.arange(n), tuple(f"none-{k}.png" for k in range(n)), np.array(self.times_s),
                         unwrapped(self.counts, modulus), np.full(n, "", np.str_), np.arange(n) + 2)

    def seen(self) -> list[tuple[int, Laid, float, float]]:
        """Frame, part, x, y of every sighting."""
        cell, counts = self.cell, self.recording().counts
        if cell.belt is None:
            return [(part.first, part, part.x_mm, part.y_mm) for part in self.laid]
        angle = np.radians(cell.belt.heading_deg)
        heading = np.array([np.cos(angle), np.sin(angle)])
        rows = []
        for part in self.laid:
            at = np.array([part.x_mm, part.y_mm]) + counts[:, None] * cell.belt.mm_per_count * heading
            along = at @ heading
            rows += [(int(k), part, *at[k].tolist())
                     for k in np.flatnonzero((along >= SEEN_MM[0]) & (along <= SEEN_MM[1]))]
        return sorted(rows, key=lambda row: row[0])

    def setting(self, least_score: float = 0.5) -> Setting:
        seen, cell, recording = self.seen(), self.cell, self.recording()
        n = len(seen)
        sightings = Sightings(
            np.array([row[0] for row in seen], np.int64), np.array([row[1].kind for row in seen], np.str_),
            np.array([row[1].side for row in seen], np.str_), np.array([row[2:] for row in seen]).reshape(-1, 2),
            np.radians([row[1].yaw_deg for row in seen]), np.array([row[1].score for row in seen]),
            np.full(n, 0.2), np.full(n, 0.005), tuple(np.zeros((0, 2)) for _ in seen),
        )  # fmt: skip
        outlines = {name: part.outline_radius_mm or 12.0 for name, part in cell.parts.items()}
        return Setting(cell, recording, follow(sightings, recording, cell).parts, outlines, least_score)

    def run(self, policy: Policy, horizon: int = 8) -> Run:
        return replay(self.setting(), policy, "some", horizon)

    def written(self, folder: Path) -> Path:
        """The same as files: cell.toml, frames.csv, located.csv."""
        folder.mkdir(parents=True, exist_ok=True)
        written_cell(folder, **self.changes)
        frames = [(k, f"none-{k}.png", f"{t:.4f}", int(c))
                  for k, (t, c) in enumerate(zip(self.times_s, self.counts, strict=True))]
        located = [(k, part.kind, f"{x:.3f}", f"{y:.3f}", f"{part.yaw_deg:.3f}", part.score, part.side)
                   for k, part, x, y in self.seen()]
        table(folder / "frames.csv", "frame,file,time_s,counts", frames)
        table(folder / "located.csv", "frame,part,x_mm,y_mm,yaw_deg,score,side", located)
        return folder


def table(path: Path, header: str, rows: Iterable[Sequence[object]]) -> Path:
    """A CSV file."""
    with open(path, "w", newline="", encoding="utf-8") as file:
        csv.writer(file, lineterminator="\n").writerows([header.split(","), *rows])
    return path


def belt(laid: Iterable[Laid], seconds: float, speed: float | Callable[[np.ndarray], np.ndarray] = 100.0,
         start_counts: int = 0, **changes: object) -> Stream:  # fmt: skip
    """Parts on a belt; speed: mm/s, or of an array of times."""
    times = np.arange(0.0, seconds, FRAME_S)
    speeds = np.full(len(times), speed) if isinstance(speed, float | int) else np.asarray(speed(times))
    per_count = changed(**changes).belt.mm_per_count  # type: ignore[union-attr]
    travel = np.concatenate([[0.0], np.cumsum(speeds[:-1] * FRAME_S)])
    counts = np.round(travel / per_count).astype(int) + start_counts
    modulus = changes.get("belt__counts_modulus")
    return Stream(tuple(laid), times, counts % modulus if modulus else counts, dict(changes))


def tray(laid: Iterable[Laid], frames: int, every_s: float = 10.0, **changes: object) -> Stream:
    """Parts on still trays, a fresh one each frame."""
    changes = {"belt": None, "tray": {"surface_mm": -50.0}, **changes}
    return Stream(tuple(laid), np.arange(frames) * every_s, np.zeros(frames, int), changes)


def scattered(seed: int, number: int, gap_mm: float, **kind: object) -> list[Laid]:
    """Parts at random across a lane that the plain arm reaches, gap_mm apart on average, upstream of the camera."""
    random = np.random.default_rng(seed)
    along = -450.0 - np.cumsum(random.uniform(0.4, 1.6, number) * gap_mm)
    poses = np.column_stack([random.uniform(230, 330, number), along, random.uniform(-180, 180, number)])
    return [Laid(*pose, **kind) for pose in poses.tolist()]


@dataclass(frozen=True)
class Told:
    """How a command ended, and what it printed."""

    status: int
    out: str
    err: str


def sanderling(*words: object) -> Told:
    """The command line, run in this process."""
    out, err, status = io.StringIO(), io.StringIO(), 0
    with patch.object(sys, "argv", ["sanderling", *map(str, words)]), redirect_stdout(out), redirect_stderr(err):
        try:
            main()
        except SystemExit as end:
            status = end.code if isinstance(end.code, int) else int(end.code is not None)
    return Told(status, out.getvalue(), err.getvalue())
