"""Sweeps: what each setting changes, each point done once, faults at one point that leave the others alone."""

import json
import os
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from some_cases import case, still, stream
from some_streams import Laid, belt, sanderling

from cameras.faults import InputFault, InputFaults
from pipeline.study import run
from pipeline.sweep.case import Case
from pipeline.sweep.kept import Kept, Outcome
from pipeline.sweep.points import Point, grid, parsed, points_of, read_settings
from pipeline.sweep.run import changed, run_points
from pipeline.sweep.settings import CELL, changed_cell

MAIN = "from pipeline.app import main; main()"


@pytest.fixture(scope="module")
def small(tmp_path_factory: pytest.TempPathFactory) -> Case:
    return case(tmp_path_factory.mktemp("small"), stream(4, 80.0, 13.0))


def one(case: Case, **settings: object) -> Case:
    """The case under settings; names with hyphens for underscores."""
    named = tuple((name.replace("_", "-"), value) for name, value in settings.items())
    return changed(case, Point(0, named))  # type: ignore[arg-type]


@pytest.mark.parametrize(("name", "value", "read", "expected"), [
    ("order", "nearest", lambda c: c.order.policy, "nearest"),
    ("horizon", 5, lambda c: c.order.horizon, 5),
    ("limits", 0.5, lambda c: (c.arm.j1.max_speed, c.arm.j3.max_accel, c.arm.j4.max_jerk), (200.0, 4500.0, 120000.0)),
    ("window-shift", 20, lambda c: c.belt.window_mm, (-130.0, 170.0)),
    ("window-length", 120.5, lambda c: c.belt.window_mm, (-150.0, -29.5)),
    ("base-x", -12, lambda c: c.arm.base_mm, (-12.0, 0.0, 0.0)),
    ("base-y", 3.5, lambda c: c.arm.base_mm, (0.0, 3.5, 0.0)),
    ("base-yaw", 7, lambda c: c.arm.base_yaw_deg, 7.0),
    ("travel-height", 5, lambda c: c.motion.travel_mm, 5.0),
    ("clear-height", -4, lambda c: c.motion.clear_mm, -4.0),
    ("approach", 2, lambda c: c.motion.approach_mm, 2.0),
    ("grasp-dwell", 0.1, lambda c: c.motion.grasp_s, 0.1),
    ("release-dwell", 0.2, lambda c: c.motion.release_s, 0.2),
    ("latency", 0.3, lambda c: c.cameras[0].latency_s, 0.3),
    ("motion.singularity_deg", 12, lambda c: c.motion.singularity_deg, 12.0),
    ("arm.j2.max_speed", 99.5, lambda c: c.arm.j2.max_speed, 99.5),
    ("places.0.columns", 1, lambda c: c.places[0].columns, 1),
    ("parts.lever.weight", 2, lambda c: c.parts["lever"].weight, 2.0),
])  # fmt: skip
def test_a_setting_changes_what_it_names_and_nothing_else(small, name, value, read, expected) -> None:
    """Set to the value and back to what the cell had, the cell is as before."""
    cell = changed_cell(small.cell, {name: value})
    assert read(cell) == pytest.approx(expected) if not isinstance(expected, str) else read(cell) == expected
    dumps = [json.loads(c.model_dump_json()) for c in (small.cell, cell)]
    differing = [key for key in dumps[0] if dumps[0][key] != dumps[1][key]]
    assert len(differing) == 1


def test_every_setting_is_tried_above() -> None:
    tried = test_a_setting_changes_what_it_names_and_nothing_else.pytestmark[0].args[1]  # type: ignore[attr-defined]
    assert set(CELL) <= {row[0] for row in tried}


def test_a_faster_belt_brings_the_same_in_less_time(small: Case) -> None:
    fast = one(small, belt_speed=2.0)
    assert fast.lasts_s == pytest.approx(small.lasts_s / 2)
    np.testing.assert_array_equal(fast.travel_mm, small.travel_mm)
    speed = [c.setting().belt.speed_mm_s(c.recording.times_s[0] + c.lasts_s / 2) for c in (small, fast)]
    assert speed[1] == pytest.approx(2 * speed[0], rel=0.02)


