"""The cell file: what is read, what is refused, and in which words."""

import re
import tomllib
from collections.abc import Callable
from copy import deepcopy
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from some_arms import PLAIN, changed, written_cell

from cameras.faults import InputFault
from pipeline.cell import Cell, CellError, cell_from, load_cell
from pipeline.places import Filling, Place

TRAY = {"name": "tray", "origin_mm": [0.0, 0.0, 0.0]}


def refused(**values: object) -> list[InputFault]:
    with pytest.raises(CellError) as error:
        changed(**values)
    return list(error.value.faults)


@pytest.mark.parametrize(
    ("change", "place", "fault", "remedy"),
    [
        ({"motion__travel_mn": 1.0}, "motion.travel_mn", "unknown key", "travel_mm"),
        ({"arm__j2__max_sped": 1.0}, "arm.j2.max_sped", "unknown key", "max_speed"),
        ({"parts__lever__symetry": 2}, "parts.lever.symetry", "unknown key", "symmetry"),
        ({"parts__lever__grips": [{"ofset_mm": []}]}, "parts.lever.grips.0.ofset_mm", "unknown key", "offset_mm"),
        ({"places": [{**TRAY, "row": 1}]}, "places.0.row", "unknown key", "rows"),
        ({"belts": {}}, "belts", "unknown key", "belt"),
        ({"file": "x"}, "file", "unknown key", "remove"),
        ({"arm__link1_mm": None}, "arm.link1_mm", "missing", "add it"),
        ({"motion": None}, "motion", "missing", "add it"),
        ({"arm__j1__max_speed": -1.0}, "arm.j1.max_speed", "-1.0", "greater than 0"),
        ({"arm__j1__max_accel": 0.0}, "arm.j1.max_accel", "0.0", "greater than 0"),
        ({"motion__grasp_s": -0.1}, "motion.grasp_s", "-0.1", "greater than or equal to 0"),
        ({"arm__j1__min": 131.0}, "arm.j1", "min 131 is not below max 130", "swap"),
        ({"belt__window_mm": [150.0, -150.0]}, "belt", "window_mm", ""),
        ({"belt__mm_per_count": 0.0}, "belt", "mm_per_count is 0", "calibrate belt"),
        ({"belt__counts_modulus": 1}, "belt.counts_modulus", "1", ""),
        ({"belt__counts_modulus": 65536.5}, "belt.counts_modulus", "65536.5", ""),
        ({"arm__link1_mm": "250"}, "arm.link1_mm", "'250'", "number"),
        ({"arm__link1_mm": True}, "arm.link1_mm", "True", "number"),
        ({"arm__link1_mm": float("nan")}, "arm.link1_mm", "nan", "finite"),
        ({"arm__link1_mm": float("inf")}, "arm.link1_mm", "inf", "finite"),
        ({"arm__home": [140.0, 90.0, 20.0, 0.0]}, "arm", "home puts J1 at 140, outside -130 to 130", "home inside"),
        ({"arm__home": [0.0, 90.0, 20.0]}, "arm.home.3", "missing", "add it"),
        ({"arm__j3__positive": "clockwise"}, "arm", "j3.positive is clockwise", "up or down"),
        ({"arm__j1__positive": "left"}, "arm.j1.positive", "'left'", "counterclockwise"),
        ({"parts__lever__places": ["trya"]}, "", "'trya', which is not a place", "'tray'"),
        ({"parts__lever__places": []}, "parts.lever.places", "[]", "at least 1"),
        ({"parts__lever__symmetry": 0}, "parts.lever.symmetry", "0", ""),
        ({"parts__lever__symmetry": "square"}, "parts.lever.symmetry", "'square'", ""),
        ({"parts__lever__weight": 0.0}, "parts.lever.weight", "0.0", "greater than 0"),
        ({"motion__clear_mm": 10.0}, "motion", "clear_mm is above travel_mm", ""),
        ({"motion__singularity_deg": 90.0}, "motion.singularity_deg", "90", "less than 90"),
        ({"order__horizon": 0}, "order.horizon", "0", ""),
        ({"order__objective": "speed"}, "order.objective", "'speed'", "picks"),
        ({"places": [{**TRAY, "columns": 3}]}, "places.0", "pitch of 0", "distance"),
        ({"places": [TRAY, TRAY]}, "", "two places are named 'tray'", "rename"),
        ({"cameras": [{"name": "a"}, {"name": "a"}]}, "", "two cameras are named 'a'", "rename"),
        ({"keepouts": [{"polygon_mm": [[0.0, 0.0]], "top_mm": 1.0}]}, "keepouts.0.polygon_mm", "", "at least 3"),
        ({"format": 2}, "format", "2", ""),
    ],
)  # fmt: skip
def test_what_is_wrong_is_named_once_with_its_place_and_remedy(change: dict[str, object], place: str, fault: str,
                                                               remedy: str) -> None:
    (only,) = refused(**change)
    assert (only.file, only.place) == ("cell.toml", place)
    assert fault in only.fault
    assert only.remedy
    assert remedy in only.remedy
    assert "\n" not in only.line


def test_each_fault_has_its_own_line() -> None:
    found = refused(arm__link1_mm=-1.0, motion__travel_mn=1.0, tool__length_mm="long", arm__j4__max_speed=0.0)
    assert sorted(fault.place for fault in found) == [
        "arm.j4.max_speed", "arm.link1_mm", "motion.travel_mn", "tool.length_mm"]


@pytest.mark.parametrize(
    ("text", "fault"),
    [("", "missing"), ("format = 1\nname = ", "not a TOML file"), ("[arm]\n[arm]\n", "not a TOML file"),
     ("x = 1979-05-27", "unknown key"), ("\x00", "not a TOML file")],
)  # fmt: skip
def test_files_that_are_no_cell(tmp_path: Path, text: str, fault: str) -> None:
    path = tmp_path / "cell.toml"
    path.write_text(text)
    with pytest.raises(CellError, match=fault):
        load_cell(path)


