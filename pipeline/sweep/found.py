"""What was found in a recording's images, kept beside the points of a sweep: started again, it is not found anew."""

import hashlib
from collections.abc import Iterable
from dataclasses import fields
from pathlib import Path
from zipfile import BadZipFile

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.recording import Recording, split_video
from cameras.sightings import Sightings
from cameras.written import written_whole
from pipeline.cell import Cell
from pipeline.finding import Rows, calibration_of, found_in
from pipeline.sweep.case import code_digest, digest

FloatArray = NDArray[np.float64]
PAIRS = ("xy_mm", "lean_mm")
COLUMNS = tuple(field.name for field in fields(Sightings) if field.name != "outline_mm")


class Found:
    """A folder with one file of plain arrays for all that was found in a recording, under a hash of what went in."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def __call__(self, recording: Recording, cell: Cell, rows: Rows = iter) -> tuple[Sightings, FloatArray]:
        """As `found_in`, from the folder where it is there; a damaged file counts as none. Raises InputFault."""
        path = self.folder / f"{found_key(recording, cell)}.npz"
        before = _read(path, len(recording))
        if before is not None:
            return before
        sightings, seconds = found_in(recording, cell, rows)
        with written_whole(path) as part:
            _write(part, sightings, seconds)
        return sightings, seconds


def found_key(recording: Recording, cell: Cell) -> str:
    """A hash of images, maps, models, of what the cell says of parts and surface, and of the code that finds."""
    images = [split_video(file) for file in recording.files]
    files = {name: _file_digest(recording.folder / name) for name in dict.fromkeys(name for name, _ in images)}
    maps = {str(name): _file_digest(calibration_of(cell, str(name))) for name in np.unique(recording.cameras)}
    parts = [(name, part.height_mm, part.turns, _file_digest(cell.beside(part.model)))
             for name, part in cell.parts.items() if part.model]  # fmt: skip
    return digest([(files[name], number) for name, number in images], recording.cameras, maps, parts, cell.surface_mm,
                  code_digest(), cv2.__version__, np.__version__)


def _file_digest(path: Path) -> str:
    """Of a file's bytes; empty where it can't be read: whoever reads it next says why."""
    try:
        with open(path, "rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError:
        return ""


def _write(path: Path, sightings: Sightings, seconds: FloatArray) -> None:
    outlines = sightings.outline_mm
    np.savez(path, seconds=seconds, outline_points=np.array([len(one) for one in outlines], np.int64),
             outlines_mm=np.concatenate([np.zeros((0, 2)), *outlines]),
             **{name: getattr(sightings, name) for name in COLUMNS})


def _read(path: Path, frames: int) -> tuple[Sightings, FloatArray] | None:
    """What a file holds; None where there is none, or not one for so many frames."""
    try:
        with np.load(path, allow_pickle=False) as file:
            held = {name: file[name] for name in file.files}
        points, n = held["outline_points"], len(held["row"])
        if not (held["seconds"].shape == (frames,) and points.shape == (n,) and _alike(held, n, frames)):
            return None
        outlines = np.split(held["outlines_mm"], np.cumsum(points)[:-1]) if n else []
        return Sightings(**{name: held[name] for name in COLUMNS}, outline_mm=tuple(outlines)), held["seconds"]
    except (OSError, ValueError, KeyError, TypeError, BadZipFile, EOFError):
        return None


def _alike(held: dict[str, NDArray[np.generic]], n: int, frames: int) -> bool:
    """Whether every column has n entries and every row is one of the frames."""
    shapes: Iterable[bool] = (held[name].shape == ((n, 2) if name in PAIRS else (n,)) for name in COLUMNS)
    rows = held["row"]
    return all(shapes) and (n == 0 or bool(0 <= rows.min() <= rows.max() < frames))
