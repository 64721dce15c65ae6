"""Arms and cells for tests: one plain cell to change, and random arms of every sense."""

import json
from copy import deepcopy
from pathlib import Path
from typing import Any

import numpy as np

from pipeline.arm import Arm
from pipeline.cell import Cell, cell_from

PLAIN: dict[str, Any] = {
    "format": 1,
    "name": "plain",
    "arm": {
        "link1_mm": 250.0, "link2_mm": 200.0, "flange_height_mm": 160.0, "link_radius_mm": 40.0,
        "home": [0.0, 90.0, 20.0, 0.0],
        "j1": {"min": -130.0, "max": 130.0, "max_speed": 400.0, "max_accel": 2500.0, "max_jerk": 50000.0},
        "j2": {"min": -145.0, "max": 145.0, "max_speed": 600.0, "max_accel": 4000.0, "max_jerk": 80000.0},
        "j3": {"min": 0.0, "max": 180.0, "max_speed": 900.0, "max_accel": 9000.0, "max_jerk": 180000.0},
        "j4": {"min": -360.0, "max": 360.0, "max_speed": 1500.0, "max_accel": 12000.0, "max_jerk": 240000.0},
    },
    "tool": {"length_mm": 60.0, "footprint_mm": [[[18, -6], [24, -6], [24, 6], [18, 6]],
                                                 [[-24, -6], [-18, -6], [-18, 6], [-24, 6]]]},
    "belt": {"surface_mm": -50.0, "heading_deg": 90.0, "mm_per_count": 0.05, "window_mm": [-150.0, 150.0]},
    "parts": {"lever": {"grasp_mm": 3.0, "height_mm": 6.0, "places": ["tray"]}},
    "places": [{"name": "tray", "origin_mm": [-60.0, 260.0, -40.0], "columns": 3, "rows": 2, "pitch_mm": [40.0, 40.0]}],
    "motion": {"travel_mm": 0.0},
}  # fmt: skip


def changed(**values: Any) -> Cell:
    """The plain cell with values at keys like arm__j1__max; None removes a key."""
    return cell_from(_changed(values))


def written_cell(folder: Path, **values: Any) -> Path:
    """The same as a cell file in a folder."""
    path = folder / "cell.toml"
    path.write_text("".join(f"{key} = {_toml(value)}\n" for key, value in _changed(values).items()))
    return path


def _changed(values: dict[str, Any]) -> dict[str, Any]:
    raw = deepcopy(PLAIN)
    for key, value in values.items():
        *path, last = key.split("__")
        table = raw
        for step in path:
            table = table.setdefault(step, {})
        if value is None:
            table.pop(last, None)
        else:
            table[last] = value
    return raw


def _toml(value: Any) -> str:
    """A value in TOML, tables inline."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(key)} = {_toml(item)}" for key, item in value.items()) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_toml(item) for item in value) + "]"
    return json.dumps(value)


def random_arm(seed: int) -> Arm:
    """An arm with senses, base, tool and quill lead drawn at random."""
    rng = np.random.default_rng(seed)
    turn, lift = ("counterclockwise", "clockwise"), ("up", "down")
    senses = {f"arm__j{n}__positive": (lift if n == 3 else turn)[rng.integers(2)] for n in (1, 2, 3, 4)}
    cell = changed(
        **senses,
        arm__link1_mm=float(rng.uniform(80, 600)), arm__link2_mm=float(rng.uniform(80, 600)),
        arm__base_mm=rng.uniform(-500, 500, 3).tolist(), arm__base_yaw_deg=float(rng.uniform(-180, 180)),
        arm__flange_height_mm=float(rng.uniform(50, 400)), arm__quill_lead_mm_per_rev=float(rng.choice([0, 20, -16])),
        tool__offset_mm=(rng.uniform(-60, 60, 2) * rng.integers(2)).tolist(),
        tool__yaw_deg=float(rng.uniform(-180, 180)), tool__length_mm=float(rng.uniform(0, 150)),
    )  # fmt: skip
    return Arm(cell.arm, cell.tool)


def random_joints(seed: int, number: int) -> np.ndarray:
    """Joints (number, 4) all round, with |sin J2| > 1e-3; rad, mm."""
    rng = np.random.default_rng(seed)
    joints = rng.uniform(-np.pi, np.pi, (number, 4))
    bend = rng.uniform(1.1e-3, np.pi - 1.1e-3, number)
    joints[:, 1] = bend * rng.choice([-1.0, 1.0], number)
    joints[:, 2] = rng.uniform(-50, 200, number)
    return joints
