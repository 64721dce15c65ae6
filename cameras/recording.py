"""A recording: frame times and counts, and the images beside them, every one checked before it is trusted."""

import os
import re
from dataclasses import dataclass, field
from pathlib import Path, PureWindowsPath
from typing import NoReturn

import numpy as np
from numpy.typing import ArrayLike, NDArray

from cameras.columns import read_columns
from cameras.faults import InputFault, printable
from cameras.image import Image, read_image, read_image_size
from cameras.video import Video

FRAMES = "frames.csv"
MOST_SECONDS = 1e11  # beyond this a double no longer tells 0.1 ms apart
MOST_COUNTS = 2.0**53


@dataclass(frozen=True)
class Recording:
    """Frames of a recording in order of time; n rows. Arrays are read-only.

    frame (n,): numbers as in frames.csv.  files: n names, relative to `folder`.  times_s (n,), rising.
    counts (n,): unwrapped, the first as it stands.  cameras (n,) str: "" where the file has no such column.
    lines (n,): the line of frames.csv each row stands on.
    """

    folder: Path
    frame: NDArray[np.int64]
    files: tuple[str, ...]
    times_s: NDArray[np.float64]
    counts: NDArray[np.float64]
    cameras: NDArray[np.str_]
    lines: NDArray[np.int64]
    _videos: dict[str, Video] = field(default_factory=dict, repr=False, compare=False)
    _sizes: dict[str, tuple[int, int]] = field(default_factory=dict, repr=False, compare=False)

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for array in (self.frame, self.times_s, self.counts, self.cameras, self.lines):
            array.flags.writeable = False

    def __len__(self) -> int:
        return len(self.frame)

    def row_of(self, frame_numbers: ArrayLike) -> NDArray[np.int64]:
        """Row of each frame number (any shape); -1 where the recording has no such frame."""
        numbers = np.asarray(frame_numbers)
        order = np.argsort(self.frame, kind="stable")
        at = order[np.minimum(np.searchsorted(self.frame[order], numbers), len(order) - 1)]
        return np.asarray(np.where(self.frame[at] == numbers, at, -1), dtype=np.int64)

    def image(self, row: int) -> Image:
        """Image of a row, (h, w) grey or (h, w, 3) blue-green-red uint8, read anew at each call.

        Raises InputFault for an image that is missing, damaged, not 8 bit, or of another size than its camera's first.
        """
        image = self._read(row)
        camera = str(self.cameras[row])
        if camera not in self._sizes:
            self._sizes[camera] = self._first_size(camera)
        height, width = self._sizes[camera]
        if image.shape[:2] != (height, width):
            self._fault(row, f"{image.shape[1]} x {image.shape[0]} pixels where the first image has {width} x {height}",
                        "keep one size a camera")
        return image

    def _read(self, row: int) -> Image:
        video, number = split_video(self.files[row])
        if number is None:
            return read_image(self.folder / self.files[row], self._place(row))
        return self._video(video, row).frame(number, self._place(row))

    def _first_size(self, camera: str) -> tuple[int, int]:
        first = int(np.flatnonzero(self.cameras == camera)[0])
        if split_video(self.files[first])[1] is None:
            return read_image_size(self.folder / self.files[first], self._place(first))
        image = self._read(first)
        return image.shape[0], image.shape[1]

    def _video(self, name: str, row: int) -> Video:
        if name not in self._videos:
            self._videos[name] = Video(self.folder / name, self._place(row))
        return self._videos[name]

    def _place(self, row: int) -> str:
        return f"line {self.lines[row]} of {FRAMES}"

    def _fault(self, row: int, fault: str, remedy: str) -> NoReturn:
        raise InputFault(self.folder / self.files[row], self._place(row), fault, remedy)

    def check_images(self) -> None:
        """Raise InputFault for the first image that leaves the folder or is not there; no pixel is read."""
        root = os.path.realpath(self.folder)
        for row, file in enumerate(self.files):
            name, number = split_video(file)
            if _leaves(root, name):
                self._fault_in_table(row, f"{printable(name)!r} leads out of the recording",
                                     "name a file inside its folder")
            if not os.path.isfile(os.path.join(root, name)):
                self._fault_in_table(row, f"no file {printable(name)!r}", "put it there, or remove the row")
            if number is not None:
                self._video(name, row).check(number, self._place(row))

    def _fault_in_table(self, row: int, fault: str, remedy: str) -> NoReturn:
        raise InputFault(self.folder / FRAMES, f"line {self.lines[row]}, file", fault, remedy)


