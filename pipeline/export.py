"""The plan handed over: as CSV and JSON for a controller's program, and joints over time for a physics model.

plan.schema.json, which comes with the package, says what every column is; plan.csv has the keys of one of its picks.
"""

import json
from collections.abc import Iterator
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np

from cameras.faults import InputFault
from cameras.written import written_whole
from pipeline.replay import Run, Setting
from pipeline.tables import FILE_UNITS, degrees, write_rows
from pipeline.trajectory import sampled
from pipeline.trip import Pick

OF_PICK = ("decided", "there", "release_start", "release_end")
SCHEMA = "plan.schema.json"
LEAST_PERIOD_S, MOST_PERIOD_S = 0.0005, 1.0
MOST_SAMPLES = 20_000_000
TRAJECTORY = "time_s,j1_deg,j2_deg,j3_mm,j4_deg,x_mm,y_mm,z_mm,yaw_deg,belt_mm,carried_part_no"


def write_export(out: Path, setting: Setting, run: Run, period_s: float) -> list[Path]:
    """Write plan.csv, plan.json, trajectory.csv and the schema; their paths. Raises InputFault for a period."""
    check_period(period_s, run)
    plan = plan_of(setting, run)
    paths = [out / name for name in ("plan.csv", "plan.json", SCHEMA, "trajectory.csv")]
    with written_whole(paths[0]) as part:
        columns = list(schema()["$defs"]["pick"]["properties"])
        write_rows(part, ",".join(columns), ([pick[name] for name in columns] for pick in plan["picks"]))
    with written_whole(paths[1]) as part:
        part.write_text(json.dumps(plan, indent=1, ensure_ascii=False, allow_nan=False) + "\n", encoding="utf-8")
    with written_whole(paths[2]) as part:
        part.write_text(_schema_text(), encoding="utf-8")
    with written_whole(paths[3]) as part:
        _write_trajectory(part, run, period_s)
    return paths


def check_period(period_s: float, run: Run | None = None) -> None:
    """Raise InputFault for a period out of bounds, or one that makes more rows than a file should have."""
    if not LEAST_PERIOD_S <= period_s <= MOST_PERIOD_S:
        raise InputFault("--period-s", f"{period_s:g}", "will not do", f"give {LEAST_PERIOD_S} to {MOST_PERIOD_S:g} s")
    if run is not None and (run.end_s - run.start_s) / period_s > MOST_SAMPLES:
        raise InputFault("--period-s", f"{period_s:g}", f"makes more than {MOST_SAMPLES} rows", "give a longer period")


def schema() -> dict[str, Any]:
    """The JSON Schema (draft 2020-12) of plan.json."""
    read: dict[str, Any] = json.loads(_schema_text())
    return read


def plan_of(setting: Setting, run: Run) -> dict[str, Any]:
    """The plan as plan.json holds it."""
    cell = setting.cell
    missed = [{"part_no": part.number, "part": part.kind or "unknown", "reason": fate.reason, "detail": fate.detail}
              for part, fate in zip(run.parts, run.fates, strict=True) if fate is not None]  # fmt: skip
    return {
        "kind": "sanderling plan", "format": 1, "cell": cell.name, "order": run.order,
        "start_s": _told(run.start_s), "end_s": _told(run.end_s),
        "clear_mm": cell.motion.clear_height_mm, "travel_mm": cell.motion.travel_mm,
        "home": [_told(value) for value in (run.mover.arm.home * FILE_UNITS).tolist()],
        "picks": [_pick(n, pick, setting, run) for n, pick in enumerate(run.picks, 1)], "missed": missed,
    }  # fmt: skip


def _pick(n: int, pick: Pick, setting: Setting, run: Run) -> dict[str, Any]:
    """One pick, with the keys and in the order of the schema."""
    cycle, arm = pick.cycle, run.mover.grippers[pick.gripper]
    ends = run.mover.joints(cycle, np.array([cycle.grasp_start_s, cycle.grasp_end_s]))
    told: dict[str, Any] = {"pick": n, "part_no": pick.part.number, "part": pick.part.kind}
    told |= {f"{name}_s": _told(getattr(pick if name in OF_PICK else cycle, f"{name}_s"))
             for name in ("decided", "depart", "met", "grasp_start", "grasp_end", "left", "there", "release_start",
                          "release_end")}  # fmt: skip
    told |= {f"{name}_counts": _counts(setting, getattr(cycle, f"{name}_s")) for name in ("grasp_start", "grasp_end")}
    for name, joints in (("grasp_start", ends[0]), ("grasp_end", ends[1]), ("release", pick.place_joints)):
        told |= dict(_posture(name, joints, arm.forward(joints)))
    return told | {"elbow": "left" if arm.elbow_of(ends[0]) else "right",
                   "release_elbow": "left" if arm.elbow_of(pick.place_joints) else "right", "place": pick.place,
                   "slot": pick.slot + 1, "gripper": pick.gripper + 1}


def _posture(name: str, joints: Any, pose: Any) -> Iterator[tuple[str, float]]:
    """Pose of the tool tip and joints, in the units of files."""
    for key, value in zip(("x_mm", "y_mm", "z_mm"), pose[:3].tolist(), strict=True):
        yield f"{name}_{key}", round(value, 4)
    yield f"{name}_yaw_deg", round(float(degrees(pose[3])), 4)
    for key, value in zip(("j1_deg", "j2_deg", "j3_mm", "j4_deg"), (joints * FILE_UNITS).tolist(), strict=True):
        yield f"{name}_{key}", round(value, 6)


def _counts(setting: Setting, time_s: float) -> float | None:
    """What the encoder reads then, rolled over as in the recording; none on a tray."""
    belt = setting.cell.belt
    if belt is None:
        return None
    counts = float(setting.belt.travel_mm(time_s)) / belt.mm_per_count
    return round(counts % belt.counts_modulus if belt.counts_modulus else counts, 2)


def _told(value: float) -> float:
    return round(float(value), 6)


def _write_trajectory(path: Path, run: Run, period_s: float) -> None:
    """Joints, tool tip, belt and what the arm carries, every period_s from the first move to the last."""
    t, joints = sampled(run, period_s)
    poses = run.mover.arm.forward(joints)
    carried = np.zeros(len(t))
    for pick in run.picks:  # in hand from the end of the grasp dwell to the start of the release; the last picked
        first, last = np.searchsorted(t, [pick.cycle.grasp_end_s, pick.release_start_s])
        carried[first:last] = pick.part.number
    poses[:, 3] = degrees(poses[:, 3])
    table = np.column_stack([t, joints * FILE_UNITS, poses, run.mover.belt.travel_mm(t), carried])
    with open(path, "w", newline="", encoding="utf-8") as file:
        file.write(TRAJECTORY + "\n")
        np.savetxt(file, table, fmt=["%.6f"] * 5 + ["%.4f"] * 5 + ["%d"], delimiter=",")


def _schema_text() -> str:
    return files("pipeline").joinpath(SCHEMA).read_text(encoding="utf-8")
