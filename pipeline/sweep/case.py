"""What a point of a sweep replays, before and after its settings have changed it."""

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, fields, is_dataclass, replace
from functools import cache
from importlib.resources import files
from importlib.resources.abc import Traversable

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel

from cameras.recording import Recording
from pipeline.cell import Cell
from pipeline.follow import Part
from pipeline.replay import LEAST_SCORE, Setting
from pipeline.study import Seen, outlines

FloatArray = NDArray[np.float64]
FOR_SHOW = ("__pycache__", "app", "page", "plots")  # folders that no figure comes from


@dataclass(frozen=True)
class Case:
    """A cell, a recording and its parts: all that a replay needs, small enough to send to another machine.

    name: of the recording. outlines: of each kind, (k, 2) mm in the grip frame or the radius of a disc.
    """

    name: str
    cell: Cell
    recording: Recording
    parts: tuple[Part, ...]
    outlines: Mapping[str, FloatArray | float]
    least_score: float = LEAST_SCORE

    @property
    def heading(self) -> FloatArray:
        """(2,) the belt's direction; x for a tray."""
        angle = np.radians(self.cell.belt.heading_deg) if self.cell.belt else 0.0
        return np.array([np.cos(angle), np.sin(angle)])

    @property
    def travel_mm(self) -> FloatArray:
        """(n,) of the belt since counts 0 at each frame; 0 on a tray."""
        return self.recording.counts * (self.cell.belt.mm_per_count if self.cell.belt else 0.0)

    @property
    def lasts_s(self) -> float:
        """From the first frame to the last."""
        return float(self.recording.times_s[-1] - self.recording.times_s[0])

    def setting(self) -> Setting:
        """What a replay takes."""
        return Setting(self.cell, self.recording, self.parts, self.outlines, self.least_score)

    def digest(self) -> str:
        """A hash of everything in it but the recording's name and file names, and of the code that replays it."""
        recording = self.recording
        return digest(self.cell, recording.frame, recording.times_s, recording.counts, recording.cameras, self.parts,
                      self.outlines, self.least_score, self.cell.horizon, code_digest())


def case_of(seen: Seen, name: str, least_score: float = LEAST_SCORE) -> Case:
    """What was seen of a recording, as a case."""
    bare = replace(seen.recording, files=(), _videos={}, _sizes={})
    return Case(name, seen.cell, bare, seen.followed.parts, outlines(seen.cell), least_score)


def digest(*things: object) -> str:
    """A hash (40 hex digits) of numbers, text, arrays, records, and sequences and mappings of them."""
    sha = hashlib.sha256()
    _feed(sha, things)
    return sha.hexdigest()[:40]


def _feed(sha: "hashlib._Hash", thing: object) -> None:
    """Each thing with its type and length ahead of it, so that no two different ones feed alike."""
    if isinstance(thing, np.ndarray):
        data = np.ascontiguousarray(thing)
        sha.update(f"a{data.dtype.str}{data.shape}".encode() + data.tobytes())
    elif isinstance(thing, Mapping):
        _feed(sha, sorted(thing.items()))
    elif isinstance(thing, (list, tuple)):
        sha.update(f"s{len(thing)}".encode())
        for one in thing:
            _feed(sha, one)
    elif isinstance(thing, BaseModel):
        _feed(sha, thing.model_dump_json())
    elif is_dataclass(thing):
        _feed(sha, [getattr(thing, field.name) for field in fields(thing)])
    else:
        text = repr(thing).encode()
        sha.update(f"t{len(text)}".encode() + text)


@cache
def code_digest() -> str:
    """A hash of the modules that a replay may use: results of another version are never taken for its own."""
    sha = hashlib.sha256()
    for package in ("cameras", "pipeline"):
        for file in _modules(files(package)):
            sha.update(file.read_bytes())
    return sha.hexdigest()


def _modules(folder: Traversable) -> list[Traversable]:
    entries = sorted(folder.iterdir(), key=lambda entry: entry.name)
    deeper = [one for entry in entries if entry.is_dir() and entry.name not in FOR_SHOW for one in _modules(entry)]
    return [entry for entry in entries if entry.name.endswith(".py")] + deeper
