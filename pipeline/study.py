"""A study: a recording goes in, its parts, a run and its figures come out. Read this to see the flow.

recording -> sightings (found in the images, or made elsewhere) -> parts -> setting -> run
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.camera import CameraMap, load_camera
from cameras.faults import InputFault, printable
from cameras.locate import read_detections, read_located
from cameras.model import load_model
from cameras.recording import Recording, read_recording
from cameras.sightings import Sightings
from pipeline.cell import MOST_ON_TRAY, Cell
from pipeline.finding import calibration_of, found_in
from pipeline.follow import Followed, follow
from pipeline.map_share import with_map_share
from pipeline.policy import MOST_LOOKED_AT, POLICIES, Nearest, Policy, parts_within, policy_named
from pipeline.replay import LEAST_SCORE, Run, Setting, replay, replay_ahead, replay_trips
from pipeline.tray_trips import TrayTrips

FloatArray = NDArray[np.float64]
Rows = Callable[[Iterable[int]], Iterable[int]]
Find = Callable[[Recording, Cell, Rows], tuple[Sightings, NDArray[np.float64]]]


@dataclass(frozen=True)
class Source:
    """Where sightings come from: the images, unless a table made elsewhere is given."""

    detections: Path | None = None
    located: Path | None = None

    @property
    def images(self) -> bool:
        """Whether images are read."""
        return self.detections is None and self.located is None


@dataclass(frozen=True)
class Seen:
    """A recording and what was seen in it. find_s: seconds that finding took, frame by frame, or none."""

    cell: Cell
    recording: Recording
    sightings: Sightings
    followed: Followed
    find_s: FloatArray


def see(cell: Cell, folder: Path, source: Source, rows: Rows = iter, find: Find = found_in) -> Seen:
    """Read a recording and everything that lies in it. find: what looks into the images. Raises InputFault."""
    recording = _read(cell, folder, source)
    sightings, find_s = sightings_of(cell, recording, source, rows, find)
    return Seen(cell, recording, sightings, _followed(cell, recording, sightings, source), find_s)


def one_frame(cell: Cell, folder: Path, source: Source, frame: int) -> Seen:
    """The same of one image alone. Raises InputFault where frames.csv has no such frame."""
    recording = _read(cell, folder, source)
    row = int(recording.row_of([frame])[0])
    if row < 0:
        raise InputFault(folder / "frames.csv", "frame", f"there is no frame {frame}",
                         f"choose one from {recording.frame.min()} to {recording.frame.max()}")
    sightings, find_s = sightings_of(cell, recording, source, lambda rows: [row])
    sightings = sightings.where(sightings.row == row)
    return Seen(cell, recording, sightings, _followed(cell, recording, sightings, source), find_s[find_s > 0])


def sightings_of(cell: Cell, recording: Recording, source: Source, rows: Rows = iter,
                 find: Find = found_in) -> tuple[Sightings, FloatArray]:
    """What is seen in each frame, and the seconds it took to find."""
    if source.located is not None:
        return read_located(source.located, recording, list(cell.parts)), np.zeros(0)
    if source.detections is not None:
        heights = {name: cell.surface_mm + part.height_mm for name, part in cell.parts.items()}
        return read_detections(source.detections, recording, maps_of(cell, recording), heights), np.zeros(0)
    return find(recording, cell, rows)


def maps_of(cell: Cell, recording: Recording) -> dict[str, CameraMap]:
    """The map of each camera that a recording names. Raises InputFault."""
    return {str(name): load_camera(calibration_of(cell, str(name))) for name in np.unique(recording.cameras)}


def _followed(cell: Cell, recording: Recording, sightings: Sightings, source: Source) -> Followed:
    """The parts; what came through a map is as unsure as the map as well."""
    followed = follow(sightings, recording, cell, outlines(cell))
    if source.located is not None:
        return followed
    return with_map_share(followed, sightings, recording, maps_of(cell, recording), cell)


def setting(seen: Seen, least_score: float = LEAST_SCORE) -> Setting:
    """All that stays the same while orders are tried on what was seen."""
    return Setting(seen.cell, seen.recording, seen.followed.parts, outlines(seen.cell), least_score)


def outlines(cell: Cell) -> dict[str, FloatArray | float]:
    """What others must not hit of each kind: as the cell file says, otherwise the taught model's outline."""
    found: dict[str, FloatArray | float] = {}
    for name, part in cell.parts.items():
        if part.outline_mm is not None:
            found[name] = np.array(part.outline_mm)
        elif part.outline_radius_mm is not None:
            found[name] = part.outline_radius_mm
        elif part.model is not None and cell.beside(part.model).exists():
            found[name] = load_model(cell.beside(part.model)).outline_mm
    return found


def policy_of(setting: Setting, order: str, budget_ms: float = 0.0) -> Policy:
    """The policy of an order; budget_ms bounds a decision, 0: the cell's. Raises InputFault for an unknown order."""
    if order not in POLICIES:
        raise InputFault(setting.cell.file, "order", f"{printable(order)!r} is not an order",
                         f"write {', '.join(POLICIES[:-1])} or {POLICIES[-1]}")
    return policy_named(order, setting.cell.order.objective, budget_ms or setting.cell.order.budget_ms)


def horizon_of(setting: Setting, order: str, horizon: int, budget_ms: float = 0.0) -> int:
    """How many parts an order looks at together: no more than it can, on a belt within its budget."""
    if order != "lookahead":
        return horizon
    if setting.cell.belt is None:
        return min(horizon, MOST_ON_TRAY)
    return parts_within(min(horizon, MOST_LOOKED_AT), budget_ms or setting.cell.order.budget_ms)


def run(setting: Setting, order: str, horizon: int, tick: Callable[[float], None] = lambda now: None,
        budget_ms: float = 0.0) -> Run:
    """Replay under one order. Raises InputFault for an order there is none of."""
    policy, horizon = policy_of(setting, order, budget_ms), horizon_of(setting, order, horizon, budget_ms)
    single = (replay_ahead if order == "lookahead" else replay)(setting, policy, order, horizon, tick)
    if len(setting.graspings) == 1:
        return single
    ways: tuple[Policy, ...] = (policy,)
    if order == "lookahead" and setting.cell.belt is None:
        within_ms = budget_ms or setting.cell.order.budget_ms or None
        ways = TrayTrips(setting.graspings, setting.legs, setting.parts, within_ms), Nearest()
    return replay_trips(setting, ways, order, horizon, single)


def _read(cell: Cell, folder: Path, source: Source) -> Recording:
    """The recording, once cell and source have all that a replay needs."""
    if folder.is_file():
        raise InputFault(folder, "", "is a file", "give the folder that holds frames.csv")
    if source.detections is not None and source.located is not None:
        raise InputFault(source.located, "", "given together with detections", "give one of the two")
    for what, given in (("parts", cell.parts), ("places", cell.places)):
        if not given:
            raise InputFault(cell.file, what, "missing", f"describe at least one in [{what}]")
    return read_recording(folder, cell.belt.counts_modulus if cell.belt else None, images=source.images)
