"""Found against true: every kind of mistake is counted for what it is, and limits make it a check."""

import json
from itertools import permutations

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from typer.testing import CliRunner

from cameras.faults import InputFault
from pipeline.app import app
from pipeline.score import over_limits, read_parts, read_truth, score

PARTS = "part_no,part,side,x_mm,y_mm,yaw_deg,score,first_frame,frames_seen,fate,reason"
TRUTH = "part_no,part,side,x_mm,y_mm,yaw_deg"
TURNS = {"lever": 1, "plate": 2, "dome": 0}
TRUE = ["1,lever,up,0,0,10", "2,plate,up,100,0,170", "3,dome,up,200,0,0", "4,lever,down,300,0,90"]
FOUND = ["1,lever,up,0.3,-0.4,12,0.9,0,3,picked,", "2,plate,up,100,0,-13,0.9,0,3,picked,",
         "3,dome,up,200,1,77,0.9,1,3,picked,", "4,lever,down,300,0,90,0.9,1,3,missed,wrong_side"]  # fmt: skip


def table(folder, name, header, rows):
    (folder / name).write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return folder / name


def scored(folder, found=FOUND, true=TRUE, header=PARTS, true_header=TRUTH, turns=TURNS):
    return score(read_parts(table(folder, "parts.csv", header, found)),
                 read_truth(table(folder, "truth.csv", true_header, true)), turns)


def test_errors_are_taken_modulo_symmetry_and_of_parts_right_side_up(tmp_path):
    result = scored(tmp_path)
    assert result.partner.tolist() == [0, 1, 2, 3]
    assert np.allclose(result.error_mm, [[0.3, -0.4], [0, 0], [0, 1], [np.nan, np.nan]], equal_nan=True)
    assert np.allclose(np.degrees(result.error_rad), [2, -3, np.nan, np.nan], equal_nan=True)
    figures = result.figures()
    assert (figures["recall"], figures["precision"]) == (1, 1)
    assert figures["position_median_mm"] == pytest.approx(0.5)
    assert figures["position_p95_mm"] == pytest.approx(np.percentile([0, 0.5, 1], 95))
    assert figures["yaw_max_deg"] == pytest.approx(3)
    assert figures["mean_x_mm"] == pytest.approx(0.1)


def test_without_symmetry_no_yaw_is_scored(tmp_path):
    assert np.isnan(scored(tmp_path, turns=None).figures()["yaw_median_deg"])


@pytest.mark.parametrize(
    ("row", "changed"),
    [
        ("5,lever,up,60,60,0,0.9,0,1,missed,too_late", {"invented": 1, "precision": 0.8}),
        ("5,lever,up,3,3,0,0.9,0,1,missed,too_late", {"doubles": 1, "precision": 0.8}),
        ("5,unknown,up,60,60,0,0.9,0,1,missed,unknown", {}),
        ("5,lever,up,60,60,0,0.2,0,1,missed,low_score", {}),
    ],
)
def test_a_row_too_many_is_told_for_what_it_is(tmp_path, row, changed):
    before, after = scored(tmp_path).figures(), scored(tmp_path, [*FOUND, row]).figures()
    assert {name: value for name, value in after.items()
            if name != "claimed" and not np.array_equal(value, before[name], equal_nan=True)} == changed


def test_missed_mistaken_and_turned_over_parts_are_counted(tmp_path):
    found = ["1,plate,up,1,0,10,0.9,0,3,picked,", "4,lever,up,300,0,90,0.9,1,3,picked,"]
    figures = scored(tmp_path, found).figures()
    assert {name: figures[name] for name in ("missed", "wrong_kind", "wrong_side", "wrong_side_called_up")} == {
        "missed": 3, "wrong_kind": 1, "wrong_side": 1, "wrong_side_called_up": 1}  # fmt: skip
    assert figures["recall"] == 0.25
    assert figures["precision"] == 0.5


def test_parts_only_ever_cut_by_the_border_need_not_be_found(tmp_path):
    true = [row + f",{whole}" for row, whole in zip(TRUE, [1, 2, 0, 1], strict=True)]
    result = scored(tmp_path, [FOUND[0], FOUND[1], FOUND[3]], true, true_header=TRUTH + ",frames_whole")
    assert result.figures()["recall"] == 1
    assert scored(tmp_path, FOUND, true, true_header=TRUTH + ",frames_whole").figures()["precision"] == 1


def test_trays_are_compared_frame_by_frame(tmp_path):
    true = ["1,lever,up,0,0,0,0", "2,lever,up,1,0,0,1"]
    found = ["1,lever,up,1,0,0,0.9,1,1,picked,", "2,lever,up,0,0,0,0.9,0,1,picked,"]
    result = scored(tmp_path, found, true, true_header=TRUTH + ",frame")
    assert result.partner.tolist() == [1, 0]
    assert result.figures()["position_max_mm"] == 0


def test_coverage_is_the_share_of_errors_within_the_predicted_95_percent(tmp_path):
    rng = np.random.default_rng(0)
    off = rng.normal(0, [0.1, 0.1, 2.0], (500, 3))
    true = [f"{k},lever,up,{20 * k},0,0" for k in range(500)]
    found = [f"{k},lever,up,{20 * k + x:.4f},{y:.4f},{yaw:.4f},1,0,1,picked,,0.1,2"
             for k, (x, y, yaw) in enumerate(off)]
    figures = scored(tmp_path, found, true, PARTS + ",sigma_mm,sigma_deg").figures()
    assert figures["position_coverage"] == pytest.approx(0.95, abs=0.02)
    assert figures["yaw_coverage"] == pytest.approx(0.95, abs=0.025)


