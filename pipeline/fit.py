"""Speed, acceleration and jerk of each joint from a table of measured moves.

Nonlinear least squares on the closed form of `move_time` (the time of the slowest joint), in the logarithms of the
twelve limits. Covariance s2 (J^T J)^-1 (Seber, Wild, Nonlinear Regression, 1989, section 2.1.2); prediction error by
cross-validation (Hastie, Tibshirani, Friedman, The Elements of Statistical Learning, 2009, section 7.10). A limit
that no move feels is not found: it keeps its value from the cell file and is marked.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from cameras.columns import read_columns
from cameras.faults import InputFault
from pipeline.arm import Arm
from pipeline.cell import Cell
from pipeline.move_time import axis_time

Floats = NDArray[np.float64]

JOINTS = ("J1", "J2", "J3", "J4")
LIMITS = ("max_speed", "max_accel", "max_jerk")
FEWEST_MOVES = 4
FOLDS = 10
LEAST_TIMING_S = 1e-4  # no stopwatch is taken to be better than this when asked what a table can tell
VAGUE = 0.25  # a limit known no better than to this share is not identified
FARTHEST = np.log(100.0)  # a limit is sought within this factor of the cell file's
GRID = np.log(np.geomspace(1 / 16, 16, 13))  # factors on each limit that a start is looked for among
GRID_ROUNDS = 3
GRID_MOVES = 200  # of a longer table only so many are looked at for the start
RISE_S = 0.02  # the rise of the acceleration to start from where the cell file has no jerk limit


@dataclass(frozen=True, eq=False)
class Moves:
    """Measured moves from rest to rest: joints (n, 4) in rad and mm, times (n,) in s."""

    start: Floats
    end: Floats
    time_s: Floats

    def __len__(self) -> int:
        return len(self.time_s)


@dataclass(frozen=True, eq=False)
class Fit:
    """Limits of four joints found from n moves. Rows J1 to J4, columns speed, acceleration, jerk; rad, for J3 mm."""

    limits: Floats  # (4, 3)
    share_error: Floats  # (4, 3) standard errors as shares of the limits; inf: no move feels this limit
    identified: NDArray[np.bool_]  # (4, 3)
    residual_s: Floats  # (n,) measured less modelled
    rms_s: float  # of the residuals
    predicted_s: float  # RMS error of moves the fit had not seen


def read_moves(path: str | Path) -> Moves:
    """Measured moves from a CSV file; raises InputFault."""
    names = [f"j{n}_{end}" for end in ("from", "to") for n in (1, 2, 3, 4)]
    table = read_columns(Path(path), dict.fromkeys([*names, "time_s"], float))
    values = np.column_stack([np.asarray(table[name], np.float64) for name in names])
    values[:, [0, 1, 3, 4, 5, 7]] *= np.pi / 180
    time_s, line = np.asarray(table["time_s"], np.float64), table["line"]
    if len(time_s) < FEWEST_MOVES:
        raise InputFault(path, "", f"{len(time_s)} moves", f"measure at least {FEWEST_MOVES}, better 40")
    for wrong, column, fault, remedy in (
        (time_s <= 0, "time_s", "a move takes more than no time", "measure it in seconds"),
        ((values[:, :4] == values[:, 4:]).all(axis=1), "j1_to", "no joint moves", "leave the row out"),
    ):
        if wrong.any():
            raise InputFault(path, f"line {line[np.argmax(wrong)]}, {column}", fault, remedy)
    return Moves(values[:, :4], values[:, 4:], time_s)


def fit_moves(moves: Moves, arm: Arm) -> Fit:
    """Limits that best explain the moves, sought from those of the arm; see `Fit`."""
    guess = np.log(_limits_of(arm))
    found = _least_squares(moves, guess)
    residual = _residual(found, moves)
    error = _share_error(found, moves, residual)
    identified = (error <= VAGUE) & _bounded(moves, found, error)
    kept = np.where(identified, np.exp(found), _limits_of(arm))
    unlimited = np.column_stack([np.zeros((4, 2), bool), np.isinf(arm.limits.jerk)]) & ~identified
    return Fit(np.where(unlimited, np.inf, kept), error, identified, residual, _rms(residual),
               _rms(_unseen(moves, found)))


def cell_with(cell: Cell, fit: Fit) -> Cell:
    """The cell with the limits that were identified in place of its own."""
    joints = {}
    for n, joint in enumerate(cell.arm.joints):
        unit = 1.0 if n == 2 else 180 / np.pi
        new = {key: float(fit.limits[n, k] * unit) for k, key in enumerate(LIMITS) if fit.identified[n, k]}
        joints[f"j{n + 1}"] = joint.model_copy(update=new)
    return cell.model_copy(update={"arm": cell.arm.model_copy(update=joints)})


def _limits_of(arm: Arm) -> Floats:
    """Limits (4, 3) of the arm; where a jerk is not limited, one that the acceleration reaches in RISE_S."""
    limits = arm.limits
    jerk = np.where(np.isinf(limits.jerk), limits.accel / RISE_S, limits.jerk)
    return np.column_stack([limits.speed, limits.accel, jerk])


def _residual(logs: Floats, moves: Moves) -> Floats:
    """Measured less modelled times (n,) for logarithms (4, 3) of the limits."""
    return np.asarray(moves.time_s - axis_time(moves.end - moves.start, *np.exp(logs).T).max(axis=1))


def _least_squares(moves: Moves, guess: Floats) -> Floats:
    """Logarithms (4, 3) of the limits."""
    starts = [guess, _nearby(moves, guess)]
    return min((_descend(moves, guess, start)[0] for start in starts), key=lambda logs: _cost(logs, moves))


def _descend(moves: Moves, guess: Floats, start: Floats, held: int = -1) -> tuple[Floats, float]:
    """Least squares from a start, with one of the twelve held if asked: logarithms (4, 3), sum of squares.

    The pull to the guess is far below the noise: it keeps still what no move feels.
    """
    free = np.arange(12) != held

    def whole(part: Floats) -> Floats:
        logs = start.ravel().copy()
        logs[free] = part
        return logs.reshape(4, 3)

    def misfit(part: Floats) -> Floats:
        return np.concatenate([_residual(whole(part), moves), 1e-6 * (part - guess.ravel()[free])])

    middle = guess.ravel()[free]
    first = np.clip(start.ravel()[free], middle - FARTHEST, middle + FARTHEST)
    bounds = (middle - 1.001 * FARTHEST, middle + 1.001 * FARTHEST)
    logs = whole(least_squares(misfit, first, bounds=bounds, x_scale=0.1, xtol=1e-10).x)
    return logs, _cost(logs, moves)


def _cost(logs: Floats, moves: Moves) -> float:
    return float(np.sum(_residual(logs, moves) ** 2))


def _bounded(moves: Moves, found: Floats, error: Floats) -> NDArray[np.bool_]:
    """Whether the moves speak against each limit (4, 3) being VAGUE less and VAGUE more, the others fitted anew.

    The profile sum of squares has to rise by twice the noise, squared (Seber, Wild, section 5.2): the errors from
    the slopes alone take no notice of a limit that is felt from one side only.
    """
    least = _cost(found, moves)
    rise = 4 * max(least / max(len(moves) - 12, 1), LEAST_TIMING_S**2)
    bounded = error <= VAGUE
    for k in np.flatnonzero(bounded):
        for off in (-VAGUE, VAGUE):
            start = found + off * np.eye(12)[k].reshape(4, 3)
            bounded.flat[k] &= _descend(moves, found, start, int(k))[1] > least + rise
    return bounded


def _nearby(moves: Moves, guess: Floats) -> Floats:
    """The best of a grid of limits, one joint after the other, so that the descent starts in the right valley."""
    some = slice(None, None, 1 + len(moves) // GRID_MOVES)
    way, measured = (moves.end - moves.start)[some], moves.time_s[some, None]
    logs = guess.copy()
    steps = np.stack(np.meshgrid(GRID, GRID, GRID), axis=-1).reshape(-1, 3)
    for joint in (0, 1, 2, 3) * GRID_ROUNDS:
        times = axis_time(way, *np.exp(logs).T)
        times[:, joint] = 0.0
        tried = guess[joint] + steps
        own = axis_time(way[:, joint, None], *np.exp(tried).T)  # (n, tried)
        misses = measured - np.maximum(own, times.max(axis=1)[:, None])
        logs[joint] = tried[np.argmin((misses**2).sum(axis=0))]
    return logs


def _share_error(logs: Floats, moves: Moves, residual: Floats) -> Floats:
    """Standard errors (4, 3) of the logarithms; inf where no move feels a limit."""
    step = 1e-5
    slopes = np.empty((len(moves), 12))
    for k, shift in enumerate(step * np.eye(12)):
        slopes[:, k] = (_residual(logs + shift.reshape(4, 3), moves) - _residual(logs - shift.reshape(4, 3), moves))
    slopes /= 2 * step
    sigma = max(np.sqrt(np.sum(residual**2) / max(len(moves) - np.linalg.matrix_rank(slopes), 1)), LEAST_TIMING_S)
    _, stretch, axes = np.linalg.svd(slopes, full_matrices=True)
    weak = np.full(12, 1e-9)
    weak[: len(stretch)] = np.maximum(stretch, 1e-9)
    error = sigma * np.sqrt(((axes / weak[:, None]) ** 2).sum(axis=0)).reshape(4, 3)
    return np.where(error <= 1e3, error, np.inf)


def _unseen(moves: Moves, found: Floats) -> Floats:
    """Errors (n,) of each move's time as predicted from the other folds."""
    order = np.random.default_rng(0).permutation(len(moves))
    errors = np.empty(len(moves))
    for fold in range(min(FOLDS, len(moves))):
        out = np.zeros(len(moves), bool)
        out[order[fold::FOLDS]] = True
        seen, left = (Moves(moves.start[m], moves.end[m], moves.time_s[m]) for m in (~out, out))
        errors[out] = _residual(_least_squares(seen, found), left)
    return errors


def _rms(values: Floats) -> float:
    return float(np.sqrt(np.mean(values**2)))
