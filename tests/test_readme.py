"""The README does as it is told: its Python runs, its options exist, its walk leads from board images to a sweep."""

import re
import runpy
import shlex
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from conftest import ROOT
from some_streams import sanderling

README = (ROOT / "README.md").read_text(encoding="utf-8")
PYTHON = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
WALK = next(block for block in re.findall(r"```sh\n(.*?)```", README, re.DOTALL) if "sanderling new" in block)
COMMANDS = sorted({line.split("#")[0].strip() for line in re.findall(r"(?:`|(?m:^))(sanderling [a-z][^`\n]*)", README)})


@pytest.mark.parametrize(("example", "holds"), [
    (0, lambda names: len(names["done"].picks) > 20),
    (1, lambda names: abs(names["tip"][:, :3] - [300, 50, -40]).max() < 1e-6),
    (2, lambda names: names["best"].proven and names["best"].bound == names["best"].value == 14),
])  # fmt: skip
def test_python_examples_run(example: int, holds: Callable[[dict[str, Any]], bool], tmp_path: Path,
                             monkeypatch: pytest.MonkeyPatch) -> None:
    """Each by itself, from the project's folder; the shortest way through 4 places and home is 14, by hand."""
    monkeypatch.chdir(ROOT)
    (tmp_path / "example.py").write_text(PYTHON[example], encoding="utf-8")
    assert holds(runpy.run_path(str(tmp_path / "example.py")))


@pytest.mark.parametrize("command", COMMANDS)
def test_every_option_in_the_readme_exists(command: str) -> None:
    words = shlex.split(command)[1:]
    name = words[: 2 if words[0] == "calibrate" else 1]
    told = sanderling(*name, "--help")
    assert told.status == 0, told.err
    asked = {word.split("=")[0] for word in words if word.startswith("--")}
    assert {option for option in asked if not re.search(rf"{option}\b", told.out)} == set()


def test_the_walk_leads_from_board_images_to_a_sweep(recordings_folder: Path, tmp_path: Path,
                                                     monkeypatch: pytest.MonkeyPatch) -> None:
    """Every command of it, word for word, with a person's work done between them from a recording's raw files."""
    raw, folder = recordings_folder / "bells", tmp_path / "my_cell"

    def person() -> None:
        """Puts images and tables into the folder laid out, and fills in its cell file: one kind, two places."""
        for view in sorted((raw / "calibration" / "lens").glob("*.png"))[:6]:
            shutil.copy(view, folder / "calibration" / "lens")
        shutil.copy(raw / "calibration" / "belt.csv", folder / "calibration" / "belt_touches.csv")
        shutil.copy(raw / "calibration" / "touches.csv", folder / "calibration")
        shutil.copy(raw / "teach" / "lever.png", folder / "teach")
        frames = (raw / "frames.csv").read_text().splitlines()[:6]
        (folder / "recording" / "frames.csv").write_text("\n".join(frames) + "\n")
        for line in frames[1:]:
            shutil.copy(raw / line.split(",")[1], folder / "recording")
        sheet = (raw / "cell.toml").read_text()
        head, rest = sheet.split("[parts.dome]")
        lever = rest.split("[parts.lever]")[1].split("[parts.clamp]")[0]
        (folder / "cell.toml").write_text(f"{head}[parts.lever]{lever}[[places]]{rest.split('[[places]]', 1)[1]}")

    monkeypatch.chdir(tmp_path)
    ran = 0
    for line in WALK.replace("--set belt-speed=0.8:1.4:7", "--set belt-speed=0.8:1.4:7 --jobs 1").splitlines():
        words = shlex.split(line, comments=True)
        if words[:1] == ["cd"]:
            monkeypatch.chdir(folder)
            person()
        elif words:
            told = sanderling(*words[1:])
            unfinished = words[1] == "check" and not (folder / "parts" / "lever.json").exists()
            assert told.status == (1 if unfinished else 0), (line, told.err)
            ran += 1
    assert ran == 9
    for made in ("out/run/report.html", "out/run/plots/reach.png", "out/sweep/sweep.csv",
                 "out/sweep/curve_belt-speed.png"):
        assert (folder / made).stat().st_size > 500
    assert "picked" in (folder / "out/run/parts.csv").read_text()
