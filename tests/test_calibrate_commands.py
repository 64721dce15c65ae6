import csv
import json
import sys
from pathlib import Path

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from made_camera import MILD, SIZE, made_camera, made_touches, map_errors_mm

from cameras.camera import load_camera
from cameras.faults import InputFault
from cameras.lens import Lens, load_lens
from pipeline.app import main

CAMERA = made_camera()
CELL = """
[arm]
link1_mm = 250.0
link2_mm = 200.0
flange_height_mm = 160.0
home = [0.0, 90.0, 20.0, 0.0]
j1 = {min = -132.0, max = 132.0, max_speed = 450.0, max_accel = 2800.0}
j2 = {min = -142.0, max = 142.0, max_speed = 450.0, max_accel = 2800.0}
j3 = {min = 0.0, max = 180.0, max_speed = 900.0, max_accel = 9000.0}
j4 = {min = -360.0, max = 360.0, max_speed = 900.0, max_accel = 9000.0}
[tool]
[motion]
travel_mm = 30.0
[belt]
surface_mm = -50.0
heading_deg = 90.0
mm_per_count = 0.05
counts_modulus = 65536
window_mm = [-180.0, 700.0]
[parts.dome]
height_mm = 16.0
grasp_mm = 7.0
places = ["bin"]
[[places]]
name = "bin"
origin_mm = [0.0, -300.0, 0.0]
"""


@pytest.fixture
def cell(tmp_path: Path) -> Path:
    (tmp_path / "cell.toml").write_text(CELL)
    return tmp_path / "cell.toml"


@pytest.fixture
def lens(tmp_path: Path) -> Path:
    (tmp_path / "lens.json").write_text(json.dumps(Lens(MILD, SIZE).document()))
    return tmp_path / "lens.json"


@pytest.fixture
def run(monkeypatch, capsys):
    """Run the command line; exit status, what it printed, what it printed on stderr."""

    def run(*words: object) -> tuple[int, str, str]:
        monkeypatch.setattr(sys, "argv", ["sanderling", *map(str, words)])
        monkeypatch.setenv("COLUMNS", "160")
        with pytest.raises(SystemExit) as ended:
            main()
        out, err = capsys.readouterr()
        return int(ended.value.code or 0), out, err

    return run


def touches_file(path: Path, n: int = 24, scale: float = 0.05, bad: int | None = None) -> Path:
    """Made touches, each carried some way by a belt of that scale before it was touched; the counter rolls over."""
    touched, rng = made_touches(CAMERA, n), np.random.default_rng(2)
    ran = rng.integers(4000, 12000, n)
    seen = rng.integers(0, 65536, n)
    points = touched.points + np.outer(ran * scale, [0.0, 1.0, 0.0])
    if bad is not None:
        points[bad, 0] += 7.0
    with path.open("w", newline="") as file:
        rows = zip(touched.pixels, seen, points, (seen + ran) % 65536, strict=True)
        csv.writer(file).writerows([["u_px", "v_px", "counts", "x_mm", "y_mm", "z_mm", "touch_counts"],
                                    *([*pixel, s, *point, t] for pixel, s, point, t in rows)])  # fmt: skip
    return path


def test_plane_writes_a_map_that_is_right_at_any_height(run, tmp_path, cell, lens):
    status, out, _ = run("calibrate", "plane", touches_file(tmp_path / "t.csv"), "--cell", cell, "--lens", lens,
                         "--out", tmp_path / "out" / "overhead.json")  # fmt: skip
    assert status == 0
    found = load_camera(tmp_path / "out" / "overhead.json")
    assert max(map_errors_mm(found, CAMERA, height).max() for height in (-50.0, -34.0, -20.0)) < 0.12
    assert found.image_size_px == SIZE
    assert "24 of 24" in out
    assert "leave-one-out RMS" in out
    assert "Parallax" in out
    assert "warning" not in out
    picture = cv2.imread(str(tmp_path / "out" / "overhead_uncertainty.png"))
    assert picture is not None
    assert picture.std() > 10


def test_plane_names_a_bad_touch_by_its_line(run, tmp_path, cell, lens):
    status, out, _ = run("calibrate", "plane", touches_file(tmp_path / "t.csv", bad=11), "--cell", cell, "--lens", lens,
                         "--out", tmp_path / "overhead.json")  # fmt: skip
    assert status == 0
    assert "23 of 24" in out
    named = [line for line in out.splitlines() if "LEFT OUT" in line]
    assert len(named) == 1
    assert named[0].split()[0] == "13"  # the header is line 1