def test_limits_matter(small: Case) -> None:
    """With a tenth of the limits the arm is slower."""
    plain, slow = (run(c.setting(), "arrival", 4) for c in (small, one(small, limits=0.1)))
    assert len(slow.picks) < len(plain.picks)


@pytest.mark.parametrize(("name", "value", "told"), [
    ("belt-sped", 1, "belt-speed"), ("motion.nothing", 1, "unknown key"), ("arm.j9.max", 1, "no such key"),
    ("belt.mm_per_count", 0.1, "changes what is seen"), ("parts.lever.height_mm", 5, "changes what is seen"),
    ("limits", -1, "above 0"), ("limits", "much", "above 0"), ("horizon", 2.5, "will not do"),
    ("belt-speed", 0, "above 0"), ("arrival-rate", "x", "above 0"), ("window-shift", "x", "a number"),
    ("clear-height", 50, "clear"), ("motion.grasp_s", "long", "will not do"), ("file", "x", "no such setting"),
])  # fmt: skip
def test_what_will_not_do_is_refused_in_one_line(small: Case, name: str, value: object, told: str) -> None:
    with pytest.raises((InputFault, InputFaults), match=told) as caught:
        changed(small, Point(0, ((name, value),)))  # type: ignore[arg-type]
    assert "\n" not in str(caught.value)


def test_a_belt_setting_on_a_tray_is_refused(tmp_path: Path) -> None:
    trays = case(tmp_path, still())
    with pytest.raises(InputFault, match="no belt"):
        one(trays, belt_speed=2.0)
    with pytest.raises(InputFault, match="window"):
        one(trays, window_shift=2.0)
    assert one(trays, arrival_rate=2.0).lasts_s == pytest.approx(trays.lasts_s / 2)


def test_values_and_spans_are_read() -> None:
    assert parsed("order=arrival,lookahead") == ("order", ["arrival", "lookahead"])
    assert parsed("horizon=2:12:6") == ("horizon", [2, 4, 6, 8, 10, 12])
    assert parsed("belt-speed=0.8:1.6:3") == ("belt-speed", [0.8, 1.2, 1.6])
    assert len(grid({"horizon": [1, 2, 3], "order": ["a", "b"]})) == 6
    assert len(points_of(grid({"horizon": [1, 2]}), 2, range(1, 4), 60.0)) == 12


@pytest.mark.parametrize("text", ["horizon", "horizon=", "horizon=1,,2", "horizon=1:2:1", "horizon=1:2:nan",
                                  "belt-speed=nan", "belt-speed=inf", "wrong=1", "=1"])
def test_what_cannot_be_read_is_refused(text: str) -> None:
    with pytest.raises(InputFault):
        parsed(text)


def test_settings_are_read_from_a_file(tmp_path: Path) -> None:
    path = tmp_path / "settings.toml"
    path.write_text('[set]\nbelt-speed = {from = 1.0, to = 2.0, steps = 3}\nmotion.grasp_s = [0.05, 0.1]\n'
                    '[[points]]\norder = "arrival"\nhorizon = 3\n')
    rows = read_settings(path)
    assert len(rows) == 7
    assert rows[0] == (("belt-speed", 1.0), ("motion.grasp_s", 0.05))
    assert rows[-1] == (("order", "arrival"), ("horizon", 3))


def test_a_list_of_points_that_share_few_settings_is_drawn(tmp_path: Path) -> None:
    """Settings that never meet leave gaps in curves and heat map; a point that fails stands in the table."""
    folder, out = tmp_path / "small", tmp_path / "out"
    stream(4, 80.0, 13.0).written(folder)
    (tmp_path / "set.toml").write_text("""[set]
belt-speed = [0.9, 1.2]
motion.grasp_s = { from = 0.05, to = 0.09, steps = 2 }
[[points]]
order = "arrival"
window-length = 300.0
[[points]]
order = "nearest"
[[points]]
motion.nothing_s = 1.0
""")
    told = sanderling("sweep", folder, "--cell", folder / "cell.toml", "--located", "located.csv", "--settings",
                      tmp_path / "set.toml", "--jobs", 1, "--out", out)  # fmt: skip
    assert told.status == 1
    assert "failed: motion.nothing_s 1.0: " in told.err
    assert len((out / "sweep.csv").read_text().splitlines()) == 8
    assert {path.name for path in out.glob("*.png")} >= {"curve_belt-speed.png", "heat.png"}


