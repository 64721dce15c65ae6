"""Plans handed over: by the schema that is shipped, and true to the arm and the belt."""

import csv
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from some_cases import still, stream
from some_streams import sanderling

from pipeline.arm import Arm
from pipeline.cell import load_cell
from pipeline.export import schema
from pipeline.tables import FILE_UNITS

TYPES: dict[str, Any] = {"object": dict, "array": list, "string": str, "number": (int, float), "integer": int,
                         "null": type(None)}  # fmt: skip
WORDS = {"$schema", "$defs", "$ref", "title", "description", "type", "const", "enum", "required", "properties",
         "additionalProperties", "items", "minItems", "maxItems", "minimum", "maximum"}  # fmt: skip


def faults(value: Any, rule: dict[str, Any], whole: dict[str, Any], at: str = "$") -> list[str]:
    """What is wrong with a value by a JSON Schema that uses no keyword but WORDS (draft 2020-12)."""
    assert set(rule) <= WORDS, set(rule) - WORDS
    if "$ref" in rule:
        assert rule["$ref"].startswith("#/$defs/")
        return faults(value, whole["$defs"][rule["$ref"].removeprefix("#/$defs/")], whole, at)
    named = rule.get("type", [])
    kinds = [named] if isinstance(named, str) else named
    if kinds and (isinstance(value, bool) or not any(isinstance(value, TYPES[kind]) for kind in kinds)):
        return [f"{at}: no {named}"]
    told = []
    if ("const" in rule and value != rule["const"]) or ("enum" in rule and value not in rule["enum"]):
        told.append(f"{at}: another value")
    if isinstance(value, (int, float)) and not rule.get("minimum", value) <= value <= rule.get("maximum", value):
        told.append(f"{at}: out of bounds")
    if isinstance(value, dict):
        known = rule.get("properties", {})
        told += [f"{at}: no {key}" for key in rule.get("required", []) if key not in value]
        for key in value:
            if key in known:
                told += faults(value[key], known[key], whole, f"{at}.{key}")
            elif not rule.get("additionalProperties", True):
                told.append(f"{at}.{key}: unknown")
    if isinstance(value, list):
        if not rule.get("minItems", 0) <= len(value) <= rule.get("maxItems", len(value)):
            told.append(f"{at}: {len(value)} entries")
        for k, one in enumerate(value if "items" in rule else []):
            told += faults(one, rule["items"], whole, f"{at}[{k}]")
    return told


