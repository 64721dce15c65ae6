"""What `check` finds in a cell, and how it ends."""

import json
from pathlib import Path

import numpy as np
import pytest
from made_camera import MILD, SIZE, made_camera, made_touches
from some_arms import changed, written_cell
from typer.testing import CliRunner, Result

from cameras.faults import InputFaults
from cameras.lens import Lens
from cameras.plane import fit_plane
from pipeline.app import app
from pipeline.arm import Arm
from pipeline.check import check_cell
from pipeline.move_time import move_time
from pipeline.trade_cycle import ACROSS_MM, LIFT_MM, trade_cycle


def check(path: Path, *more: str) -> Result:
    return CliRunner().invoke(app, ["check", str(path), *more])


def failed(**values: object) -> list[str]:
    return [f"{one.what}: {one.found}" for one in check_cell(changed(**values)) if not one.well]


def test_a_sound_cell_passes(tmp_path: Path) -> None:
    shown = check(written_cell(tmp_path))
    assert shown.exit_code == 0, shown.output
    assert "all" in shown.output.splitlines()[-1]
    assert "25 mm up" in shown.output


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"arm__home": [129.5, 90.0, 20.0, 0.0]}, "home: J1 is 0.50 deg inside its margin"),
        ({"arm__home": [0.0, 90.0, 0.0, 0.0]}, "home: J3 is 1.00 mm inside its margin"),
        ({"keepouts": [{"name": "post", "polygon_mm": [[240, 190], [260, 190], [250, 210]], "top_mm": 300.0}]},
         "inside keep-out post"),
        ({"belt__window_mm": [600.0, 700.0]}, "belt window: 0 %"),
        ({"places": [{"name": "tray", "origin_mm": [340.0, 260.0, 0.0], "columns": 2, "pitch_mm": [60, 0]}]},
         "place tray: 1 of 2 slots served, not 1"),
        ({"motion__travel_mm": -45.0}, "way across: a carried part may meet one that lies by 4.0 mm"),
        ({"parts__lever__model": "lever.json"}, "model of lever: lever.json is not there"),
        ({"cameras": [{"name": "overhead", "calibration": "overhead.json"}]}, "calibration of overhead"),
    ],
)  # fmt: skip
def test_each_check_can_fail_and_says_by_how_much(change: dict[str, object], says: str) -> None:
    assert any(says in one for one in failed(**change)), failed(**change)
    assert not failed()


def test_a_failed_check_ends_with_status_1(tmp_path: Path) -> None:
    shown = check(written_cell(tmp_path, belt__window_mm=[600.0, 700.0]))
    assert shown.exit_code == 1
    assert "FAILED" in shown.output


def test_broken_files_are_faults_of_the_input_all_told_at_once(tmp_path: Path) -> None:
    (tmp_path / "lever.json").write_text("{")
    (tmp_path / "overhead.json").write_text("[]")
    path = written_cell(tmp_path, parts__lever__model="lever.json",
                        cameras=[{"name": "overhead", "calibration": "overhead.json"}])
    faults = check(path).exception
    assert isinstance(faults, InputFaults)
    assert [Path(fault.file).name for fault in faults.faults] == ["overhead.json", "lever.json"]


def test_measured_moves_show_the_cycle_a_second_time(tmp_path: Path) -> None:
    moves = tmp_path / "moves.csv"
    moves.write_text("j1_from,j2_from,j3_from,j4_from,j1_to,j2_to,j3_to,j4_to,time_s\n"
                     + "".join(f"0,0,20,0,{way},0,20,0,{0.3 + way / 200}\n" for way in range(20, 120, 10)))
    shown = check(written_cell(tmp_path), "--moves", str(moves))
    assert shown.exit_code == 0, shown.output
    assert "fitted" in shown.output


@pytest.mark.parametrize(
    "change",
    [{}, {"arm__base_yaw_deg": 70.0, "arm__base_mm": [100.0, -50.0, 20.0]},
     {"arm__quill_lead_mm_per_rev": 20.0, "tool__offset_mm": [12.0, 5.0], "arm__j3__positive": "up"}],
)  # fmt: skip
def test_the_trade_cycle_is_25_300_25(change: dict[str, object]) -> None:
    """The corners lie where the trade's cycle says (common practice, no source), yaw kept, inside the limits."""
    cell = changed(**change)
    arm = Arm(cell.arm, cell.tool)
    cycle = trade_cycle(arm)
    assert cycle is not None
    tips = arm.forward(cycle.corners)
    steps = np.diff(tips, axis=0)
    assert np.hypot(steps[:, 0], steps[:, 1]) == pytest.approx([0, ACROSS_MM, 0], abs=1e-9)
    assert steps[:, 2] == pytest.approx([LIFT_MM, 0, -LIFT_MM], abs=1e-9)
    assert steps[:, 3] == pytest.approx(0, abs=1e-9)
    assert (cycle.corners >= arm.limits.lower).all()
    assert (cycle.corners <= arm.limits.upper).all()
    there = move_time(arm, cycle.corners[:-1], cycle.corners[1:]).sum()
    assert cycle.sequence_s == pytest.approx(2 * there)


def test_an_arm_too_small_has_no_trade_cycle() -> None:
    cell = changed(arm__link1_mm=60.0, arm__link2_mm=60.0)
    assert trade_cycle(Arm(cell.arm, cell.tool)) is None


@pytest.mark.parametrize(("tolerance_mm", "status"), [(1.0, 0), (0.01, 1)])
def test_what_the_map_alone_leaves_open_is_held_against_the_grip(tmp_path: Path, tolerance_mm: float,
                                                                 status: int) -> None:
    camera = made_camera()
    touched = made_touches(camera)
    fitted = fit_plane(touched.pixels, touched.points, Lens(MILD, SIZE))
    (tmp_path / "overhead.json").write_text(json.dumps(fitted.document()))
    parts = {"lever": {"grasp_mm": 3.0, "height_mm": 6.0, "places": ["tray"], "grip_tolerance_mm": tolerance_mm}}
    shown = check(written_cell(tmp_path, cameras=[{"name": "overhead", "calibration": "overhead.json"}], parts=parts,
                               belt__heading_error_deg=0.001))
    assert shown.exit_code == status, shown.output
    assert "not given" in shown.output
    assert "grip of lever" in shown.output
