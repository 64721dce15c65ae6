"""Tools with several grippers: whole runs held to their definition from the files alone, and what a trip may be."""

import itertools
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from checked_run import (
    CLEAR_MM,
    COLUMN_MM,
    FOLLOWED_DEG,
    FOLLOWED_MM,
    STRAIGHT_MM,
    Files,
    apart_deg,
    columns,
    fates,
    limits,
    slots,
    start,
    windows,
)
from some_arms import changed
from some_streams import Stream, belt, scattered
from test_legs import ENDLESS
from test_tray_order import strewn
from test_whole_runs import written

from pipeline.arm import Arm, gripper_arms
from pipeline.cell import CellError
from pipeline.policy import Arrival
from pipeline.replay import replay, replay_trips
from pipeline.study import run

TWO = [[-20.0, 0.0, 0.0], [20.0, 0.0, 0.0]]
FOUR = [[-20.0, -15.0, 0.0], [20.0, -15.0, 90.0], [-20.0, 15.0, 180.0], [20.0, 15.0, -35.0]]
QUICK = {f"arm__{joint}__max_{key}": value for joint, values in {
    "j1": (600.0, 13e3, 9e5), "j2": (780.0, 18e3, 12e5), "j3": (1300.0, 35e3, 3e6), "j4": (2200.0, 40e3, 2e6)}.items()
    for key, value in zip(("speed", "accel", "jerk"), values, strict=True)}  # fmt: skip

CELLS: dict[str, dict[str, object]] = {
    "two": {"tool__grippers": TWO},
    "four": {"tool__grippers": FOUR},
    "a lead and a tool aside": {"tool__grippers": [[-25.0, 5.0, 10.0], [20.0, 0.0, -90.0]], "tool__yaw_deg": 40.0,
                                "tool__offset_mm": [15.0, -8.0], "arm__quill_lead_mm_per_rev": 12.0},
    "a clear height and other senses": {
        "tool__grippers": TWO, "motion__clear_mm": -15.0, "arm__j1__positive": "clockwise",
        "arm__j2__positive": "clockwise", "arm__j4__positive": "counterclockwise"},
    "a keep-out in the way": {"tool__grippers": TWO,
                              "keepouts": [{"name": "post", "top_mm": 300.0,
                                            "polygon_mm": [[350, 120], [380, 120], [380, 150], [350, 150]]}]},
}  # fmt: skip


def crowded(seed: int = 1, number: int = 36, gap_mm: float = 55.0, **changes: object) -> Stream:
    """More parts than the arm can pick one by one."""
    return belt(scattered(seed, number, gap_mm), 28.0, 110.0, **{"places": ENDLESS, **changes})


def tips(files: Files, q: np.ndarray, gripper: int) -> np.ndarray:
    """Tips (n, 4) of a gripper for joints (n, 4) in degrees: the tool frame moved by x, y and turned by yaw."""
    x, y, turn = files.cell["tool"]["grippers"][gripper - 1]
    tool = files.forward(q)
    c, s = np.cos(np.radians(tool[:, 3])), np.sin(np.radians(tool[:, 3]))
    return np.column_stack([tool[:, 0] + c * x - s * y, tool[:, 1] + s * x + c * y, tool[:, 2], tool[:, 3] + turn])


def moves(files: Files) -> list[dict[str, float]]:
    """The picks as numbers."""
    words = ("part", "elbow", "place")
    return [{name: float(value) for name, value in pick.items() if name not in words} for pick in files.picks]


def followed(files: Files, laid: Stream) -> None:
    """Over its dwell each gripper's tip stays on the part as it was laid; at release it is over the slot."""
    for pick, row in zip(moves(files), files.picks, strict=True):
        gripper = int(pick["gripper"])
        k = files.between(pick["grasp_start_s"], pick["grasp_end_s"])
        travel, unsure = files.travel(files.t[k])
        made = tips(files, files.q[k], gripper)
        off = np.array([np.hypot(*(made[:, :2] - (one.x_mm, one.y_mm) - travel[:, None] * files.heading).T) - 2 * unsure
                        for one in laid.laid])
        part = laid.laid[int(off.max(axis=1).argmin())]
        assert len(k)
        assert off.max(axis=1).min() < FOLLOWED_MM
        symmetry = files.cell["parts"][row["part"]].get("symmetry", 1)
        assert apart_deg(made[:, 3], part.yaw_deg, symmetry).max() < FOLLOWED_DEG
        assert np.abs(made[:, 2] - pick["z_mm"]).max() < FOLLOWED_MM
        slot = np.array([pick[f"place_{c}"] for c in ("x_mm", "y_mm", "z_mm", "yaw_deg")])
        made = tips(files, files.q[files.between(pick["release_start_s"], pick["release_end_s"])], gripper)
        assert len(made)
        assert np.abs(made - slot)[:, :3].max() < FOLLOWED_MM
        assert apart_deg(made[:, 3], slot[3]).max() < FOLLOWED_DEG