@pytest.mark.parametrize("text", ["", "[set]\nwrong = 1", "[set]\nhorizon = []", "[set]\nhorizon = [true]",
                                  "nonsense = 1", "[set]\nbelt-speed = [nan]", "[set]\nhorizon = {from = 1}",
                                  "not toml", "set = 3", "[[points]]\nhorizon = [[1]]", "points = [1]"])
def test_a_wrong_settings_file_is_refused(tmp_path: Path, text: str) -> None:
    path = tmp_path / "settings.toml"
    path.write_text(text)
    with pytest.raises(InputFault, match=r"settings\.toml"):
        read_settings(path)


def test_keys_tell_apart_all_that_goes_in(small: Case) -> None:
    """Cell, parts, times, settings, seed and length each make another key; the order of settings does not."""
    base = small.digest()
    point = Point(0, (("horizon", 3), ("order", "arrival")))
    other = [replace(small, cell=changed_cell(small.cell, {"approach": 3})), replace(small, parts=small.parts[1:]),
             one(small, belt_speed=1.01), replace(small, least_score=0.6)]
    points = [point, Point(0, (("horizon", 4), ("order", "arrival"))), replace(point, seed=1, length_s=60.0),
              replace(point, seed=2, length_s=60.0), replace(point, seed=1, length_s=61.0)]
    keys = [point.key(c.digest()) for c in other] + [p.key(base) for p in points]
    assert len(set(keys)) == len(keys)
    assert Point(0, point.settings[::-1]).key(base) == point.key(base)
    assert small.digest() == base


def test_a_failed_point_leaves_the_others_alone(small: Case, tmp_path: Path) -> None:
    points = points_of(grid({"order": ["arrival", "none"], "clear-height": [-5, 50]}), 1)
    outcomes = run_points([small], points, tmp_path, jobs=1)
    assert [bool(outcome.failed) for outcome in outcomes] == [False, True, True, True]
    assert outcomes[0].figures["picked"] == 4
    assert "not an order" in outcomes[2].failed


def test_a_damaged_result_is_done_again(small: Case, tmp_path: Path) -> None:
    points = points_of(grid({"order": ["arrival"]}), 1)
    first = run_points([small], points, tmp_path, jobs=1)
    for text in ("", "{", "[]", '{"format": 1}', "null"):
        next(tmp_path.glob("*.json")).write_text(text)
        again = run_points([small], points, tmp_path, jobs=1)
        assert not again[0].again
        assert again[0].figures["picked"] == first[0].figures["picked"]
    assert run_points([small], points, tmp_path, jobs=1)[0].again


def test_what_failed_is_not_kept(tmp_path: Path) -> None:
    Kept(tmp_path).keep(Outcome(Point(0, ()), {}, "broken"), "key")
    assert list(tmp_path.iterdir()) == []


