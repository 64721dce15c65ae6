"""Wrong input ends with status 2 and one line that says where and what to do, and leaves nothing behind."""

import json
import re
import shutil
from collections.abc import Callable
from pathlib import Path

import cv2
import numpy as np
import pytest
from some_arms import written_cell
from some_streams import Laid, Told, belt, sanderling, table


@pytest.fixture
def stream(tmp_path: Path) -> Path:
    """A sound recording of one part, as files."""
    return belt([Laid(280.0, -450.0)], 8.0).written(tmp_path / "stream")


def replayed(folder: Path, *more: object) -> Told:
    return sanderling("replay", folder, "--cell", folder / "cell.toml", "--out", folder / "out", "--located",
                      folder / "located.csv", *more)


def edited(path: Path, old: str, new: str) -> None:
    text = path.read_text()
    assert old in text, f"{path.name} holds no {old}"
    path.write_text(text.replace(old, new, 1))


def refused(told: Told, *names: str) -> None:
    """Status 2, and every line on stderr reads file: place: fault; remedy, with these words in one of them."""
    assert told.status == 2, told
    lines = told.err.splitlines()
    assert lines
    assert all(re.fullmatch(r"[^:]+(: [^:]+)?: .+; .+", line) for line in lines), told.err
    assert "Traceback" not in told.err + told.out
    for name in names:
        assert any(name in line for line in lines), f"{name!r} not in {told.err}"


def test_a_sound_stream_is_replayed(stream: Path) -> None:
    told = replayed(stream)
    assert (told.status, told.err) == (0, "")
    assert (stream / "out" / "summary.json").exists()


CELL_FAULTS = {
    "unknown key": ({"motion__travel_mn": 1.0}, ["motion.travel_mn: unknown key; did you mean 'travel_mm'?"]),
    "unknown section": ({"bellt": {}}, ["bellt: unknown key; did you mean 'belt'?"]),
    "negative limit": ({"arm__j2__max_speed": -600.0}, ["arm.j2.max_speed", "greater than 0"]),
    "swapped limits": ({"arm__j1__min": 130.0, "arm__j1__max": -130.0}, ["arm.j1: min 130 is not below", "swap"]),
    "text for a number": ({"arm__link1_mm": "long"}, ["arm.link1_mm: 'long'"]),
    "home outside": ({"arm__home": [140.0, 90.0, 20.0, 0.0]}, ["home puts J1 at 140"]),
    "unknown place": ({"parts__lever__places": ["trai"]}, ["'trai'", "did you mean 'tray'?"]),
    "missing key": ({"arm__link2_mm": None}, ["arm.link2_mm: missing; add it"]),
}  # fmt: skip


@pytest.mark.parametrize("name", CELL_FAULTS)
def test_cell_files(stream: Path, name: str) -> None:
    changes, words = CELL_FAULTS[name]
    written_cell(stream, **changes)
    told = replayed(stream)
    refused(told, "cell.toml", *words)
    assert len(told.err.splitlines()) == 1
    assert not (stream / "out").exists()


def test_nan_in_a_cell_file(stream: Path) -> None:
    edited(stream / "cell.toml", "250.0", "nan")
    refused(replayed(stream), "arm.link1_mm", "finite")


def test_every_fault_of_a_cell_file_has_its_line(stream: Path) -> None:
    written_cell(stream, arm__link1_mm=-1.0, motion__travel_mn=1.0, tool__length_mm="long")
    assert len(replayed(stream).err.splitlines()) == 3


FRAMES_FAULTS: dict[str, tuple[Callable[[Path], object], list[str]]] = {
    "times that fall": (lambda p: edited(p, "0.3000", "0.1000"), ["line 5, time_s", "not later than the line before"]),
    "text for a time": (lambda p: edited(p, "0.3000", "later"), ["line 5, time_s", "'later' is not a number"]),
    "NaN": (lambda p: edited(p, "0.3000", "nan"), ["line 5, time_s", "not finite"]),
    "no frames": (lambda p: p.write_text("frame,file,time_s,counts\n"), ["a header and no frames"]),
    "empty": (lambda p: p.write_text(""), ["empty"]),
    "no such column": (lambda p: edited(p, "counts", "count"), ["line 1", "no column counts"]),
    "not there": (lambda p: p.unlink(), ["no such file"]),
}  # fmt: skip


@pytest.mark.parametrize("name", FRAMES_FAULTS)
def test_frames(stream: Path, name: str) -> None:
    spoil, words = FRAMES_FAULTS[name]
    spoil(stream / "frames.csv")
    refused(replayed(stream), "frames.csv", *words)
    assert not (stream / "out").exists()