def straight(files: Files) -> None:
    """Below the clear height only the gripper in use is at work, in the column of its part or slot, and comes down
    straight over the last approach_mm."""
    motion = files.cell["motion"]
    clear = motion.get("clear_mm", motion["travel_mm"])
    low = files.forward(files.q)[:, 2] < clear - CLEAR_MM
    low &= files.t >= float(files.picks[0]["met_s"])
    travel, unsure = files.travel(files.t)
    in_column = np.zeros(len(files.t), bool)
    for pick in moves(files):
        made = tips(files, files.q, int(pick["gripper"]))
        (begun,), _ = files.travel(np.array([pick["grasp_start_s"]]))
        part = np.array([pick["x_mm"], pick["y_mm"]]) + (travel - begun)[:, None] * files.heading
        slot = np.array([pick["place_x_mm"], pick["place_y_mm"]])
        for at, what, z, doubt in ((part, "grasp", pick["z_mm"], 2 * unsure),
                                   (slot, "release", pick["place_z_mm"], 0 * unsure)):
            contact, until = pick[f"{what}_start_s"], pick[f"{what}_end_s"]
            aside = np.hypot(*(made[:, :2] - at).T) - doubt
            # it may rest there until it departs again
            leaves = min((other["met_s"] for other in moves(files) if other["depart_s"] >= until), default=np.inf)
            in_column |= (aside < COLUMN_MM) & (files.t > contact - 1.0) & (files.t < max(until + 1.0, leaves))
            down = (files.t <= contact) & (files.t > contact - 1.0)
            above = down & (made[:, 2] > z + min(10.0, clear - z - CLEAR_MM))
            down &= np.arange(len(down)) > np.flatnonzero(above).max()
            assert aside[down].max(initial=0.0) < STRAIGHT_MM
    assert not (low & ~in_column).any(), files.t[low & ~in_column][:5]


def filled(files: Files) -> None:
    """In the order of release no slot is filled twice before its place is full."""
    for place in files.cell["places"]:
        own = sorted((p["release_start_s"], p["slot"]) for p, row in zip(moves(files), files.picks, strict=True)
                     if row["place"] == place["name"])
        many = place.get("rows", 1) * place.get("columns", 1)
        for first in range(0, len(own), many):
            filling = [slot for _, slot in own[first:first + many]]
            assert len(set(filling)) == len(filling)


def held(files: Files) -> int:
    """No gripper holds two parts; the most that are held together. The arm does one thing at a time."""
    picks, many = moves(files), len(files.cell["tool"]["grippers"])
    dwells = sorted((p[f"{what}_start_s"], p[f"{what}_end_s"]) for p in picks for what in ("grasp", "release"))
    assert all(after[0] >= before[1] for before, after in itertools.pairwise(dwells))
    together = 0
    for pick in picks:
        at = [p for p in picks if p["grasp_start_s"] <= pick["grasp_end_s"] < p["release_end_s"]]
        grippers = [p["gripper"] for p in at]
        assert len(set(grippers)) == len(grippers)
        assert set(grippers) <= set(range(1, many + 1))
        assert pick["decided_s"] <= pick["depart_s"] + 1e-6 or len(at) > 1
        together = max(together, len(at))
    return together


@pytest.mark.parametrize("name", CELLS)
def test_a_run_with_several_grippers_holds_from_its_files(name: str, tmp_path: Path) -> None:
    stream = crowded(**CELLS[name])
    out = written(stream, tmp_path, "arrival")
    files = Files(tmp_path, out)
    found = [line for check in (limits, start, fates, windows, slots) for line in check(files)]
    assert found == []
    assert len(files.picks) > 10
    followed(files, stream)
    straight(files)
    filled(files)
    assert held(files) >= 2
    for side in ("", "place_"):  # joints and pose of each row agree
        q = columns(files.picks, *(f"{side}{j}" for j in ("j1_deg", "j2_deg", "j3_mm", "j4_deg")))
        told = columns(files.picks, *(f"{side}{c}" for c in ("x_mm", "y_mm", "z_mm", "yaw_deg")))
        made = np.vstack([tips(files, q[k:k + 1], int(row["gripper"])) for k, row in enumerate(files.picks)])
        assert np.abs(made - told)[:, :3].max() < 1e-3
        assert apart_deg(made[:, 3], told[:, 3]).max() < 1e-3


