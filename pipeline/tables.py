"""What a replay writes: parts.csv, picks.csv, trajectory.csv, summary.json."""

import csv
import json
from collections import Counter
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from cameras.recording import Recording
from pipeline.motion.across import TURNING
from pipeline.replay import Run
from pipeline.trajectory import Samples
from pipeline.trip import Pick

FloatArray = NDArray[np.float64]

PARTS = "part_no,part,side,x_mm,y_mm,yaw_deg,score,first_frame,frames_seen,fate,reason,detail,sigma_mm,sigma_deg,remedy"
PICKS = ("pick,part_no,part,decided_s,grasp_start_s,grasp_end_s,release_start_s,release_end_s,x_mm,y_mm,z_mm,yaw_deg,"
         "j1_deg,j2_deg,j3_mm,j4_deg,elbow,place,slot,place_x_mm,place_y_mm,place_z_mm,place_yaw_deg,place_j1_deg,"
         "place_j2_deg,place_j3_mm,place_j4_deg,depart_s,met_s,left_s,there_s")
TRAJECTORY = "time_s,j1_deg,j2_deg,j3_mm,j4_deg"
FILE_UNITS = np.array([180 / np.pi, 180 / np.pi, 1.0, 180 / np.pi])


def degrees(yaw: ArrayLike) -> FloatArray:
    """Yaw in degrees, in (-180, 180]."""
    turned = np.degrees(np.asarray(yaw, np.float64))
    return np.asarray(-((-turned + 180.0) % 360.0 - 180.0))


def write_rows(path: Path, header: str, rows: Iterable[Sequence[object]]) -> None:
    """A CSV file of one header line and rows."""
    with open(path, "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(header.split(","))
        writer.writerows(rows)


def write_parts(path: Path, run: Run, recording: Recording) -> None:
    """parts.csv: a row for every physical part seen."""
    def row(k: int) -> list[object]:
        part, fate = run.parts[k], run.fates[k]
        return [part.number, part.kind or "unknown", part.side, *_mm(part.xy_mm), f"{degrees(part.yaw_rad):.4f}",
                f"{part.score:.4f}", int(recording.frame[part.first_row]), part.frames_seen,
                "missed" if fate else "picked", fate.reason if fate else "", fate.detail if fate else "",
                f"{part.sigma_mm:.4f}", f"{np.degrees(part.sigma_rad):.4f}",
                fate.remedy if fate else ""]

    write_rows(path, PARTS, (row(k) for k in range(len(run.parts))))


def write_picks(path: Path, run: Run) -> None:
    """picks.csv: a row for every pick, pose and joints at grasp start and at release; which of several grippers."""
    rows = (_pick_row(n, pick, run) for n, pick in enumerate(run.picks, 1))
    if len(run.mover.grippers) == 1:
        write_rows(path, PICKS, rows)
    else:
        told = ([*row, pick.gripper + 1] for row, pick in zip(rows, run.picks, strict=True))
        write_rows(path, f"{PICKS},gripper", told)


def _pick_row(n: int, pick: Pick, run: Run) -> list[object]:
    cycle, arm = pick.cycle, run.mover.grippers[pick.gripper]
    joints = run.mover.joints(cycle, np.array([cycle.grasp_start_s]))[0]
    pose, drop = arm.forward(joints), arm.forward(pick.place_joints)
    times = (pick.decided_s, cycle.grasp_start_s, cycle.grasp_end_s, pick.release_start_s, pick.release_end_s)
    return [n, pick.part.number, pick.part.kind, *_seconds(times), *_mm(pose[:3]), f"{degrees(pose[3]):.4f}",
            *_joints(joints), "left" if arm.elbow_of(joints) else "right", pick.place, pick.slot + 1, *_mm(drop[:3]),
            f"{degrees(drop[3]):.4f}", *_joints(pick.place_joints),
            *_seconds((cycle.depart_s, cycle.met_s, cycle.left_s, pick.there_s))]


def write_trajectory(path: Path, run: Run) -> None:
    """trajectory.csv: joints every 4 ms from the first move to the last."""
    with open(path, "w", newline="", encoding="utf-8") as file:
        file.write(TRAJECTORY + "\n")
        for t, joints in Samples(run).pieces():
            np.savetxt(file, np.column_stack([t, joints * FILE_UNITS]), fmt=("%.3f", *4 * ("%.6f",)), delimiter=",")


def summary(run: Run, horizon: int, find_s: Sequence[float], more: dict[str, Any] | None = None) -> dict[str, Any]:
    """What summary.json holds."""
    missed = Counter(fate.reason for fate in run.fates if fate)
    duration = run.end_s - run.start_s
    moving = sum(pick.busy_s for pick in run.picks)
    moving += sum(way.end_s - way.depart_s for way in run.waits)
    travel = joint_travel(run)
    return {
        "parts_seen": len(run.parts),
        "picked": len(run.picks),
        "missed": dict(sorted(missed.items())),
        "duration_s": round(duration, 4),
        "picks_per_min": round(60 * len(run.picks) / duration, 4) if duration > 0 else 0.0,
        "arm_busy": round(min(moving / duration, 1.0), 4) if duration > 0 else 0.0,
        "joint_travel_deg": round(float(np.degrees(travel.sum())), 3),
        "joint_travel_deg_per_pick": round(float(np.degrees(travel.sum())) / max(len(run.picks), 1), 3),
        "order": run.order,
        "horizon": horizon,
        "decide_ms": _spread(run.decide_s),
        "find_ms": _spread(find_s),
        "notes": list(run.notes),
        **(more or {}),
    }


def joint_travel(run: Run) -> FloatArray:
    """(3,) rad that J1, J2 and J4 cover in all, back and forth counted."""
    travel = np.zeros(3)
    for pick in run.picks:
        cycle = pick.cycle
        travel += [out.travel() + back.travel() for out, back in zip(cycle.out, cycle.back, strict=True)]
        t = np.linspace(cycle.met_s, cycle.left_s, 9)
        travel += np.abs(np.diff(run.mover.joints_on(cycle.hold, t)[:, TURNING], axis=0)).sum(axis=0)
    set_downs = (pick.set_down.way for pick in run.picks if pick.set_down)
    for way in (*run.waits, *set_downs, *([run.home] if run.home else [])):
        travel += [curve.travel() for curve in way.across]
    return travel


def write_summary(path: Path, values: dict[str, Any]) -> None:
    """summary.json."""
    path.write_text(json.dumps(values, indent=2, ensure_ascii=False, allow_nan=False) + "\n", encoding="utf-8")


def _spread(seconds: Sequence[float]) -> dict[str, float]:
    if not len(seconds):
        return {"median": 0.0, "max": 0.0}
    return {"median": round(1e3 * float(np.median(seconds)), 3), "max": round(1e3 * float(np.max(seconds)), 3)}


def _mm(values: ArrayLike) -> list[str]:
    return [f"{value:.4f}" for value in np.asarray(values).tolist()]


def _joints(joints: FloatArray) -> list[str]:
    return [f"{value:.6f}" for value in (joints * FILE_UNITS).tolist()]


def _seconds(times: Sequence[float]) -> list[str]:
    return [f"{value:.6f}" for value in times]