LOCATED_FAULTS = {
    "text": ("280.000", "far", ["line 2, x_mm", "'far' is not a number"]),
    "NaN": ("280.000", "nan", ["line 2, x_mm", "not finite"]),
    "unknown part": ("lever", "levre", ["line 2, part", "did you mean 'lever'?"]),
    "unknown side": (",up", ",sideways", ["line 2, side"]),
}


@pytest.mark.parametrize("name", LOCATED_FAULTS)
def test_poses_made_elsewhere(stream: Path, name: str) -> None:
    old, new, words = LOCATED_FAULTS[name]
    edited(stream / "located.csv", old, new)
    refused(replayed(stream), "located.csv", *words)
    assert not (stream / "out").exists()


def test_an_unknown_order(stream: Path) -> None:
    refused(replayed(stream, "--order", "arival"), "order", "'arival'", "arrival")


def test_a_frame_that_is_not_there(stream: Path) -> None:
    told = sanderling("plan", stream, "--frame", 999, "--cell", stream / "cell.toml", "--out", stream / "out",
                      "--located", stream / "located.csv")
    refused(told, "frames.csv", "frame", "999", "from 0 to 79")


def test_no_place_to_write_to(stream: Path) -> None:
    (stream / "out").write_text("a file stands here")
    refused(replayed(stream), "out", "choose another place")
    assert (stream / "out").read_text() == "a file stands here"


def test_both_kinds_of_table_at_once(stream: Path) -> None:
    refused(replayed(stream, "--detections", stream / "located.csv"), "located.csv", "given together with detections")


def test_a_cell_without_parts(stream: Path) -> None:
    written_cell(stream, parts=None)
    refused(replayed(stream), "cell.toml", "parts: missing")


# ---- images, calibrations, models


CAMERA = {"cameras": [{"name": "overhead", "calibration": "overhead.json"}], "parts__lever__model": "lever.json"}


@pytest.fixture(scope="module")
def taught(tmp_path_factory: pytest.TempPathFactory, demo: Path) -> Path:
    """The demo with calibration and models of its own files, and its first two images only."""
    folder = tmp_path_factory.mktemp("taught")
    for name in ("cell.toml", "frame_000.jpg", "frame_001.jpg"):
        shutil.copy(demo / name, folder)
    shutil.copytree(demo / "teach", folder / "teach")
    lines = (demo / "frames.csv").read_text().splitlines()[:3]
    (folder / "frames.csv").write_text("\n".join(lines) + "\n")
    cell = folder / "cell.toml"
    told = sanderling("calibrate", "plane", demo / "calibration" / "touches.csv", "--cell", cell, "--out",
                      folder / "calibration" / "overhead.json", "--image", demo / "frame_000.jpg")
    assert told.status == 0, told
    for line in (demo / "teach" / "teach.csv").read_text().splitlines()[1:]:
        part, image, counts, touch, x, y, yaw = line.split(",")
        told = sanderling("teach", folder / "teach" / image, "--cell", cell, "--part", part, "--tool",
                          f"{x},{y},{yaw}", "--counts", counts, "--touch-counts", touch, "--out",
                          folder / "parts" / f"{part}.json")
        assert told.status == 0, told
    return folder


@pytest.fixture
def images(taught: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(taught, tmp_path / "images"))


def looked_at(folder: Path) -> Told:
    return sanderling("replay", folder, "--cell", folder / "cell.toml", "--out", folder / "out")


def test_a_missing_image(images: Path) -> None:
    (images / "frame_001.jpg").unlink()
    refused(looked_at(images), "frames.csv", "line 3", "frame_001.jpg")
    assert not (images / "out").exists()


