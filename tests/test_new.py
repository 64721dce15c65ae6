"""A cell of one's own: the template loads, whatever its folder is called, and checks well once filled in."""

import shutil
import tempfile
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from some_streams import sanderling

from cameras.camera import load_camera
from cameras.faults import InputFault
from pipeline.cell import load_cell
from pipeline.check import check_cell
from pipeline.new_cell import TABLES, new_cell

NAMES = st.text(st.characters(exclude_characters="/\0", exclude_categories=("Cs",)), min_size=1, max_size=60)


@given(name=NAMES.filter(lambda name: name not in (".", "..") and len(name.encode()) < 200))
@settings(max_examples=60, deadline=None)
def test_the_template_loads_whatever_the_folder_is_called(name: str) -> None:
    with tempfile.TemporaryDirectory() as above:
        new_cell(Path(above) / name)
        cell = load_cell(Path(above) / name / "cell.toml")
        assert cell.name == "".join(c if c.isprintable() else "?" for c in name)


def test_only_what_is_still_to_be_made_fails_the_check(tmp_path: Path) -> None:
    """Calibration and model are missing, with the command that writes each; all else is well."""
    new_cell(tmp_path / "cell")
    verdicts = check_cell(load_cell(tmp_path / "cell" / "cell.toml"))
    assert {one.what for one in verdicts if not one.well} == {"calibration of overhead", "model of lever"}
    assert all("sanderling" in one.found for one in verdicts if not one.well)


def test_filled_in_it_checks_well(tmp_path: Path, demo: Path) -> None:
    """With a plane from touches, and a part taught, by the commands the template names."""
    new_cell(tmp_path / "cell")
    folder = tmp_path / "cell"
    shutil.copy(demo / "calibration" / "touches.csv", folder / "calibration" / "touches.csv")
    text = (folder / "cell.toml").read_text()
    head, _, tail = text.partition("[parts.lever]")
    tail = tail.replace('model = "parts/lever.json"', "# no model yet")
    (folder / "cell.toml").write_text(head + "[parts.lever]" + tail)
    made = sanderling("calibrate", "plane", folder / "calibration" / "touches.csv", "--cell", folder / "cell.toml",
                      "--out", folder / "calibration" / "overhead.json")
    assert made.status == 0, made.err
    load_camera(folder / "calibration" / "overhead.json")
    assert sanderling("check", folder / "cell.toml").status == 0


def test_tables_have_the_columns_that_commands_read(tmp_path: Path) -> None:
    """An empty table is refused for having no rows, never for its columns."""
    new_cell(tmp_path)
    cell = tmp_path / "cell.toml"
    out = tmp_path / "out"
    for words in (["calibrate", "plane", tmp_path / "calibration/touches.csv", "--cell", cell, "--out", out],
                  ["calibrate", "belt", tmp_path / "calibration/belt_touches.csv"],
                  ["fit", tmp_path / "moves.csv", "--cell", cell],
                  ["find", tmp_path / "recording", "--cell", cell, "--out", out]):
        told = sanderling(*words)
        assert told.status == 2
        assert "no column" not in told.err, told.err


def test_nothing_is_overwritten(tmp_path: Path) -> None:
    """Nor is anything written where one file is there already."""
    for name in ("cell.toml", *TABLES):
        folder = tmp_path / name.replace("/", "_")
        (folder / name).parent.mkdir(parents=True)
        (folder / name).write_text("mine")
        told = sanderling("new", folder)
        assert told.status == 2
        assert "is there already" in told.err
        assert [path.read_text() for path in folder.rglob("*") if path.is_file()] == ["mine"]


def test_a_file_in_the_way_is_told(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    for path in (tmp_path / "file", tmp_path / "file" / "below"):
        with pytest.raises(InputFault):
            new_cell(path)
