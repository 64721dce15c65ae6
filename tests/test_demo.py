"""The demo from end to end: calibrated and taught from its own raw files, replayed, and held to its true poses."""

import csv
import json
import shutil
from pathlib import Path

import pytest
from checked_run import faults, read
from some_streams import sanderling


@pytest.fixture(scope="module")
def bells(tmp_path_factory: pytest.TempPathFactory, demo: Path) -> Path:
    """A copy of the demo with none of the files that the commands write, then with all of them, and a run in `out`."""
    folder = tmp_path_factory.mktemp("demo") / "bells"
    shutil.copytree(demo, folder, ignore=shutil.ignore_patterns("lens.json", "overhead.json", "parts", "*.md"))
    cell, lens, calibration = folder / "cell.toml", folder / "calibration" / "lens.json", folder / "calibration"
    done("calibrate", "lens", *sorted((calibration / "lens").glob("*.png")), "--square-mm", 20, "--out", lens)
    done("calibrate", "plane", calibration / "touches.csv", "--cell", cell, "--lens", lens, "--out",
         calibration / "overhead.json")
    with open(folder / "teach" / "teach.csv", newline="") as file:
        for row in csv.DictReader(file):
            done("teach", folder / "teach" / row["image"], "--cell", cell, "--part", row["part"],
                 f"--tool={row['x_mm']},{row['y_mm']},{row['yaw_deg']}", "--counts", row["counts"],
                 "--touch-counts", row["touch_counts"], "--out", folder / "parts" / f"{row['part']}.json")
    done("replay", folder, "--cell", cell, "--out", folder / "out", "--trajectory")
    return folder


def done(*words: object) -> None:
    """Run a command that must end well."""
    told = sanderling(*words)
    assert told.status == 0, told


def test_the_run_holds_to_its_definition(bells: Path) -> None:
    """Limits, following, window, slots, heights and fates, from the files alone."""
    assert faults(bells, bells / "out") == []


def test_the_parts_are_found(bells: Path) -> None:
    told = sanderling("score", bells / "out", "--truth", bells / "truth.csv", "--cell", bells / "cell.toml",
                      "--min-recall", 0.95, "--min-precision", 0.95, "--max-position-p95-mm", 1.0,
                      "--max-yaw-p95-deg", 1.5)
    assert told.status == 0, told


def test_wrong_sides_and_strangers_are_left_alone(bells: Path) -> None:
    parts = read(bells / "out" / "parts.csv")
    assert {row["reason"] for row in parts if row["side"] == "down"} == {"wrong_side"}
    assert sum(row["fate"] == "picked" for row in parts) >= 30
    assert any(row["part"] == "unknown" for row in parts)


def test_everything_is_written(bells: Path) -> None:
    out = bells / "out"
    figures = json.loads((out / "summary.json").read_text())
    assert figures["picked"] == len(read(out / "picks.csv"))
    assert len(list((out / "frames").glob("*.jpg"))) == 28
    page = (out / "report.html").read_text()
    assert "ISO 10218" in page
    assert "http://" not in page.replace("http://www.w3.org/", "")
    assert "https://" not in page


def test_the_shipped_calibration_and_models_are_what_the_commands_write(bells: Path, demo: Path) -> None:
    """Replaying the demo as it comes gives the same picks."""
    done("replay", demo, "--cell", demo / "cell.toml", "--out", bells / "shipped")
    ours, shipped = (read(bells / name / "picks.csv") for name in ("out", "shipped"))
    assert [row["part_no"] for row in ours] == [row["part_no"] for row in shipped]
    for row, other in zip(ours, shipped, strict=True):
        assert abs(float(row["x_mm"]) - float(other["x_mm"])) < 0.05
