"""Reports for tests: small streams, with made camera frames or without, written as report.html."""

import json
import re
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from some_streams import Laid, Stream, belt, scattered

from cameras.plane import fit_plane
from cameras.recording import read_recording
from cameras.sightings import Sightings
from pipeline.follow import follow
from pipeline.outputs import more_figures
from pipeline.page import write_page
from pipeline.page.subject import Subject
from pipeline.policy import Arrival, Policy
from pipeline.replay import Run, Setting, replay
from pipeline.study import Seen
from pipeline.tables import summary

SIZE_PX = (320, 240)


@dataclass(frozen=True)
class Made:
    """A run ready to be told of."""

    seen: Seen
    setting: Setting
    run: Run

    def figures(self) -> dict[str, object]:
        return summary(self.run, 8, self.seen.find_s.tolist(), more_figures(self.seen, self.run))

    @property
    def subject(self) -> Subject:
        return Subject(self.seen, self.setting, self.run, self.figures())

    def written(self, path: Path) -> str:
        write_page(path, self.seen, self.setting, self.run, self.figures())
        return path.read_text(encoding="utf-8")


def made(stream: Stream, folder: Path, policy: Policy | None = None, images: bool = False) -> Made:
    """The stream as files in a folder, replayed from them; images: with a picture and a camera."""
    stream.written(folder)
    cell = stream.cell.model_copy(update={"file": folder / "cell.toml"})
    if images:
        _pictures(stream, folder)
    recording = read_recording(folder, cell.belt.counts_modulus if cell.belt else None, images=images)
    seen_rows = stream.seen()
    n = len(seen_rows)
    sightings = Sightings(
        np.array([row[0] for row in seen_rows], np.int64), np.array([row[1].kind for row in seen_rows], np.str_),
        np.array([row[1].side for row in seen_rows], np.str_), np.array([row[2:] for row in seen_rows]).reshape(-1, 2),
        np.radians([row[1].yaw_deg for row in seen_rows]), np.array([row[1].score for row in seen_rows]),
        np.full(n, 0.2), np.full(n, 0.005), tuple(np.zeros((0, 2)) for _ in seen_rows),
    )  # fmt: skip
    seen = Seen(cell, recording, sightings, follow(sightings, recording, cell),
                np.full(len(recording) if images else 0, 0.01))
    outlines = dict.fromkeys(cell.parts, 12.0)
    setting = Setting(cell, recording, seen.followed.parts, outlines)
    return Made(seen, setting, replay(setting, policy or Arrival(), "arrival", 8))


def plain(folder: Path, images: bool = False, **changes: object) -> Made:
    """Twelve parts, one of them on its wrong side, over a belt."""
    laid = [*scattered(4, 11, 90.0), Laid(280.0, -520.0, 20.0, side="down")]
    places = [{"name": "tray", "origin_mm": [-60.0, 260.0, -40.0], "columns": 3, "pitch_mm": [40.0, 0.0],
               "endless": True}]
    cameras = [{"name": "overhead", "calibration": "camera.json"}] if images else []
    changes = {"places": places, "cameras": cameras, **changes}
    return made(belt(laid, 16.0, 150.0, **changes), folder, images=images)


def _pictures(stream: Stream, folder: Path) -> None:
    """Grey pictures with a number in each, under the names that frames.csv gives; a camera that looks straight down."""
    pixels = np.array([[0, 0], [319, 0], [0, 239], [319, 239], [160, 120], [80, 60.0]])
    map_ = fit_plane(pixels, pixels * [1.0, -1.0] + [120.0, -200.0], image_size_px=SIZE_PX)
    (folder / "camera.json").write_text(json.dumps(map_.document()), encoding="utf-8")
    for k in range(len(stream.times_s)):
        image = np.full((SIZE_PX[1], SIZE_PX[0]), 90, np.uint8)
        cv2.putText(image, str(k), (20, 140), cv2.FONT_HERSHEY_SIMPLEX, 3, 220, 4)
        cv2.imwrite(str(folder / f"none-{k}.png"), image)


def scene_of(text: str) -> dict[str, Any]:
    """The data that a page's scripts read."""
    found = re.search(r'<script type="application/json" id="scene">(.*?)</script>', text, re.DOTALL)
    assert found
    return json.loads(found[1])