def heard() -> None:
    """A shell's background job ignores interrupts, and so would what it starts."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


def test_broken_off_it_goes_on_where_it_was(tmp_path: Path) -> None:
    """Interrupted, then killed, then let run: no finished point is done twice, and the table is whole."""
    folder, out = tmp_path / "small", tmp_path / "out"
    stream(4, 80.0, 13.0).written(folder)
    words = ["sweep", str(folder), "--cell", str(folder / "cell.toml"), "--located", "located.csv", "--set",
             "belt-speed=0.5:2:20", "--set", "order=arrival", "--out", str(out)]

    def broken_off(with_signal: int, points: int) -> tuple[int, str, dict[str, int]]:
        process = subprocess.Popen([sys.executable, "-c", MAIN, *words, "--jobs", "1"], stderr=subprocess.PIPE,
                                   start_new_session=True, preexec_fn=heard)
        until = time.monotonic() + 120
        while len(list(out.glob("points/[!.]*.json"))) < points and time.monotonic() < until and process.poll() is None:
            time.sleep(0.005)
        os.killpg(process.pid, with_signal)
        told = process.communicate(timeout=60)[1].decode()
        return process.returncode, told, {path.name: path.stat().st_mtime_ns for path in out.glob("points/[!.]*.json")}

    status, said, first = broken_off(signal.SIGINT, 3)
    assert status == 130
    assert said.strip().splitlines() == ["interrupted; what is done is kept, the same command goes on from there"]
    assert 3 <= len(first) < 20
    assert not (out / "sweep.csv").exists()
    _, _, second = broken_off(signal.SIGKILL, len(first) + 3)
    assert first.items() <= second.items()
    assert len(first) < len(second) < 20
    told = sanderling(*words, "--jobs", "1")
    assert told.status == 0
    assert f"{20 - len(second)} run, {len(second)} done before" in told.out
    assert second.items() <= {path.name: path.stat().st_mtime_ns for path in out.glob("points/[!.]*.json")}.items()
    rows = (out / "sweep.csv").read_text().splitlines()
    assert len(rows) == 21
    assert all((out / name).stat().st_size > 5000 for name in ("curve_belt-speed.png", "missed_belt-speed.png"))


def test_two_at_a_time_give_what_one_gives(small: Case, tmp_path: Path) -> None:
    points = points_of(grid({"belt-speed": [0.8, 1.2], "order": ["arrival"]}), 1)
    alone, together = (run_points([small], points, tmp_path / f"{jobs}", jobs) for jobs in (1, 2))
    for a, b in zip(alone, together, strict=True):
        assert {k: v for k, v in a.figures.items() if k != "decide_ms"} == \
            {k: v for k, v in b.figures.items() if k != "decide_ms"}


def test_a_cluster_gives_the_same(small: Case, tmp_path: Path) -> None:
    """On a cluster of two workers that the test starts."""
    distributed = pytest.importorskip("distributed")
    points = points_of(grid({"belt-speed": [0.8, 1.2, 1.6], "order": ["arrival", "none"]}), 1)
    two = {"n_workers": 2, "threads_per_worker": 1, "processes": False, "dashboard_address": None}
    with distributed.LocalCluster(**two) as cluster:
        far = run_points([small], points, tmp_path / "far", dask=cluster.scheduler_address)
        near = run_points([small], points, tmp_path / "near", jobs=1)
    assert [o.figures.get("picked") for o in far] == [o.figures.get("picked") for o in near]
    assert [bool(o.failed) for o in far] == [False, True] * 3
    assert len(list((tmp_path / "far").glob("*.json"))) == 3


def test_a_cluster_that_is_not_there_is_refused(small: Case, tmp_path: Path) -> None:
    """In one line, whether or not dask is installed."""
    with pytest.raises(InputFault, match="--dask"):
        run_points([small], points_of(grid({"horizon": [1]}), 1), tmp_path, dask="tcp://127.0.0.1:1")


def test_several_recordings_and_what_differs_is_told(tmp_path: Path) -> None:
    for name, parts in (("a", 2), ("b", 3)):
        stream(parts, 80.0, 12.0).written(tmp_path / name)
    cell = tmp_path / "a" / "cell.toml"
    told = sanderling("sweep", tmp_path / "a", tmp_path / "b", "--cell", cell, "--located", "located.csv", "--set",
                      "order=arrival,nearest", "--set", "horizon=1,4", "--jobs", 1, "--out", tmp_path / "out")
    assert told.status == 0, told.err
    table = (tmp_path / "out" / "sweep.csv").read_text().splitlines()
    assert table[0].startswith("recording,order,horizon,seed,parts_seen,had,picked,")
    assert len(table) == 9
    assert (tmp_path / "out" / "heat.png").stat().st_size > 5000


@pytest.mark.parametrize("words", [
    [], ["--set", "wrong=1"], ["--set", "horizon=1", "--set", "horizon=2"], ["--find", "horizon", "--within", "2"],
    ["--find", "nothing"], ["--find", "belt-speed", "--missed-below", "many"], ["--settings", "none.toml"],
])  # fmt: skip
def test_bad_words_end_in_one_line_and_leave_nothing(tmp_path: Path, words: list[str]) -> None:
    folder = belt([Laid(280.0, -500.0)], 10.0).written(tmp_path / "in")
    told = sanderling("sweep", folder, "--cell", folder / "cell.toml", "--located", folder / "located.csv", "--jobs", 1,
                      "--out", tmp_path / "out", *words)
    assert told.status == 2
    assert len(told.err.strip().splitlines()) == 1
    assert not (tmp_path / "out").exists()