@pytest.mark.parametrize("order", ["arrival", "nearest", "lookahead"])
def test_more_is_picked_of_a_crowd_than_by_one_gripper(order: str) -> None:
    picked = [sum(len(run(crowded(seed, 50, 40.0, **QUICK, **more).setting(), order, 6).picks) for seed in (1, 2))
              for more in ({}, {"tool__grippers": [[0.0, 0.0, 0.0]] * 2})]
    assert picked[1] > picked[0]


def test_a_gripper_is_the_tool_frame_moved_and_turned() -> None:
    """By hand: a tool frame turned by 90 degrees has its x along the flange's y."""
    cell = changed(tool__offset_mm=[10.0, 0.0], tool__yaw_deg=90.0, tool__grippers=[[5.0, 2.0, 30.0]])
    (one,) = gripper_arms(cell.arm, cell.tool)
    assert one.offset_mm == pytest.approx((8.0, 5.0))
    assert one.tool_yaw == pytest.approx(np.radians(120.0))
    joints = np.radians([[20.0, 50.0, 0.0, -70.0]])
    tool, tip = Arm(cell.arm, cell.tool).forward(joints)[0], one.forward(joints)[0]
    c, s = np.cos(tool[3]), np.sin(tool[3])
    assert tip == pytest.approx([tool[0] + 5 * c - 2 * s, tool[1] + 5 * s + 2 * c, tool[2], tool[3] + np.radians(30)])
    (alone,) = gripper_arms(changed().arm, changed().tool)
    assert (alone.forward(joints) == Arm(changed().arm, changed().tool).forward(joints)).all()
    with pytest.raises(CellError):
        changed(tool__grippers=[[0.0, 0.0, 0.0]] * 9)


def test_one_gripper_at_the_tool_tip_changes_nothing(tmp_path: Path) -> None:
    """Same bytes but for what names the gripper, of which there is none with one."""
    stream = crowded(number=8)
    plain = written(stream, tmp_path / "plain", "lookahead")
    one = written(replace(stream, changes={**stream.changes, "tool__grippers": [[0.0, 0.0, 0.0]]}), tmp_path / "one",
                  "lookahead")
    for name in ("parts.csv", "picks.csv", "trajectory.csv"):
        assert (plain / name).read_bytes() == (one / name).read_bytes()


def test_the_first_gripper_alone_is_used_where_trips_pick_less() -> None:
    setting = crowded(number=6, **CELLS["two"]).setting()
    single = replay(setting, Arrival(), "arrival", 6)
    doubled = replace(single, picks=single.picks * 2)
    done = replay_trips(setting, (Arrival(),), "arrival", 6, doubled)
    assert done.picks == doubled.picks
    assert "with 2 grippers" in done.notes[-1]
    assert "first one alone" in done.notes[-1]


@pytest.mark.parametrize(("grippers", "number", "apart_mm"), [(TWO, 40, 30.0), (FOUR, 60, 26.0)])
def test_a_tray_is_emptied_in_trips_that_hold_from_their_files(
    grippers: list[list[float]], number: int, apart_mm: float, tmp_path: Path
) -> None:
    stream = strewn(number, apart_mm, tool__grippers=grippers)
    stream = replace(stream, times_s=np.array([0.0, 300.0]), counts=np.zeros(2, int))
    out = written(stream, tmp_path, "lookahead")
    files = Files(tmp_path, out)
    assert [line for check in (limits, start, fates, windows, slots) for line in check(files)] == []
    assert len(files.picks) == number
    followed(files, stream)
    straight(files)
    filled(files)
    assert held(files) >= 2


def test_what_the_first_gripper_cannot_have_another_picks() -> None:
    """One part lies where the first of four would bring the arm too near its stretched pose."""
    setting = strewn(60, 26.0, tool__grippers=FOUR).setting()
    assert len(replay(setting, Arrival(), "arrival", 200).picks) == 59
    done = run(setting, "arrival", 200)
    assert len(done.picks) == 60


def test_a_tray_is_emptied_no_later_than_with_one_gripper() -> None:
    """By each order; and where trips would end later, with the first gripper alone, and a note."""
    for order in ("arrival", "nearest", "lookahead"):
        ends = []
        for grippers in ([[0.0, 0.0, 0.0]], [[0.0, 0.0, 0.0]] * 2):
            done = run(strewn(30, 30.0, tool__grippers=grippers).setting(), order, 200)
            assert len(done.picks) == 30
            ends.append(max(pick.release_end_s for pick in done.picks))
        assert ends[1] < ends[0]
    setting = strewn(20, 30.0, tool__grippers=TWO).setting()
    single = replay(setting, Arrival(), "arrival", 200)
    sooner = replace(single, picks=single.picks[:1] * len(single.picks))
    done = replay_trips(setting, (Arrival(),), "arrival", 200, sooner)
    assert done.picks == sooner.picks
    assert "first one alone" in done.notes[-1]