@pytest.fixture(scope="module")
def exported(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A stream with an encoder that rolls over, exported every 10 ms; some parts are missed."""
    folder = tmp_path_factory.mktemp("exported")
    stream(12, 50.0, 16.0, 150.0, belt__counts_modulus=16384).written(folder)
    told = sanderling("export", folder, "--cell", folder / "cell.toml", "--located", folder / "located.csv", "--order",
                      "arrival", "--period-s", 0.01, "--out", folder / "out")
    assert told.status == 0, told.err
    return folder


@pytest.fixture(scope="module")
def plan(exported: Path) -> dict[str, Any]:
    return json.loads((exported / "out" / "plan.json").read_text())  # type: ignore[no-any-return]


def test_the_plan_keeps_to_the_schema_that_is_shipped(exported: Path, plan: dict[str, Any]) -> None:
    assert json.loads((exported / "out" / "plan.schema.json").read_text()) == schema()
    assert plan["picks"]
    assert plan["missed"]
    assert faults(plan, schema(), schema()) == []


@pytest.mark.parametrize(("path", "value"), [
    (("format",), 2), (("picks", 0, "elbow"), "up"), (("picks", 0, "pick"), 0), (("picks", 0, "grasp_start_s"), "now"),
    (("picks", 0, "more"), 1), (("home",), [1, 2, 3]), (("missed", 0, "reason"), "lazy"), (("picks", 0, "slot"), None),
])  # fmt: skip
def test_the_schema_refuses_what_is_wrong(plan: dict[str, Any], path: tuple[Any, ...], value: Any) -> None:
    broken = json.loads(json.dumps(plan))
    inner = broken
    for step in path[:-1]:
        inner = inner[step]
    inner[path[-1]] = value
    assert len(faults(broken, schema(), schema())) == 1


def test_every_column_is_documented_and_the_table_says_the_same(exported: Path, plan: dict[str, Any]) -> None:
    picks = schema()["$defs"]["pick"]["properties"]
    assert all(len(rule["description"]) > 10 for rule in picks.values())
    with open(exported / "out" / "plan.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert list(rows[0]) == list(picks) == list(plan["picks"][0])
    assert [{key: str(value) for key, value in pick.items()} for pick in plan["picks"]] == rows


def test_poses_are_those_of_the_joints(exported: Path, plan: dict[str, Any]) -> None:
    """Within the last digit that is written."""
    cell = load_cell(exported / "cell.toml")
    arm = Arm(cell.arm, cell.tool)
    for pick in plan["picks"]:
        for when in ("grasp_start", "grasp_end", "release"):
            joints = np.array([pick[f"{when}_{j}"] for j in ("j1_deg", "j2_deg", "j3_mm", "j4_deg")]) / FILE_UNITS
            pose = arm.forward(joints)
            assert pose[:3] == pytest.approx([pick[f"{when}_{axis}_mm"] for axis in "xyz"], abs=2e-4)
            turned = np.degrees(pose[3]) - pick[f"{when}_yaw_deg"]
            assert abs((turned + 180) % 360 - 180) < 2e-4


def test_the_tool_moves_with_the_belt_while_it_grips(exported: Path, plan: dict[str, Any]) -> None:
    """As far as the counts tell, which roll over."""
    belt = load_cell(exported / "cell.toml").belt
    assert belt is not None
    assert belt.counts_modulus
    for pick in plan["picks"]:
        counts = (pick["grasp_end_counts"] - pick["grasp_start_counts"]) % belt.counts_modulus
        assert 0 <= pick["grasp_start_counts"] < belt.counts_modulus
        assert pick["grasp_end_y_mm"] - pick["grasp_start_y_mm"] == pytest.approx(counts * belt.mm_per_count, abs=2e-3)


def test_samples_come_at_the_period_and_pass_through_the_plan(exported: Path, plan: dict[str, Any]) -> None:
    table = np.genfromtxt(exported / "out" / "trajectory.csv", delimiter=",", names=True)
    assert np.diff(table["time_s"]) == pytest.approx(0.01, abs=1e-6)
    for pick in plan["picks"]:
        for joint in ("j1_deg", "j2_deg", "j3_mm", "j4_deg"):
            at = np.interp(pick["release_start_s"], table["time_s"], table[joint])
            assert at == pytest.approx(pick[f"release_{joint}"], abs=0.2)
        middle = (pick["grasp_end_s"] + pick["release_start_s"]) / 2
        held = table["carried_part_no"][np.searchsorted(table["time_s"], middle)]
        assert held == pick["part_no"]
    cell = load_cell(exported / "cell.toml")
    joints = np.column_stack([table[j] for j in ("j1_deg", "j2_deg", "j3_mm", "j4_deg")]) / FILE_UNITS
    tips = Arm(cell.arm, cell.tool).forward(joints)
    assert np.abs(tips[:, :3] - np.column_stack([table["x_mm"], table["y_mm"], table["z_mm"]])).max() < 1e-3


def test_a_tray_has_no_counts(tmp_path: Path) -> None:
    folder = still(2).written(tmp_path / "in")
    told = sanderling("export", folder, "--cell", folder / "cell.toml", "--located", folder / "located.csv",
                      "--out", tmp_path / "out")
    assert told.status == 0, told.err
    plan = json.loads((tmp_path / "out" / "plan.json").read_text())
    assert faults(plan, schema(), schema()) == []
    assert plan["picks"][0]["grasp_start_counts"] is None


@pytest.mark.parametrize("period", ["0", "-1", "nan", "inf", "0.0001", "2"])
def test_a_period_that_will_not_do_is_refused(exported: Path, tmp_path: Path, period: str) -> None:
    told = sanderling("export", exported, "--cell", exported / "cell.toml", "--located", exported / "located.csv",
                      f"--period-s={period}", "--out", tmp_path / "out")
    assert told.status == 2
    assert len(told.err.strip().splitlines()) == 1
    assert not (tmp_path / "out").exists()
