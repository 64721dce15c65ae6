"""Limits found again from moves timed with noise."""

from pathlib import Path

import numpy as np
import pytest
from some_arms import changed, written_cell
from typer.testing import CliRunner

from cameras.faults import InputFault
from pipeline.app import app
from pipeline.arm import Arm
from pipeline.fit import Moves, cell_with, fit_moves, read_moves
from pipeline.move_time import axis_time

RAD = np.pi / 180
TRUE = np.array([[200 * RAD, 900 * RAD, 9e3 * RAD], [250 * RAD, 1200 * RAD, 12e3 * RAD], [300, 1200, 10e3],
                 [500 * RAD, 2500 * RAD, 25e3 * RAD]])  # fmt: skip
NOISE_S = 2e-3
HEADER = "j1_from,j2_from,j3_from,j4_from,j1_to,j2_to,j3_to,j4_to,time_s\n"


def plain_arm() -> Arm:
    cell = changed()
    return Arm(cell.arm, cell.tool)


def forty_moves(seed: int, limits: np.ndarray = TRUE) -> Moves:
    """Ten moves of each joint alone: as short as only the jerk is felt, long enough for the acceleration, and long."""
    arm, rng = plain_arm(), np.random.default_rng(seed)
    starts, ends = [], []
    for joint, (v, a, j) in enumerate(limits):
        span = arm.limits.upper[joint] - arm.limits.lower[joint]
        for way in [2 * a**3 / j**2] * 3 + [0.85 * v * (v / a + a / j)] * 5 + [span] * 2:
            start = np.array(arm.home)
            start[joint] = arm.limits.lower[joint]
            starts.append(start)
            ends.append(start + min(way * rng.uniform(0.9, 1.1), span) * (np.arange(4) == joint))
    return timed(np.array(starts), np.array(ends), rng, limits)


def timed(start: np.ndarray, end: np.ndarray, rng: np.random.Generator, limits: np.ndarray) -> Moves:
    time = axis_time(end - start, *limits.T).max(axis=1)
    return Moves(start, end, time + rng.normal(0, NOISE_S, len(time)))


@pytest.mark.parametrize("seed", range(5))
def test_forty_moves_with_two_milliseconds_of_noise_give_every_limit_within_three_percent(seed: int) -> None:
    """The search starts from the cell file's limits, up to four times off."""
    fit = fit_moves(forty_moves(seed), plain_arm())
    assert fit.identified.all()
    assert np.abs(fit.limits / TRUE - 1).max() < 0.03


def test_standard_errors_are_what_repeated_fits_scatter_by() -> None:
    fits = [fit_moves(forty_moves(seed), plain_arm()) for seed in range(8)]
    off = np.array([np.log(fit.limits / TRUE) / fit.share_error for fit in fits])
    assert 0.7 < np.sqrt(np.mean(off**2)) < 1.3


def test_the_prediction_error_is_the_noise_and_no_less_than_the_residual() -> None:
    fit = fit_moves(forty_moves(1), plain_arm())
    assert fit.rms_s < fit.predicted_s
    assert fit.predicted_s == pytest.approx(NOISE_S, rel=0.5)
    assert fit.rms_s == pytest.approx(float(np.sqrt(np.mean(fit.residual_s**2))))


def test_moves_of_several_joints_at_once_tell_of_the_slowest() -> None:
    """Sixty moves of all joints together."""
    arm, rng = plain_arm(), np.random.default_rng(3)
    start = rng.uniform(arm.limits.lower, arm.limits.upper, (60, 4))
    way = (arm.limits.upper - arm.limits.lower) * rng.uniform(-0.5, 0.5, (60, 4)) * rng.integers(0, 2, (60, 4))
    moves = timed(start, start + way, rng, TRUE)
    fit = fit_moves(moves, arm)
    assert fit.rms_s < 1.5 * NOISE_S
    assert (np.abs(np.log(fit.limits / TRUE))[fit.identified] < 4 * fit.share_error[fit.identified]).all()


