"""What was found in each camera frame, as outlines in the pixels of its small picture."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from cameras.camera import CameraMap, load_camera
from cameras.faults import InputFault
from cameras.sightings import Sightings
from pipeline.finding import calibration_of
from pipeline.page.drawn import thinned
from pipeline.page.images import Shot, shots_of
from pipeline.page.subject import Subject

FloatArray = NDArray[np.float64]


def frames(subject: Subject) -> list[dict[str, Any]]:
    """Time, picture and what was found, one entry a frame shown."""
    seen, shots = subject.seen, shots_of(subject.seen)
    cameras = {name: _camera(subject, name) for name in {str(seen.recording.cameras[shot.row]) for shot in shots}}
    return [{
        "t": round(float(seen.recording.times_s[shot.row]) - subject.zero_s, 4),
        "no": int(seen.recording.frame[shot.row]),
        "src": shot.uri, "size": [shot.width, shot.height],
        "found": _found(subject, shot, cameras[str(seen.recording.cameras[shot.row])]),
    } for shot in shots]  # fmt: skip


def _camera(subject: Subject, name: str) -> CameraMap | None:
    try:
        return load_camera(calibration_of(subject.setting.cell, name))
    except InputFault:
        return None


def _found(subject: Subject, shot: Shot, camera: CameraMap | None) -> list[dict[str, Any]]:
    seen = subject.seen.sightings
    if camera is None:
        return []
    told = []
    for k in np.flatnonzero(seen.row == shot.row).tolist():
        pixels = _outline_px(subject, seen, k, camera)
        if not len(pixels) or not np.isfinite(pixels).all():
            continue
        small = np.round((pixels + 0.5) * shot.scale - 0.5).astype(int)
        kind = str(seen.kind[k])
        told.append({"part": int(subject.seen.followed.part_of[k]),
                     "kind": subject.kinds.index(kind) if kind in subject.kinds else -1,
                     "down": int(str(seen.side[k]) == "down"), "score": round(float(seen.score[k]), 2),
                     "at": small.ravel().tolist()})  # fmt: skip
    return told


def _outline_px(subject: Subject, seen: Sightings, k: int, camera: CameraMap) -> FloatArray:
    """Pixels (n, 2) of the outline of one sighting, halfway up its part."""
    kind, cell = str(seen.kind[k]), subject.setting.cell
    outline = seen.outline_mm[k]
    if not len(outline):
        own = subject.setting.outlines.get(kind, 8.0)
        if isinstance(own, float | int):
            turns = np.arange(24) * (2 * np.pi / 24)
            own = own * np.stack([np.cos(turns), np.sin(turns)], axis=1)
        cosine, sine = np.cos(seen.yaw_rad[k]), np.sin(seen.yaw_rad[k])
        mirror = np.array([1.0, -1.0 if str(seen.side[k]) == "down" else 1.0])
        outline = (own * mirror) @ np.array([[cosine, sine], [-sine, cosine]])
    half = 0.5 * cell.parts[kind].height_mm if kind in cell.parts else 0.0
    return camera.to_pixel(thinned(outline) + seen.xy_mm[k], cell.surface_mm + half)
