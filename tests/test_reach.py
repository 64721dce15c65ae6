"""Where the arm can grip: shares, margins, belt speeds, and that every limit has a say in them."""

import csv
from pathlib import Path

import numpy as np
import pytest
from some_arms import changed, written_cell
from typer.testing import CliRunner

from cameras.faults import InputFault
from pipeline.app import app
from pipeline.reach import Reacher, Spots, yaws_of
from pipeline.reach_suggest import suggest

TIGHT = {"arm__j1__min": -60.0, "arm__j1__max": 60.0, "arm__j2__min": -110.0, "arm__j2__max": 110.0,
         "arm__j4__min": -120.0, "arm__j4__max": 120.0, "arm__j3__min": 98.0, "arm__j3__max": 149.0,
         "arm__home": [0.0, 90.0, 120.0, 0.0], "tool__offset_mm": [15.0, 0.0],
         "motion__singularity_deg": 20.0, "motion__limit_margin_deg": 5.0,
         "keepouts": [{"polygon_mm": [[300, 60], [330, 60], [330, 90], [300, 90]], "top_mm": 400.0}]}  # fmt: skip


def window(**values: object) -> Spots:
    return Reacher(changed(**TIGHT | values)).window(step_mm=30.0, angles=24)


@pytest.mark.parametrize(
    "looser",
    [{"arm__j1__min": -90.0}, {"arm__j1__max": 90.0}, {"arm__j2__min": -140.0}, {"arm__j2__max": 140.0},
     {"arm__j4__min": -240.0}, {"arm__j4__max": 240.0}, {"keepouts": []}, {"arm__link_radius_mm": 0.0},
     {"motion__singularity_deg": 0.0}, {"motion__limit_margin_deg": 0.0}],
)  # fmt: skip
def test_every_limit_taken_away_lets_more_be_gripped(looser: dict[str, object]) -> None:
    assert window(**looser).share.sum() > window().share.sum()


@pytest.mark.parametrize(
    ("tight", "looser"),
    [({"arm__j3__min": 100.0}, {"motion__limit_margin_mm": 0.0}), ({"arm__j3__min": 100.0}, {"arm__j3__min": 90.0}),
     ({"arm__j3__max": 147.5}, {"motion__limit_margin_mm": 0.0}), ({"arm__j3__max": 147.5}, {"arm__j3__max": 160.0}),
     ({"arm__j3__min": 100.0}, {"motion__travel_mm": -20.0})],
)  # fmt: skip
def test_the_stroke_has_to_reach_from_the_way_across_down_to_the_grasp(
    tight: dict[str, object], looser: dict[str, object]
) -> None:
    """J3 is at 100 mm on the way across, at 147 mm at the grasp; each has to keep 1 mm from the limits."""
    assert not window(**tight).share.any()
    assert window(**tight | looser).share.any()


@pytest.mark.parametrize("joint", ["j1", "j2", "j4"])
def test_a_slower_joint_follows_a_slower_belt(joint: str) -> None:
    fast, slow = window().follow_mm_s, window(**{f"arm__{joint}__max_speed": 40.0}).follow_mm_s
    seen = np.isfinite(fast)
    assert (slow[seen] <= fast[seen]).all()
    assert (slow[seen] < fast[seen]).any()


def test_the_belt_speed_is_what_the_inverse_needs() -> None:
    """At that speed the fastest joint just reaches its limit, by the difference of two inverses."""
    reacher = Reacher(changed())
    tip = np.array([320.0, 40.0, -47.0, 0.3])
    found = reacher.postures(tip[None])
    step = 1e-4
    along = np.array([0.0, step, 0.0, 0.0])
    speed = np.abs(reacher.arm.inverse(tip + along) - reacher.arm.inverse(tip - along)) / (2 * step)
    shares = (reacher.arm.limits.speed / np.maximum(speed, 1e-12)).min(axis=1)
    assert found.follow_mm_s[0] == pytest.approx(shares, rel=1e-6)


