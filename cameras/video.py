"""Single frames of a video file, counted from its start; read in rising order, each is decoded once."""

import os
from pathlib import Path
from typing import Any

import cv2
import numpy as np

from cameras.faults import InputFault
from cameras.image import MOST_PIXELS, Image

_MORE_THAN_CLAIMED = 2  # frames a container may hold beyond the number it claims (some only estimate it)


class Video:
    """Frames of one video file. Frames are reached by decoding up to them: seeking by time is not exact.

    Raises InputFault when made, for a file that is missing or no video, and by `frame`. Copies sent to another process
    open the file anew.
    """

    def __init__(self, path: Path, place: str) -> None:
        self.path = path
        self._capture: cv2.VideoCapture | None = None
        self._next = 0
        self._open(place)

    def __getstate__(self) -> dict[str, Any]:
        return {"path": self.path, "_capture": None, "_next": 0}

    def check(self, number: int, place: str) -> None:
        """Raise InputFault where the video says that it ends before frame `number`."""
        claimed = int(self._open(place).get(cv2.CAP_PROP_FRAME_COUNT))
        if claimed > 0 and number >= claimed + _MORE_THAN_CLAIMED:
            raise InputFault(self.path, place, f"no frame {number}: the video has {claimed}", "correct the number")

    def frame(self, number: int, place: str) -> Image:
        """Frame `number`, counted from 0, as (h, w, 3) blue-green-red uint8."""
        capture = self._open(place)
        if number < self._next:
            self.close()
            capture = self._open(place)
        while self._next < number and capture.grab():
            self._next += 1
        good, image = capture.read() if self._next == number else (False, None)
        if not good or image is None or image.ndim != 3 or image.dtype != np.uint8:
            self.close()
            raise InputFault(self.path, place, f"frame {number} cannot be read", "copy the video again")
        self._next += 1
        return np.asarray(image, dtype=np.uint8)

    def close(self) -> None:
        """Let go of the file; the next call opens it again."""
        if self._capture is not None:
            self._capture.release()
        self._capture, self._next = None, 0

    def _open(self, place: str) -> cv2.VideoCapture:
        if self._capture is not None:
            return self._capture
        if not _looks_like_video(self.path):
            raise InputFault(self.path, place, "not a video file (AVI, MP4, MOV, MKV, WebM, MPEG)",
                             "give one, or write the frames as images")
        os.environ.setdefault("OPENCV_FFMPEG_LOGLEVEL", "-8")  # quiet: what is wrong is told once, in our words
        capture = cv2.VideoCapture(str(self.path), cv2.CAP_FFMPEG)
        size = [capture.get(key) for key in (cv2.CAP_PROP_FRAME_WIDTH, cv2.CAP_PROP_FRAME_HEIGHT)]
        if not capture.isOpened() or not 0 < size[0] * size[1] <= MOST_PIXELS:
            capture.release()
            raise InputFault(self.path, place, "the video cannot be opened", "write the frames as images")
        self._capture = capture
        return capture


def _looks_like_video(path: Path) -> bool:
    """Whether a file starts as a video container does; a play list, which may name files elsewhere, does not."""
    try:
        with open(path, "rb") as file:
            start = file.read(12)
    except (OSError, ValueError):
        return False
    return (
        (start[:4] == b"RIFF" and start[8:12] == b"AVI ")
        or start[4:8] in (b"ftyp", b"moov", b"mdat", b"free", b"skip", b"wide")
        or start[:4] in (b"\x1a\x45\xdf\xa3", b"\x00\x00\x01\xba", b"\x00\x00\x01\xb3")
    )
