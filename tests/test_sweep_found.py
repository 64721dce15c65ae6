"""What was found in images is kept beside a sweep, and found anew when anything that went in has changed."""

import shutil
from collections.abc import Callable, Iterator
from pathlib import Path

import cv2
import numpy as np
import pytest
from some_cases import case, still
from some_streams import sanderling

from cameras.recording import read_recording
from cameras.sightings import Sightings
from pipeline.cell import MOST_ON_TRAY, load_cell
from pipeline.sweep import found
from pipeline.sweep.find import most_together
from pipeline.sweep.found import Found, found_key
from pipeline.sweep.points import Point
from pipeline.sweep.run import changed


@pytest.fixture
def two(demo: Path, tmp_path: Path) -> Path:
    """Two frames of the demo, with its cell, calibration and parts."""
    folder = tmp_path / "recording"
    shutil.copytree(demo / "calibration", folder / "calibration", ignore=shutil.ignore_patterns("*.png", "lens"))
    shutil.copytree(demo / "parts", folder / "parts", ignore=shutil.ignore_patterns("*.png"))
    shutil.copy(demo / "cell.toml", folder)
    lines = (demo / "frames.csv").read_text().splitlines()[:4]
    (folder / "frames.csv").write_text("\n".join(lines) + "\n")
    for line in lines[1:]:
        shutil.copy(demo / line.split(",")[1], folder)
    return folder


def read(folder: Path, kept: Found) -> Sightings:
    return kept(read_recording(folder), load_cell(folder / "cell.toml"))[0]


def test_found_once_is_not_looked_for_again(two: Path, tmp_path: Path) -> None:
    kept, rows = Found(tmp_path / "found"), []

    def counted(these: range) -> Iterator[int]:
        for row in these:
            rows.append(row)
            yield row

    recording, cell = read_recording(two), load_cell(two / "cell.toml")
    first, first_s = kept(recording, cell, counted)
    assert rows == [0, 1, 2]
    again, again_s = kept(recording, cell, counted)
    assert rows == [0, 1, 2]
    assert len(first) > 3
    for name in found.COLUMNS:
        assert np.array_equal(getattr(first, name), getattr(again, name))
    assert [one.tolist() for one in first.outline_mm] == [one.tolist() for one in again.outline_mm]
    assert first_s.tolist() == again_s.tolist()


def taller(cell: Path) -> None:
    cell.write_text(cell.read_text().replace("height_mm = 9.0", "height_mm = 9.5"))


def darker(image: Path) -> None:
    cv2.imwrite(str(image), cv2.imread(str(image), cv2.IMREAD_GRAYSCALE) - 1)


@pytest.mark.parametrize(("name", "change"), [
    ("cell.toml", taller), ("frame_001.jpg", darker),
    ("parts/lever.json", lambda path: path.write_text(path.read_text() + " ")),
    ("calibration/overhead.json", lambda path: path.write_text(path.read_text() + " ")),
])  # fmt: skip
def test_a_change_of_anything_that_goes_in_is_another_key(two: Path, name: str, change: Callable[[Path], None]) -> None:
    before = found_key(read_recording(two), load_cell(two / "cell.toml"))
    change(two / name)
    assert found_key(read_recording(two), load_cell(two / "cell.toml")) != before


def test_what_finding_does_not_see_keeps_the_key(two: Path) -> None:
    cell = load_cell(two / "cell.toml")
    slower = cell.model_copy(update={"motion": cell.motion.model_copy(update={"grasp_s": 0.5})})
    assert found_key(read_recording(two), cell) == found_key(read_recording(two), slower)


@pytest.mark.parametrize("damage", [b"", b"PK\x03\x04", None])
def test_a_damaged_file_is_found_anew(two: Path, tmp_path: Path, damage: bytes | None) -> None:
    kept = Found(tmp_path / "found")
    first = read(two, kept)
    path, = (tmp_path / "found").iterdir()
    if damage is None:
        with np.load(path) as file:
            np.savez(path, **{**dict(file), "row": file["row"] + 1000})
    else:
        path.write_bytes(damage)
    assert np.array_equal(read(two, kept).xy_mm, first.xy_mm)


def test_a_sweep_started_again_reads_no_pixel(two: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    words = ["sweep", two, "--cell", two / "cell.toml", "--set", "order=arrival", "--jobs", 1,
             "--out", tmp_path / "out"]  # fmt: skip
    told = sanderling(*words)
    assert told.status == 0, told.err

    def never(*_: object) -> None:
        raise AssertionError("looked for again")

    monkeypatch.setattr(found, "found_in", never)
    again = sanderling(*words)
    assert again.status == 0, again.err
    assert "1 done before" in again.out


def test_a_tray_is_looked_at_whole_in_a_sweep_too(tmp_path: Path) -> None:
    """A setting that does not name the horizon leaves the cell's own choice alone; one that does, sets it."""
    trays = case(tmp_path, still())
    assert trays.cell.horizon == MOST_ON_TRAY
    assert changed(trays, Point(0, (("grasp-dwell", 0.1),))).cell.horizon == MOST_ON_TRAY
    assert changed(trays, Point(0, (("horizon", 3),))).cell.horizon == 3
    assert most_together([trays]) == 2
