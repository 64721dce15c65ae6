"""Finding over a recording: the cell's taught parts looked for in every image, and what was found written down."""

import csv
import time
from collections.abc import Callable, Iterable
from dataclasses import replace
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.camera import CameraMap, load_camera
from cameras.faults import InputFault
from cameras.find import Finder, PartFinder, TaughtPart
from cameras.model import load_model
from cameras.recording import Recording
from cameras.sightings import Sightings
from cameras.written import written_whole
from pipeline.cell import Cell

FloatArray = NDArray[np.float64]
Rows = Callable[[Iterable[int]], Iterable[int]]

HEADER = ("frame", "part", "x_mm", "y_mm", "yaw_deg", "score", "side", "sigma_mm", "sigma_deg")
UP, DOWN, UNKNOWN = (80, 220, 80), (60, 150, 255), (230, 120, 230)


def taught_parts(cell: Cell) -> list[TaughtPart]:
    """The cell's parts that have a model. Raises InputFault where there are none, or a model will not do."""
    parts = [TaughtPart(name, load_model(cell.beside(part.model)), part.height_mm, part.turns)
             for name, part in cell.parts.items() if part.model]
    if not parts:
        raise InputFault(cell.file, "parts", "no part has a model", "teach the parts with `sanderling teach`")
    return parts


def calibration_of(cell: Cell, camera: str) -> Path:
    """The calibration file of a camera. Raises InputFault where the cell names none."""
    named = cell.camera(camera)
    if named.calibration is None:
        raise InputFault(cell.file, "cameras", f"camera {named.name!r} has no calibration",
                         "write one with `sanderling calibrate plane`")
    return cell.beside(named.calibration)


def found_in(
    recording: Recording, cell: Cell, rows: Rows = iter, finder: Callable[[], Finder] | None = None
) -> tuple[Sightings, FloatArray]:
    """What is seen in each frame, and the seconds that finding took, reading the image apart (frames,).

    rows wraps the frames' rows, for a progress bar. finder makes a finder of one's own, one for each camera.
    """
    parts = taught_parts(cell) if finder is None else []
    make = finder or (lambda: PartFinder(parts, cell.surface_mm))
    names = [str(name) for name in np.unique(recording.cameras)]
    cameras: dict[str, CameraMap] = {name: load_camera(calibration_of(cell, name)) for name in names}
    finders = {name: make() for name in names}
    found, seconds = [], np.zeros(len(recording))
    for row in rows(range(len(recording))):
        image, name = recording.image(row), str(recording.cameras[row])
        start = time.perf_counter()
        seen = finders[name].find(image, cameras[name])
        seconds[row] = time.perf_counter() - start
        found.append(replace(seen, row=np.full(len(seen), row, np.int64)))
    return Sightings.joined(found), seconds


def write_detections(path: Path, recording: Recording, sightings: Sightings) -> None:
    """The sightings as a table that `--located` reads."""
    with written_whole(path) as part, open(part, "w", newline="", encoding="utf-8") as file:
        table = csv.writer(file, lineterminator="\n")
        table.writerow(HEADER)
        for k in range(len(sightings)):
            table.writerow((int(recording.frame[sightings.row[k]]), sightings.kind[k], f"{sightings.xy_mm[k, 0]:.3f}",
                            f"{sightings.xy_mm[k, 1]:.3f}", f"{np.degrees(sightings.yaw_rad[k]):.3f}",
                            f"{sightings.score[k]:.3f}", sightings.side[k], f"{sightings.sigma_mm[k]:.4f}",
                            f"{np.degrees(sightings.sigma_rad[k]):.4f}"))  # fmt: skip


def write_overlays(folder: Path, recording: Recording, cell: Cell, sightings: Sightings) -> None:
    """Every image with what was found in it drawn on it, as found_NNN.jpg."""
    outlines = {part.name: part.model.outline_mm for part in taught_parts(cell)}
    cameras = {str(n): load_camera(calibration_of(cell, str(n))) for n in np.unique(recording.cameras)}
    for row in range(len(recording)):
        image = recording.image(row)
        shown = cv2.cvtColor(image, cv2.COLOR_GRAY2BGR) if image.ndim == 2 else image.copy()
        camera = cameras[str(recording.cameras[row])]
        for k in np.flatnonzero(sightings.row == row):
            _draw(shown, camera, cell, sightings, int(k), outlines)
        with written_whole(folder / f"found_{int(recording.frame[row]):03d}.jpg") as part:
            part.write_bytes(cv2.imencode(".jpg", shown, [cv2.IMWRITE_JPEG_QUALITY, 88])[1].tobytes())


def _draw(shown: NDArray[Any], camera: CameraMap, cell: Cell, seen: Sightings, k: int,
          outlines: dict[str, FloatArray]) -> None:  # fmt: skip
    """One sighting: its outline, its grip frame's x axis, its name and score."""
    kind, down = str(seen.kind[k]), str(seen.side[k]) == "down"
    colour = UNKNOWN if kind == "" else DOWN if down else UP
    cosine, sine = np.cos(seen.yaw_rad[k]), np.sin(seen.yaw_rad[k])
    turn = np.array([[cosine, sine], [-sine, cosine]])
    outline = seen.outline_mm[k] if len(seen.outline_mm[k]) else outlines[kind] * [1.0, -1.0 if down else 1.0] @ turn
    height = cell.surface_mm + (0.5 * cell.parts[kind].height_mm if kind else 0.0)
    pixels = camera.to_pixel(outline + seen.xy_mm[k], height)
    if not np.all(np.isfinite(pixels)):
        return
    cv2.polylines(shown, [np.round(pixels * 16).astype(np.int32)], True, colour, 1, cv2.LINE_AA, 4)
    axes = camera.to_pixel(seen.xy_mm[k] + np.array([[0.0, 0.0], [12.0, 0.0]]) @ turn, height)
    start, end = (tuple(int(v) for v in np.round(one * 16)) for one in axes)
    if kind:
        cv2.arrowedLine(shown, start, end, colour, 1, cv2.LINE_AA, 4)
    text = f"{kind}{' down' if down else ''} {seen.score[k]:.2f}" if kind else "unknown"
    at = (int(pixels[:, 0].min()), int(pixels[:, 1].min()) - 4)
    plain = text.encode("ascii", "replace").decode()
    cv2.putText(shown, plain, at, cv2.FONT_HERSHEY_SIMPLEX, 0.42, colour, 1, cv2.LINE_AA)