def test_a_truncated_image(images: Path) -> None:
    whole = (images / "frame_001.jpg").read_bytes()
    (images / "frame_001.jpg").write_bytes(whole[:len(whole) // 2])
    refused(looked_at(images), "frame_001.jpg", "line 3")
    assert not (images / "out").exists()


def test_an_image_that_is_none(images: Path) -> None:
    (images / "frame_001.jpg").write_text("no image")
    refused(looked_at(images), "frame_001.jpg", "line 3")


def test_an_image_of_another_size(images: Path) -> None:
    cv2.imwrite(str(images / "frame_001.jpg"), np.zeros((20, 30), np.uint8))
    refused(looked_at(images), "frame_001.jpg", "30 x 20")


@pytest.mark.parametrize("path", ["../frame_001.jpg", "/etc/hostname", "..\\frame_001.jpg"])
def test_an_image_path_that_leaves_the_recording(images: Path, path: str) -> None:
    edited(images / "frames.csv", "frame_001.jpg", path)
    refused(looked_at(images), "frames.csv", "line 3, file", "leads out of the recording")


def test_a_missing_model(images: Path) -> None:
    (images / "parts" / "lever.json").unlink()
    refused(looked_at(images), "lever.json", "no such file", "sanderling teach")


@pytest.mark.parametrize("text", ["", "{", "[]", "{}", "nan", '{"kind": 3}', '{"a": ' * 3000])
def test_a_broken_model(images: Path, text: str) -> None:
    (images / "parts" / "lever.json").write_text(text)
    refused(looked_at(images), "lever.json", "teach")


@pytest.mark.parametrize("text", ["", "{", "[]", "{}", '{"kind": 3}'])
def test_a_broken_calibration(images: Path, text: str) -> None:
    (images / "calibration" / "overhead.json").write_text(text)
    refused(looked_at(images), "overhead.json", "sanderling calibrate")


def _emptied(value: object) -> object:
    if isinstance(value, dict):
        return {key: _emptied(item) for key, item in value.items()}
    return [] if isinstance(value, list) else value


def test_a_model_without_its_outline(images: Path) -> None:
    model = images / "parts" / "lever.json"
    model.write_text(json.dumps(_emptied(json.loads(model.read_text()))))
    refused(looked_at(images), "lever.json", "teach")


def test_a_missing_calibration(images: Path) -> None:
    (images / "calibration" / "overhead.json").unlink()
    refused(looked_at(images), "overhead.json", "no such file", "sanderling calibrate")


TOUCHES = "u_px,v_px,counts,x_mm,y_mm,z_mm,touch_counts"
CORNERS = [(100, 100), (900, 120), (880, 700), (120, 680), (500, 400), (300, 250)]


def touches(folder: Path, pixels: list[tuple[int, int]]) -> Told:
    """A plane fitted to marks seen at these pixels, half a millimetre a pixel."""
    path = table(folder / "touches.csv", TOUCHES, [(u, v, 0, 0.5 * u, -0.5 * v, -50, 0) for u, v in pixels])
    return sanderling("calibrate", "plane", path, "--cell", written_cell(folder), "--out", folder / "camera.json")


def test_six_touches_are_a_calibration(tmp_path: Path) -> None:
    told = touches(tmp_path, CORNERS)
    assert told.status == 0, told


def test_a_calibration_with_three_points(tmp_path: Path) -> None:
    refused(touches(tmp_path, CORNERS[:3]), "touches.csv", "3")
    assert not (tmp_path / "camera.json").exists()


def test_a_calibration_with_all_points_on_a_line(tmp_path: Path) -> None:
    refused(touches(tmp_path, [(100 * k, 50 * k) for k in range(1, 8)]), "touches.csv", "line")
    assert not (tmp_path / "camera.json").exists()


@pytest.mark.parametrize(("rows", "word"), [([("a", 0, 0, 0)], ""), ([("a", 0, 0, 0), ("a", "many", 0, 5)], "many")])
def test_belt_touches_that_tell_nothing(tmp_path: Path, rows: list[tuple[object, ...]], word: str) -> None:
    path = table(tmp_path / "belt.csv", "mark,counts,x_mm,y_mm", rows)
    refused(sanderling("calibrate", "belt", path), "belt.csv", word)


def test_teaching_a_part_the_cell_does_not_have(images: Path) -> None:
    told = sanderling("teach", images / "teach" / "lever.png", "--cell", images / "cell.toml", "--part", "levre",
                      "--tool", "0,0,0", "--out", images / "new.json")
    refused(told, "cell.toml", "levre", "lever")
    assert not (images / "new.json").exists()


@pytest.mark.parametrize("tool", ["0,0", "0,0,north", "nan,0,0", ""])
def test_teaching_with_a_tool_pose_that_is_none(images: Path, tool: str) -> None:
    told = sanderling("teach", images / "teach" / "lever.png", "--cell", images / "cell.toml", "--part", "lever",
                      "--tool", tool, "--out", images / "new.json")
    refused(told)
    assert not (images / "new.json").exists()


# ---- the end of a command


def test_interrupted_it_ends_with_130_and_leaves_nothing(stream: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken_off(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("pipeline.tables.Samples", broken_off)
    told = replayed(stream, "--trajectory")
    assert told.status == 130
    assert not list((stream / "out").glob(".*")), "nothing half written"
    assert not (stream / "out" / "trajectory.csv").exists()