def test_a_file_that_is_not_there_or_not_text(tmp_path: Path) -> None:
    with pytest.raises(CellError, match="no such file"):
        load_cell(tmp_path / "cell.toml")
    (tmp_path / "cell.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(CellError, match="not a TOML file"):
        load_cell(tmp_path / "cell.toml")
    with pytest.raises(CellError):
        load_cell(tmp_path)


def test_a_byte_order_mark_is_read_over(tmp_path: Path) -> None:
    path = written_cell(tmp_path)
    path.write_text("\ufeff" + path.read_text(), encoding="utf-8")
    assert load_cell(path).name == "plain"


def test_control_characters_of_a_file_reach_no_terminal() -> None:
    (fault,) = refused(**{"arm__\x1b[2J\x07": 1.0})
    assert fault.line.isprintable()


def test_defaults_are_those_of_the_format() -> None:
    """Every section but arm, tool and motion may be left out."""
    cell = cell_from({key: PLAIN[key] for key in ("arm", "tool", "motion")})
    assert (cell.belt, cell.parts, cell.places, cell.cameras) == (None, {}, (), ())
    assert cell.motion.clear_height_mm == cell.motion.travel_mm
    assert (cell.motion.approach_mm, cell.motion.grasp_s, cell.motion.release_s) == (10.0, 0.06, 0.05)
    assert (cell.order.policy, cell.order.horizon, cell.order.objective) == ("lookahead", 12, "picks")
    assert cell.camera().latency_s == 0.0
    assert cell.surface_mm == 0.0


def test_a_cell_is_frozen() -> None:
    with pytest.raises(ValueError, match="frozen"):
        changed().motion.travel_mm = 5.0  # type: ignore[misc]


def test_a_camera_that_is_not_described() -> None:
    with pytest.raises(InputFault, match="no camera named 'left'"):
        changed(cameras=[{"name": "right"}]).camera("left")


def _keys(table: dict[str, Any], path: tuple[str, ...] = ()) -> list[tuple[str, ...]]:
    return [found for key, value in table.items()
            for found in [(*path, key), *(_keys(value, (*path, key)) if isinstance(value, dict) else [])]]


VALUES = st.one_of(
    st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=8), st.dates(),
    st.recursive(st.floats() | st.text(max_size=3), lambda inner: st.lists(inner, max_size=4)
                 | st.dictionaries(st.text("abcxyz_", max_size=5), inner, max_size=3), max_leaves=6),
)  # fmt: skip


@settings(max_examples=250, deadline=None)
@given(st.lists(st.tuples(st.sampled_from(_keys(PLAIN)), VALUES), min_size=1, max_size=4))
def test_any_value_at_any_key_gives_a_cell_or_its_faults(changes: list[tuple[tuple[str, ...], Any]]) -> None:
    raw = deepcopy(PLAIN)
    for (*path, last), value in changes:
        table = raw
        for step in path:
            table = table.get(step) if isinstance(table, dict) else None
        if isinstance(table, dict):
            table[last] = value
    found = faults_of(lambda: cell_from(raw))
    assert all(re.fullmatch(r"cell\.toml.*: .+; .+", fault.line) for fault in found)
    assert len({fault.place for fault in found}) == len(found)


def faults_of(read: Callable[[], Cell]) -> tuple[InputFault, ...]:
    """None of them where it is a cell; any other exception than CellError passes."""
    try:
        read()
    except CellError as error:
        return error.faults
    return ()


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.data())
def test_a_file_cut_and_stirred_raises_nothing_else(tmp_path: Path, data: st.DataObject) -> None:
    path = written_cell(tmp_path)
    text = bytearray(path.read_bytes())
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, len(text) - 1))
        text[at:at + data.draw(st.integers(0, 6))] = data.draw(st.binary(max_size=6))
    path.write_bytes(text)
    assert all("\n" not in fault.line for fault in faults_of(lambda: load_cell(path)))


def test_slots_lie_along_the_rows_then_row_after_row() -> None:
    """Columns along yaw, rows a quarter turn to its left; the slots' yaw is added to that of the rows."""
    cell = changed(places=[{"name": "tray", "origin_mm": [10.0, 20.0, 5.0], "yaw_deg": 90.0, "slot_yaw_deg": 30.0,
                            "columns": 2, "rows": 2, "pitch_mm": [10.0, 3.0]}])
    place = Place.of(cell.places[0])
    assert place.slots_mm == pytest.approx(np.array([[10, 20, 5], [10, 30, 5], [7, 20, 5], [7, 30, 5]]), abs=1e-9)
    assert np.degrees(place.yaw) == pytest.approx(120)


@pytest.mark.parametrize("endless", [False, True])
def test_a_full_place_stays_full_unless_it_is_endless(endless: bool) -> None:
    place = Place.of(changed(places=[{"name": "tray", "origin_mm": [0.0, 0.0, 0.0], "columns": 2,
                                      "pitch_mm": [5.0, 0.0], "endless": endless}]).places[0])
    filling, slots = Filling((place,)), []
    for _ in range(3):
        slots.append(filling.next_slot("tray"))
        if slots[-1] is not None:
            filling.fill("tray")
    assert slots == [0, 1, 0 if endless else None]


def test_what_is_written_for_tests_is_the_same_cell(tmp_path: Path) -> None:
    """The tests' own writer and the tables in memory agree."""
    assert load_cell(written_cell(tmp_path)) == cell_from(tomllib.loads(written_cell(tmp_path).read_text()),
                                                          tmp_path / "cell.toml")