def read_recording(folder: str | Path, counts_modulus: int | None = None, images: bool = True) -> Recording:
    """Read and check a recording's frames.csv, and that its images are there.

    counts_modulus: where the encoder rolls over; counts are unwrapped on the reading that the belt moves less than half
    of it between frames. images False: the files it names are never touched. Raises InputFault naming file and line.
    """
    path = Path(folder) / FRAMES
    table = read_columns(path, {"frame": int, "file": str, "time_s": float, "counts": float}, {"camera": str})
    lines, frame = table["line"].astype(np.int64), table["frame"].astype(np.int64)
    times_s, counts = table["time_s"].astype(float), table["counts"].astype(float)
    if not len(lines):
        raise InputFault(path, "line 1", "a header and no frames", "give one row an image")
    _check_rows(path, lines, frame, times_s, counts, counts_modulus)
    cameras = table["camera"] if "camera" in table else np.full(len(lines), "", np.str_)
    recording = Recording(Path(folder), frame, tuple(str(file) for file in table["file"]), times_s,
                          unwrapped(counts, counts_modulus), cameras.astype(np.str_), lines)
    if images:
        recording.check_images()
    return recording


def unwrapped(counts: ArrayLike, modulus: int | None) -> NDArray[np.float64]:
    """Counts (n,) with roll-overs undone: steps of less than half the modulus; the first count stays as it stands."""
    counts = np.array(counts, dtype=float)
    if modulus is None:
        return counts
    steps = (np.diff(counts) + modulus / 2) % modulus - modulus / 2
    return np.concatenate([counts[:1], counts[:1] + np.cumsum(steps)])


def split_video(file: str) -> tuple[str, int | None]:
    """`clip.mp4#120` as its file and frame number; an image's name with None."""
    match = re.fullmatch(r"(.+)#([0-9]{1,9})", file, re.DOTALL)
    return (match[1], int(match[2])) if match else (file, None)


def _check_rows(path: Path, lines: NDArray[np.int64], frame: NDArray[np.int64], times_s: NDArray[np.float64],
                counts: NDArray[np.float64], modulus: int | None) -> None:
    order = np.argsort(frame, kind="stable")
    doubled = order[1:][np.diff(frame[order]) == 0]
    not_rising = np.flatnonzero(np.diff(times_s) <= 0) + 1
    outside = np.flatnonzero((counts < 0) | (counts >= modulus)) if modulus is not None else np.zeros(0, int)
    for rows, column, values, fault, remedy in (
        (doubled, "frame", frame, "stands twice", "number every frame once"),
        (not_rising, "time_s", times_s, "is not later than the line before", "sort the rows and correct the times"),
        (np.flatnonzero(np.abs(times_s) > MOST_SECONDS), "time_s", times_s, "is too large", "start nearer to 0"),
        (np.flatnonzero(np.abs(counts) > MOST_COUNTS), "counts", counts, "is too large", "correct the count"),
        (outside, "counts", counts, f"is outside 0 to {modulus}", "correct it, or counts_modulus in the cell file"),
    ):
        if len(rows):
            row = rows.min()
            raise InputFault(path, f"line {lines[row]}, {column}", f"{values[row]:.12g} {fault}", remedy)


def _leaves(root: str, name: str) -> bool:
    """Whether a file name, read as any system would, leads out of the folder `root` (a resolved path)."""
    pure = PureWindowsPath(name)
    if not name.isprintable() or name.startswith(("/", "\\")) or pure.drive or ".." in pure.parts:
        return True
    resolved = os.path.realpath(os.path.join(root, name))
    return os.path.commonpath([root, resolved]) != root