def test_reach_is_the_ring_between_the_folded_and_the_stretched_arm() -> None:
    """Without limits of note, the least |J2| of 20 degrees leaves a ring of known radii (law of cosines)."""
    wide = {f"arm__j{n}__{end}": value for n in (1, 2, 4) for end, value in (("min", -720.0), ("max", 720.0))}
    spots = Reacher(changed(**wide, motion__singularity_deg=20.0)).window(step_mm=7.0, angles=4)
    radius = np.hypot(spots.tip_mm[:, 0], spots.tip_mm[:, 1])
    inner, outer = (np.sqrt(250**2 + 200**2 + 2 * 250 * 200 * np.cos(np.radians(bend))) for bend in (160, 20))
    assert (spots.share[:, 2] == ((radius >= inner) & (radius <= outer))).all()
    assert (spots.share[:, 0] == spots.share[:, 1]).all()


def test_a_point_at_the_middle_of_everything_has_the_margin_worked_out_by_hand() -> None:
    """J2 at 90 degrees with J1 and J4 in their middle: 145 - 90 - 1 degrees are left."""
    reacher = Reacher(changed())
    posture = reacher.postures(reacher.arm.forward(np.array([[0.0, np.pi / 2, 147.0, 0.0]])))
    assert np.degrees(posture.to_limit[0, 0]) == pytest.approx(54.0)
    assert posture.nearest[0, 0] == 1
    assert posture.to_limit_mm[0] == pytest.approx(180 - 147 - 1)


def test_both_turns_of_a_wide_j4_count() -> None:
    """A J4 that runs from 90 to 450 degrees reaches every yaw, only not within the first half turn."""
    half = window(arm__j4__min=90.0, arm__j4__max=180.0, arm__home=[0.0, 90.0, 120.0, 100.0])
    full = window(arm__j4__min=90.0, arm__j4__max=460.0, arm__home=[0.0, 90.0, 120.0, 100.0])
    assert half.share[:, 2].max() < 0.6
    assert full.share[:, 2].max() == 1.0


def test_a_place_out_of_reach_has_no_share() -> None:
    far = [{"name": "tray", "origin_mm": [400.0, 260.0, -40.0]}]
    (slots,) = Reacher(changed(places=far)).slots()
    assert slots.share.tolist() == [[0, 0, 0]]
    assert np.isnan(slots.to_limit).all()


def test_a_suggested_base_serves_the_slots_that_the_present_one_misses() -> None:
    far = [{"name": "tray", "origin_mm": [-60.0, 470.0, -40.0]}]
    found = suggest(changed(places=far), lanes_mm=(-350.0, -250.0))
    assert found.slots == (0, 1)
    moved = Reacher(changed(places=far, arm__base_mm=[*found.base_mm, 0.0]))
    assert moved.slots()[0].share[0, 2] > 0


def test_a_suggested_window_is_gripped_in_all_its_lanes() -> None:
    cell = changed(**TIGHT)
    found = suggest(cell)
    assert found.window_mm is not None
    reacher = Reacher(cell)

    def worst(along: np.ndarray) -> float:
        grid = reacher.grid_mm(along, np.linspace(*found.lanes_mm, 5))
        return float(reacher.spots("window", grid, yaws_of(24)).share[:, 2].min())

    low, high = found.window_mm
    inside = worst(np.linspace(low, high, 9))
    assert inside > 0
    assert worst(np.array([low - 15.0])) < inside
    assert worst(np.array([high + 15.0])) < inside


def test_nothing_to_start_a_suggestion_from() -> None:
    with pytest.raises(InputFault, match="window_mm"):
        suggest(changed(belt=None))


def test_the_command_writes_a_table_and_a_picture(tmp_path: Path) -> None:
    from PIL import Image

    cell, out = written_cell(tmp_path), tmp_path / "out"
    shown = CliRunner().invoke(app, ["reach", "--cell", str(cell), "--out", str(out), "--suggest"])
    assert shown.exit_code == 0, shown.output
    assert "Suggested" in shown.output
    with open(out / "reach.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert {row["where"] for row in rows} == {"window", "tray"}
    assert sum(row["where"] == "tray" for row in rows) == 6
    assert all(0 <= float(row["share"]) <= 1 for row in rows)
    with Image.open(out / "reach.png") as picture:
        assert picture.size[0] > 600


def test_a_tray_has_a_map_without_speeds(tmp_path: Path) -> None:
    cell, out = written_cell(tmp_path, belt=None, tray={"surface_mm": -50.0}), tmp_path / "out"
    shown = CliRunner().invoke(app, ["reach", "--cell", str(cell), "--out", str(out)])
    assert shown.exit_code == 0, shown.output
    with open(out / "reach.csv", newline="") as file:
        assert {row["follow_mm_s"] for row in csv.DictReader(file)} == {""}