POINTS = st.lists(st.tuples(st.integers(0, 8), st.integers(0, 8)), min_size=0, max_size=4, unique=True)


@settings(max_examples=100, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(found=POINTS, true=POINTS)
def test_pairs_are_those_brute_force_finds(tmp_path, found, true):
    """Most pairs within 5 mm, then the least sum of distances, over every assignment."""
    result = scored(tmp_path, [f"{k},lever,up,{x},{y},0,1,0,1,picked," for k, (x, y) in enumerate(found)],
                    [f"{k},lever,up,{x},{y},0" for k, (x, y) in enumerate(true)])
    best = (0, 0.0)
    for order in permutations(range(max(len(found), len(true)))):
        away = [np.hypot(*np.subtract(found[i], true[order[i]])) for i in range(len(found)) if order[i] < len(true)]
        near = [mm for mm in away if mm <= 5]
        best = min(best, (-len(near), sum(near)))
    hits = np.flatnonzero(result.partner >= 0)
    assert len(hits) == -best[0]
    assert np.hypot(*result.error_mm[hits].T).sum() == pytest.approx(best[1])


def test_a_figure_there_is_none_of_keeps_no_limit():
    told = over_limits({"recall": float("nan"), "doubles": 2.0}, {"recall": 0.9}, {"doubles": 1.0})
    assert [line.split()[0] for line in told] == ["recall", "doubles"]
    assert over_limits({"recall": 0.9, "doubles": 1.0}, {"recall": 0.9}, {"doubles": 1.0}) == []


@pytest.mark.parametrize("which", ["parts.csv", "truth.csv"])
@pytest.mark.parametrize("row", ["1,lever,over,0,0,0", "1,lever,up,1e300,0,0", "1,lever,up,0,nan,0", "x,,up,0,0,0"])
def test_wrong_rows_are_refused_by_line(tmp_path, which, row):
    path = table(tmp_path, which, TRUTH, [TRUE[0], row])
    with pytest.raises(InputFault) as caught:
        (read_parts if which == "parts.csv" else read_truth)(path)
    assert caught.value.place.startswith("line 3")


@settings(max_examples=100, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(text=st.binary(max_size=120))
def test_any_bytes_are_read_or_a_fault(tmp_path, text):
    (tmp_path / "parts.csv").write_bytes(PARTS.encode() + b"\n" + text)
    try:
        found = read_parts(tmp_path / "parts.csv")
    except InputFault:
        return
    assert np.isfinite(found.xy_mm).all()


def run(*arguments):
    return CliRunner().invoke(app, ["score", *map(str, arguments)])


def test_the_command_writes_figures_errors_and_a_picture(tmp_path):
    scored(tmp_path, [*FOUND[:3], "5,lever,up,60,60,0,0.9,0,1,missed,too_late"])
    ran = run(tmp_path, "--truth", tmp_path / "truth.csv", "--out", tmp_path / "out")
    assert ran.exit_code == 0, ran.output
    figures = json.loads((tmp_path / "out" / "score.json").read_text(encoding="utf-8"))
    assert figures["invented"] == figures["missed"] == 1
    assert figures["yaw_median_deg"] is None  # no cell, no symmetry
    rows = (tmp_path / "out" / "errors.csv").read_text(encoding="utf-8").splitlines()
    assert [row.split(",")[3] for row in rows[1:]] == ["right", "right", "right", "invented", "missed"]
    assert (tmp_path / "out" / "errors.png").read_bytes().startswith(b"\x89PNG")


def test_limits_make_it_a_check(tmp_path):
    scored(tmp_path)
    told = ("--truth", tmp_path / "truth.csv", "--min-recall", "0.99", "--max-position-p95-mm")
    assert run(tmp_path, *told, "1.0").exit_code == 0
    failed = run(tmp_path, *told, "0.25")
    assert failed.exit_code == 1
    assert "position_p95_mm is 0.95, above 0.25" in failed.output


def test_detections_need_their_recording(tmp_path):
    scored(tmp_path)
    (tmp_path / "parts.csv").unlink()
    assert "neither" in run(tmp_path, "--truth", tmp_path / "truth.csv").exception.line
    (tmp_path / "detections.csv").write_text("frame,part,x_mm,y_mm,yaw_deg,score\n", encoding="utf-8")
    assert "--recording" in run(tmp_path, "--truth", tmp_path / "truth.csv").exception.line


def test_detections_of_a_stream_are_followed_and_scored(tmp_path, recordings_folder):
    stream = recordings_folder / "streams" / "small-14-clusters-steps"
    (tmp_path / "detections.csv").write_bytes((stream / "located.csv").read_bytes())
    limits = ("--min-recall", 1, "--min-precision", 1, "--max-position-p95-mm", 0.25, "--max-yaw-p95-deg", 0.6)
    ran = run(tmp_path, "--truth", stream / "truth.csv", "--recording", stream, "--out", tmp_path / "out", *limits)
    assert ran.exit_code == 0, ran.output
    assert (tmp_path / "out" / "errors.png").stat().st_size > 10_000