def test_plane_says_what_doing_without_a_lens_costs(run, tmp_path, cell):
    status, out, _ = run("calibrate", "plane", touches_file(tmp_path / "t.csv"), "--cell", cell, "--out",
                         tmp_path / "overhead.json")  # fmt: skip
    assert status == 0
    assert "no lens file" in out
    assert "height is ignored: a top 16 mm up" in out
    assert map_errors_mm(load_camera(tmp_path / "overhead.json"), CAMERA, -50.0).max() < 0.3


def test_plane_says_that_the_cell_s_belt_is_wrong(run, tmp_path, cell, lens):
    status, out, _ = run("calibrate", "plane", touches_file(tmp_path / "t.csv", scale=0.0502), "--cell", cell, "--lens",
                         lens, "--out", tmp_path / "overhead.json")  # fmt: skip
    assert status == 0
    warned = next(line for line in out.splitlines() if "carried farther" in line)
    asked = float(warned.split("mm_per_count ")[1].split()[0])
    assert asked == pytest.approx(0.0502, abs=4e-5)


@pytest.mark.parametrize("lines", [0, 1, 3])
def test_plane_refuses_too_few_touches(run, tmp_path, cell, lens, lines):
    """Exit status 2, one line, and no file written."""
    whole = touches_file(tmp_path / "t.csv").read_text().splitlines(keepends=True)
    (tmp_path / "few.csv").write_text("".join(whole[: lines + 1]))
    for extra in ((), ("--lens", lens)):
        status, _, err = run("calibrate", "plane", tmp_path / "few.csv", "--cell", cell, *extra, "--out",
                             tmp_path / "overhead.json")  # fmt: skip
        assert status == 2
        assert err.count("\n") == 1
        assert "few.csv" in err
        assert not (tmp_path / "overhead.json").exists()


def test_plane_refuses_touches_on_a_line(run, tmp_path, cell, lens):
    rows = "".join(f"{100 + 60 * k},{400 + 2 * k},0,{200 + 18 * k},{50 + k},-50,0\n" for k in range(12))
    (tmp_path / "line.csv").write_text("u_px,v_px,counts,x_mm,y_mm,z_mm,touch_counts\n" + rows)
    status, _, err = run("calibrate", "plane", tmp_path / "line.csv", "--cell", cell, "--lens", lens, "--out",
                         tmp_path / "o.json")  # fmt: skip
    assert status == 2
    assert "on a line" in err
    assert list(tmp_path.glob("o*")) == []


def test_belt_prints_what_the_cell_file_needs(run, tmp_path, cell):
    rng = np.random.default_rng(1)
    rows = [(mark, int(60000 + 1000 * mark + 2000 * k) % 65536, 300 + 20 * mark + rng.normal(0, 0.05),
             -200 + 100 * k + rng.normal(0, 0.05)) for mark in range(3) for k in range(5)]  # fmt: skip
    with (tmp_path / "belt.csv").open("w", newline="") as file:
        csv.writer(file).writerows([("mark", "counts", "x_mm", "y_mm"), *rows])
    status, out, _ = run("calibrate", "belt", tmp_path / "belt.csv", "--counts-modulus", 65536)
    assert status == 0
    assert float(out.split("mm_per_count")[1].split()[0]) == pytest.approx(0.05, abs=5e-5)
    assert float(out.split("heading_deg")[1].split()[0]) == pytest.approx(90.0, abs=0.05)
    off = cell.read_text().replace("mm_per_count = 0.05", "mm_per_count = 0.051")
    cell.write_text(off)
    status, out, _ = run("calibrate", "belt", tmp_path / "belt.csv", "--cell", cell, "--carry-mm", 800)
    assert status == 0
    assert "over 800 mm that is +16" in out
    status, _, err = run("calibrate", "belt", tmp_path / "belt.csv")
    assert status == 2
    assert "modulus" in err


