"""Whole runs through the command line, held to their definition from the files alone."""

import csv
import json
import shutil
from pathlib import Path

import numpy as np
import pytest
from checked_run import faults, read
from some_streams import Stream, belt, sanderling, scattered
from test_legs import ENDLESS


def written(stream: Stream, folder: Path, order: str) -> Path:
    """Files of the stream, replayed; the folder with the outputs."""
    stream.written(folder)
    truth = [(n, part.kind, part.side, part.x_mm, part.y_mm, part.yaw_deg) for n, part in enumerate(stream.laid, 1)]
    with open(folder / "truth.csv", "w", newline="") as file:
        csv.writer(file).writerows([("part_no", "part", "side", "x_mm", "y_mm", "yaw_deg"), *truth])
    ended = sanderling("replay", folder, "--cell", folder / "cell.toml", "--located", folder / "located.csv", "--order",
                       order, "--trajectory", "--out", folder / "out")
    assert ended.status == 0, ended
    return folder / "out"


CELLS: dict[str, dict[str, object]] = {
    "plain": {},
    "a lead and a tool aside": {"arm__quill_lead_mm_per_rev": 12.0, "tool__offset_mm": [15.0, -8.0],
                                "tool__yaw_deg": 40.0},
    "other senses": {"arm__j1__positive": "clockwise", "arm__j2__positive": "clockwise", "arm__j3__positive": "up",
                     "arm__j4__positive": "counterclockwise", "arm__j3__min": -180.0, "arm__j3__max": 0.0,
                     "arm__home": [0.0, 90.0, -20.0, 0.0]},
    "low limits": {"arm__j1__max_jerk": 9000.0, "arm__j2__max_accel": 1500.0, "arm__j4__max_speed": 300.0,
                   "arm__j3__max_speed": 250.0},
    "a keep-out in the way": {"keepouts": [{"name": "post", "top_mm": 300.0,
                                            "polygon_mm": [[350, 120], [380, 120], [380, 150], [350, 150]]}]},
    "half a turn of J4": {"arm__j4__min": -185.0, "arm__j4__max": 185.0},
}  # fmt: skip


def uneven(t: np.ndarray) -> np.ndarray:
    """A belt that goes faster from 6 s on, and stands from 9 to 10.5 s; mm/s."""
    return np.where((t > 9) & (t < 10.5), 0.0, 90.0 + 40 * (t > 6))


@pytest.mark.parametrize("name", CELLS)
def test_runs_hold_to_their_definition(tmp_path: Path, name: str) -> None:
    """Limits, following, window, slots, heights and fates, from the files alone."""
    stream = belt(scattered(21, 10, 80), 17, uneven, places=ENDLESS, **CELLS[name])
    out = written(stream, tmp_path, "lookahead")
    assert faults(tmp_path, out) == []
    assert len(read(out / "picks.csv")) >= 3


def test_same_input_same_bytes(tmp_path: Path) -> None:
    stream = belt(scattered(23, 6, 80), 14, 100.0, places=ENDLESS)
    outs = [written(stream, tmp_path / name / "stream", "lookahead") for name in ("a", "b")]
    for file in ("parts.csv", "picks.csv", "trajectory.csv"):
        assert (outs[0] / file).read_bytes() == (outs[1] / file).read_bytes(), file
    figures = [json.loads((out / "summary.json").read_text()) for out in outs]
    for timed in ("decide_ms", "find_ms"):
        assert all(one.pop(timed) for one in figures)
    assert figures[0] == figures[1]


def test_the_check_sees_what_is_wrong(tmp_path: Path) -> None:
    """Each kind of fault, put into a sound run, is found."""
    stream = belt(scattered(24, 6, 80), 14, 100.0, places=ENDLESS)
    out = written(stream, tmp_path, "arrival")
    assert faults(tmp_path, out) == []
    picks, joints = read(out / "picks.csv"), np.loadtxt(out / "trajectory.csv", delimiter=",", skiprows=1)
    assert len(picks) >= 3
    grip = int(np.searchsorted(joints[:, 0], float(picks[1]["grasp_start_s"]) + 0.02))

    def spoiled(**columns: object) -> list[str]:
        bad = tmp_path / "bad"
        shutil.rmtree(bad, ignore_errors=True)
        shutil.copytree(out, bad)
        if "q" in columns:
            np.savetxt(bad / "trajectory.csv", columns.pop("q"), "%.6f", ",", header="t", comments="")
        for table, key in (("picks", "pick_"), ("parts", "part_")):
            rows = read(out / f"{table}.csv")
            rows[1].update({name[5:]: str(value) for name, value in columns.items() if name.startswith(key)})
            with open(bad / f"{table}.csv", "w", newline="") as file:
                writer = csv.DictWriter(file, rows[0])
                writer.writeheader()
                writer.writerows(rows)
        return faults(tmp_path, bad)

    def moved(row: slice | int, column: int, by: float) -> np.ndarray:
        q = joints.copy()
        q[row, column] += by
        return q

    fast = joints.copy()
    fast[:, 0] = fast[0, 0] + 0.004 * np.arange(len(fast))
    fast[grip:, 1:] = fast[grip, 1:]
    for told_by, fault in (
        (spoiled(q=moved(grip, 4, 0.5)), "max_accel"), (spoiled(q=moved(slice(None), 1, 0.3)), "off the part"),
        (spoiled(q=moved(slice(None), 3, 0.4)), "off the slot"), (spoiled(q=moved(slice(None), 2, 1.0)), "not at home"),
        (spoiled(q=moved(slice(grip, grip + 40), 3, 40.0)), "J3"), (spoiled(q=fast), "off the slot"),
        (spoiled(pick_slot=5), "slot"), (spoiled(pick_place_x_mm=-61.0), "set down at"),
        (spoiled(pick_x_mm=290.0), "joints and pose disagree"), (spoiled(pick_elbow="up"), "elbow"),
        (spoiled(pick_decided_s=0.5), "before the part was known"),
        (spoiled(pick_part_no=picks[0]["part_no"]), "picked 2 times"),
        (spoiled(pick_grasp_end_s=float(picks[1]["grasp_end_s"]) + 0.5), "dwells"),
        (spoiled(part_fate="missed", part_reason="bored"), "bored"), (spoiled(part_side="down"), "wrong side"),
    ):  # fmt: skip
        assert any(fault in line for line in told_by), f"{fault} not in {told_by}"


@pytest.mark.parametrize("name", ["mid-07-stops-rollover-down", "mid-10-poisson", "small-14-clusters-steps"])
def test_streams_kept_beside_replay_without_a_fault(recordings_folder: Path, tmp_path: Path, name: str) -> None:
    """Roll-over, stops, speed steps, clusters, parts upside down, turned cells, a quill whose turning lifts it."""
    stream = recordings_folder / "streams" / name
    ended = sanderling("replay", stream, "--cell", stream / "cell.toml", "--located", stream / "located.csv",
                       "--trajectory", "--order", "arrival", "--out", tmp_path)
    assert ended.status == 0, ended
    assert faults(stream, tmp_path) == []
    assert len(read(tmp_path / "picks.csv")) > 60
