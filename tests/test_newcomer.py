"""Slips of a first day: each ends in one line that says what to do, or is told as a doubt."""

import json
from collections.abc import Callable
from pathlib import Path

import cv2
import numpy as np
import pytest
from some_arms import written_cell
from some_streams import Laid, belt, sanderling, scattered


@pytest.fixture
def stream(tmp_path: Path) -> Path:
    """A sound recording of one part, as files."""
    return belt([Laid(280.0, -450.0)], 8.0).written(tmp_path / "stream")


def rewritten(name: str, change: Callable[[str], str]) -> Callable[[Path], None]:
    def write(folder: Path) -> None:
        (folder / name).write_text(change((folder / name).read_text()))

    return write


SLIPS = {
    "semicolons": (rewritten("frames.csv", lambda text: text.replace(",", ";")), "save it with commas between columns"),
    "decimal commas": (rewritten("frames.csv", lambda text: text.replace(".1", ",1")), "with points in numbers"),
    "decimal comma in the cell": (rewritten("cell.toml", lambda text: text + "[tray]\nsurface_mm = 1,5\n"),
                                  "correct the line: points in numbers"),
    "no counts": (rewritten("frames.csv", lambda text: text.replace(",counts", "")), "no column counts"),
}  # fmt: skip


@pytest.mark.parametrize("slip", SLIPS)
def test_a_slip_in_a_file_is_one_line(stream: Path, slip: str) -> None:
    change, told = SLIPS[slip]
    change(stream)
    ended = sanderling("replay", stream, "--cell", stream / "cell.toml", "--located", stream / "located.csv", "--out",
                       stream / "out")  # fmt: skip
    assert ended.status == 2
    assert len(ended.err.splitlines()) == 1
    assert told in ended.err


def test_radians_are_told_from_degrees(tmp_path: Path) -> None:
    """J1 within 2.3 and J2 within 2.5 of what?"""
    limits = {f"arm__j{n}__{edge}": sign * reach for n, reach in ((1, 2.3), (2, 2.5))
              for edge, sign in (("min", -1), ("max", 1))}  # fmt: skip
    ended = sanderling("check", written_cell(tmp_path, **limits, arm__home=[0.0, 1.57, 20.0, 0.0]))
    assert ended.status == 2
    assert "write joints in degrees, not in radians" in ended.err
    assert len(ended.err.splitlines()) == 1


@pytest.mark.parametrize(("recording", "cell", "told"), [
    ("frames.csv", "cell.toml", "give the folder that holds frames.csv"), (".", ".", "give the cell file in it"),
])  # fmt: skip
def test_a_file_for_a_folder_and_a_folder_for_a_file(stream: Path, recording: str, cell: str, told: str) -> None:
    ended = sanderling("replay", stream / recording, "--cell", stream / cell, "--out", stream / "out")
    assert ended.status == 2
    assert told in ended.err
    assert len(ended.err.splitlines()) == 1


def test_counts_that_never_change_are_doubted(stream: Path) -> None:
    """On the terminal, in summary.json and in the report."""
    lines = (stream / "frames.csv").read_text().splitlines()
    still = [line.rsplit(",", 1)[0] + ",0" for line in lines[1:]]
    (stream / "frames.csv").write_text("\n".join([lines[0], *still]) + "\n")
    ended = sanderling("replay", stream, "--cell", stream / "cell.toml", "--located", stream / "located.csv", "--out",
                       stream / "out")  # fmt: skip
    assert ended.status == 0, ended.err
    told = "the counts stay at 0 over all 80 frames"
    assert told in ended.out
    assert told in json.loads((stream / "out/summary.json").read_text())["drift"][0]
    assert told in (stream / "out/report.html").read_text()


@pytest.mark.parametrize(("heading", "doubted"), [(90.0, False), (270.0, True), (0.0, True)])
def test_a_belt_said_to_run_another_way_is_doubted(tmp_path: Path, heading: float, doubted: bool) -> None:
    """Parts are then not seen again where they should be; as it runs, nothing is doubted."""
    folder = belt(scattered(2, 12, 60.0), 16.0).written(tmp_path / "stream")
    text = (folder / "cell.toml").read_text()
    (folder / "cell.toml").write_text(text.replace('"heading_deg" = 90.0', f'"heading_deg" = {heading}'))
    assert f'"heading_deg" = {heading}' in (folder / "cell.toml").read_text()
    ended = sanderling("replay", folder, "--cell", folder / "cell.toml", "--located", folder / "located.csv", "--out",
                       folder / "out")  # fmt: skip
    assert ended.status == 0, ended.err
    assert ("recheck" in ended.out) == doubted


def test_board_images_may_be_given_by_their_folder(tmp_path: Path) -> None:
    """A shell of another system leaves `*.png` as it is; a folder without images is told."""
    (tmp_path / "lens").mkdir()
    words = ["calibrate", "lens", tmp_path / "lens", "--square-mm", 20, "--out", tmp_path / "lens.json"]
    ended = sanderling(*words)
    assert ended.status == 2
    assert "no images in this folder" in ended.err
    for k in range(3):
        cv2.imwrite(str(tmp_path / "lens" / f"{k}.png"), np.full((120, 160), 90, np.uint8))
    ended = sanderling(*words, "--board", "8x6")
    assert "the board was found in 0, 3 are the least" in ended.err


@pytest.mark.parametrize("given", ["belt-speed=0,8:1,4:7", "belt-speed=fast", "horizon=1..3"])
def test_words_where_a_sweep_takes_numbers(stream: Path, given: str) -> None:
    ended = sanderling("sweep", stream, "--cell", stream / "cell.toml", "--located", "located.csv", "--set", given,
                       "--out", stream / "out")  # fmt: skip
    assert ended.status == 2
    assert "is not a number" in ended.err
    assert not (stream / "out").exists()


def test_points_that_fail_alike_are_told_once(tmp_path: Path) -> None:
    """A sweep over the speed of a belt that a tray has not."""
    from some_cases import still

    folder = still().written(tmp_path)
    ended = sanderling("sweep", folder, "--cell", folder / "cell.toml", "--located", "located.csv", "--jobs", 1,
                       "--set", "belt-speed=1,2,3", "--out", tmp_path / "out")  # fmt: skip
    assert ended.status == 1
    assert ended.err.splitlines() == [
        "failed: belt-speed 1 and 2 more: --set: belt-speed: the cell has no belt; change arrival-rate: trays then "
        "come faster"]