def board_image(path: Path, turn: float, shift: float) -> Path:
    """A chessboard of 9 x 6 inner corners drawn in perspective."""
    squares = np.indices((7, 10)).sum(axis=0) % 2 * 200 + 30
    flat = np.full((900, 1200), 230, np.uint8)
    flat[100:800, 100:1100] = np.kron(squares, np.ones((100, 100))).astype(np.uint8)
    corners = np.array([[0, 0], [1200, 0], [1200, 900], [0, 900.0]])
    wanted = np.array([[150, 120], [850 - 90 * turn, 140 + 60 * turn], [860, 690], [140 + 60 * turn, 670 - 80 * turn]])
    plane = cv2.getPerspectiveTransform(corners.astype(np.float32), (wanted + shift).astype(np.float32))
    cv2.imwrite(str(path), cv2.GaussianBlur(cv2.warpPerspective(flat, plane, SIZE, borderValue=230), (5, 5), 1.0))
    return path


def test_lens_reads_boards_names_what_it_did_not_find_and_draws_coverage(run, tmp_path):
    images = [board_image(tmp_path / f"v{k}.png", turn, 15.0 * k - 30) for k, turn in enumerate((-1.5, -0.7, 0.8, 1.6))]
    cv2.imwrite(str(tmp_path / "blank.png"), np.full((SIZE[1], SIZE[0]), 128, np.uint8))
    status, out, _ = run("calibrate", "lens", *images, tmp_path / "blank.png", "--square-mm", 20, "--out",
                         tmp_path / "lens.json")  # fmt: skip
    assert status == 0
    assert "no board found in blank.png" in out
    assert "reprojection RMS" in out
    assert load_lens(tmp_path / "lens.json").image_size_px == SIZE
    assert cv2.imread(str(tmp_path / "lens_coverage.png")) is not None


@pytest.mark.parametrize(("options", "what"), [
    (("--board", "9by6"), "--board"), (("--board", "2x6"), "--board"), (("--square-mm", "-1"), "--square-mm"),
    (("--square-mm", "nan"), "--square-mm"), (("--charuco", "DICT_NONE"), "--charuco"),
    (("--charuco", "DICT_4X4_50", "--marker-mm", "30"), "--marker-mm"), ((), "found in 0"),
])  # fmt: skip
def test_lens_refuses_what_makes_no_board(run, tmp_path, options, what):
    cv2.imwrite(str(tmp_path / "blank.png"), np.full((80, 100), 128, np.uint8))
    status, _, err = run("calibrate", "lens", tmp_path / "blank.png", *options, "--out", tmp_path / "lens.json")
    assert status == 2
    assert what in err
    assert err.count("\n") == 1
    assert not (tmp_path / "lens.json").exists()


@pytest.mark.parametrize("content", [b"", b"no image", bytes(range(256)) * 20])
def test_lens_refuses_what_is_no_image(run, tmp_path, content):
    (tmp_path / "view.png").write_bytes(content)
    status, _, err = run("calibrate", "lens", tmp_path / "view.png", "--out", tmp_path / "lens.json")
    assert status == 2
    assert "view.png" in err


@pytest.mark.parametrize(("change", "place"), [
    ({"basis": "guess"}, "basis"), ({"projection": [[1, 2, 3, 4]]}, "projection"), ({"freedom": None}, "freedom"),
    ({"covariance": np.zeros((21, 21)).tolist()}, "covariance"), ({"extra": 1}, "extra"), ({"format": 99}, "format"),
    ({"covariance": (-np.eye(15)).tolist()}, "covariance"), ({"touched_px": "no"}, "touched_px"),
])  # fmt: skip
def test_a_camera_file_that_will_not_do_is_named_by_key(run, tmp_path, cell, lens, change, place):
    file = tmp_path / "overhead.json"
    run("calibrate", "plane", touches_file(tmp_path / "t.csv"), "--cell", cell, "--lens", lens, "--out", file)
    whole = load_camera(file)
    assert whole.document() == json.loads(file.read_text())
    file.write_text(json.dumps({**whole.document(), **change}))
    with pytest.raises(InputFault) as fault:
        load_camera(file)
    assert fault.value.place == place


JSON = st.recursive(st.none() | st.booleans() | st.floats() | st.integers() | st.text(max_size=5),
                    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=3), inner, max_size=2))


@given(key=st.sampled_from(sorted(CAMERA.document())), value=JSON)
@settings(max_examples=150, deadline=None)
def test_a_camera_file_of_any_content_loads_or_is_a_fault(tmp_path_factory, key, value):
    file = tmp_path_factory.getbasetemp() / "any.json"
    file.write_text(json.dumps({**CAMERA.document(), key: value}))
    try:
        found = load_camera(file)
    except InputFault:
        return
    assert found.to_cell([[3.0, 4.0]], -50.0).shape == (1, 2)