def test_what_no_move_feels_is_not_invented() -> None:
    """Short moves of J1 of very different lengths tell of its jerk alone; the rest stays as in the cell file."""
    arm, rng = plain_arm(), np.random.default_rng(0)
    way = 2 * TRUE[0, 1] ** 3 / TRUE[0, 2] ** 2 * np.geomspace(0.05, 0.9, 12)
    moves = timed(np.tile(arm.home, (12, 1)), arm.home + way[:, None] * [1, 0, 0, 0], rng, TRUE)
    fit = fit_moves(moves, arm)
    assert np.argwhere(fit.identified).tolist() == [[0, 2]]
    cell = changed()
    fitted = cell_with(cell, fit)
    assert fitted.arm.j1.max_jerk == pytest.approx(9000, rel=0.05)
    assert fitted.arm.j1.max_speed == cell.arm.j1.max_speed
    assert fitted.arm.j2 == cell.arm.j2


def test_a_limit_felt_from_one_side_only_is_not_identified() -> None:
    """Moves that just reach full speed would be as quick with more: a slope alone would not tell."""
    arm, rng = plain_arm(), np.random.default_rng(3)
    v, a, j = TRUE[0]
    way = v * (v / a + a / j) * np.geomspace(0.1, 1.02, 12)
    moves = timed(np.tile(arm.home, (12, 1)), arm.home + way[:, None] * [1, 0, 0, 0], rng, TRUE)
    fit = fit_moves(moves, arm)
    assert not fit.identified[0, 0]
    assert fit.identified[0, 2]


def test_a_joint_without_a_jerk_limit_stays_without_one() -> None:
    limits = TRUE.copy()
    limits[:, 2] = np.inf
    rng, arm = np.random.default_rng(0), plain_arm()
    start = np.tile(arm.limits.lower, (40, 1))
    way = np.geomspace(0.02, 1, 10)[np.arange(40) // 4] * (np.arange(4) == np.arange(40)[:, None] % 4)[:, :].T
    moves = timed(start, start + way.T * (arm.limits.upper - arm.limits.lower), rng, limits)
    cell = changed(**{f"arm__j{n}__max_jerk": None for n in (1, 2, 3, 4)})
    fit = fit_moves(moves, Arm(cell.arm, cell.tool))
    assert not fit.identified[:, 2].any()
    assert np.isinf(fit.limits[:, 2]).all()


def written(folder: Path, moves: Moves) -> Path:
    degrees = np.array([180 / np.pi, 180 / np.pi, 1, 180 / np.pi] * 2)
    rows = np.column_stack([np.hstack([moves.start, moves.end]) * degrees, moves.time_s])
    path = folder / "moves.csv"
    path.write_text(HEADER + "\n".join(",".join(f"{v:.9g}" for v in row) for row in rows) + "\n")
    return path


def test_a_table_in_degrees_is_read(tmp_path: Path) -> None:
    moves = forty_moves(0)
    read = read_moves(written(tmp_path, moves))
    assert read.start == pytest.approx(moves.start)
    assert read.end == pytest.approx(moves.end)


@pytest.mark.parametrize(
    ("row", "says"),
    [("0,0,0,0,10,0,0,0,-1", "line 6, time_s"), ("0,0,0,0,0,0,0,0,1", "no joint moves"),
     ("0,0,0,0,nan,0,0,0,1", "j1_to"), ("0,0,0,0,1,0,0,1", "8 values for 9 columns")],
)  # fmt: skip
def test_a_wrong_row_is_named(tmp_path: Path, row: str, says: str) -> None:
    path = tmp_path / "moves.csv"
    path.write_text(HEADER + "0,0,0,0,10,0,0,0,0.5\n" * 4 + row + "\n")
    with pytest.raises(InputFault, match=says):
        read_moves(path)


def test_too_few_moves_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "moves.csv"
    path.write_text(HEADER + "0,0,0,0,10,0,0,0,0.5\n")
    with pytest.raises(InputFault, match="at least 4"):
        read_moves(path)


def test_the_command_shows_limits_and_errors(tmp_path: Path) -> None:
    moves, cell = written(tmp_path, forty_moves(0)), written_cell(tmp_path)
    shown = CliRunner().invoke(app, ["fit", str(moves), "--cell", str(cell)])
    assert shown.exit_code == 0
    assert "max_jerk" in shown.output
    assert "cross-validation" in shown.output
