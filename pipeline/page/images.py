"""Camera frames small enough to travel inside the page."""

import base64
from dataclasses import dataclass

import cv2
import numpy as np

from cameras.image import Image
from pipeline.study import Seen

MOST_FRAMES = 300
MOST_BYTES = 3_400_000  # of all JPEG files together; in base64 a third more
MOST_BYTES_EACH = 70_000
RUNGS = ((720, 72), (640, 68), (560, 62), (480, 58), (400, 52), (320, 46), (240, 40), (160, 35))


@dataclass(frozen=True)
class Shot:
    """A frame as a JPEG of width and height pixels, scaled from the camera's by `scale`."""

    row: int
    jpeg: bytes
    width: int
    height: int
    scale: float

    @property
    def uri(self) -> str:
        """The picture as an address that holds it."""
        return "data:image/jpeg;base64," + base64.b64encode(self.jpeg).decode()


def shots_of(seen: Seen) -> list[Shot]:
    """Frames spread evenly over the recording, as large as leaves room for all; none where no image was read."""
    if not len(seen.find_s):
        return []
    rows = np.arange(len(seen.recording))
    if len(seen.find_s) < len(rows):  # only some were looked at
        rows = np.unique(seen.sightings.row)
    if len(rows) > MOST_FRAMES:
        rows = rows[np.linspace(0, len(rows) - 1, MOST_FRAMES).astype(int)]
    if not len(rows):
        return []
    width, quality = _rung(seen, rows.tolist())
    shots = [_shot(seen.recording.image(row), row, width, quality) for row in rows.tolist()]
    while sum(len(shot.jpeg) for shot in shots) > MOST_BYTES and len(shots) > 1:
        shots = shots[::2]
    return shots


def _rung(seen: Seen, rows: list[int]) -> tuple[int, int]:
    """Width and quality that let all frames in, tried on a few of them."""
    each = min(MOST_BYTES_EACH, MOST_BYTES / len(rows))
    tried = [seen.recording.image(row) for row in rows[:: max(len(rows) // 4, 1)]]
    for width, quality in RUNGS:
        if np.mean([len(_shot(image, 0, width, quality).jpeg) for image in tried]) <= 0.95 * each:
            return width, quality
    return RUNGS[-1]


def _shot(image: Image, row: int, width: int, quality: int) -> Shot:
    scale = min(width / image.shape[1], 1.0)
    size = (max(round(image.shape[1] * scale), 1), max(round(image.shape[0] * scale), 1))
    small = image if scale == 1.0 else cv2.resize(image, size, interpolation=cv2.INTER_AREA)
    jpeg = cv2.imencode(".jpg", small, [cv2.IMWRITE_JPEG_QUALITY, quality])[1].tobytes()
    return Shot(row, jpeg, size[0], size[1], scale)
