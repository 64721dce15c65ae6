"""Detections of a recording, followed to parts, as a score compares them."""

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.locate import read_located
from cameras.recording import Recording, read_recording
from cameras.sightings import Sightings
from pipeline.cell import Cell
from pipeline.follow import Followed, Part, follow
from pipeline.score import Poses, Score
from pipeline.study import outlines

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Sighted:
    """Sightings, the parts they are of, and where each sighting lies at counts 0 (n, 2)."""

    sightings: Sightings
    followed: Followed
    at_mm: FloatArray
    poses: Poses

    def errors(self, score: Score) -> tuple[FloatArray, FloatArray]:
        """Where in the cell sightings of true parts were made (k, 2), and how far off each was (k, 2), mm."""
        part = self.followed.part_of
        kept = np.flatnonzero(part >= 0)
        kept = kept[np.isfinite(score.error_mm[part[kept], 0])]
        true_mm = score.true.xy_mm[score.partner[part[kept]]]
        return self.sightings.xy_mm[kept], self.at_mm[kept] - true_mm


def read_sighted(detections: Path, recording: Path, cell: Cell) -> Sighted:
    """Detections in the cell frame of a recording, whose images are not read. Raises InputFault."""
    frames = read_recording(recording, cell.belt.counts_modulus if cell.belt else None, images=False)
    sightings = read_located(detections, frames, list(cell.parts))
    followed = follow(sightings, frames, cell, outlines(cell))
    shift = np.zeros((len(sightings), 2))
    if cell.belt is not None:
        angle = np.radians(cell.belt.heading_deg)
        travel_mm = frames.counts[sightings.row] * cell.belt.mm_per_count
        shift = travel_mm[:, None] * np.array([np.cos(angle), np.sin(angle)])
    return Sighted(sightings, followed, sightings.xy_mm - shift, poses_of(followed.parts, frames))


def poses_of(parts: Iterable[Part], recording: Recording) -> Poses:
    """Poses of parts as followed; those not recognised claim nothing."""
    parts = tuple(parts)
    rows = np.array([part.first_row for part in parts], dtype=np.int64)
    return Poses(
        number=np.array([part.number for part in parts], dtype=np.int64),
        kind=np.array([part.kind for part in parts], dtype=np.str_),
        side=np.array([part.side for part in parts], dtype=np.str_),
        xy_mm=np.array([part.xy_mm for part in parts], dtype=float).reshape(-1, 2),
        yaw_rad=np.array([part.yaw_rad for part in parts], dtype=float),
        counts=np.array([part.kind != "" for part in parts], dtype=bool), frame=recording.frame[rows],
        sigma_mm=np.array([part.sigma_mm for part in parts], dtype=float),
        sigma_rad=np.array([part.sigma_rad for part in parts], dtype=float),
    )  # fmt: skip
