"""Questions with one answer: the fastest belt, the most arrivals, the shortest look-ahead that is good enough."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cameras.faults import InputFault, printable
from pipeline.cell import MOST_ON_TRAY
from pipeline.policy import MOST_LOOKED_AT
from pipeline.sweep.case import Case
from pipeline.sweep.kept import Outcome
from pipeline.sweep.points import Point
from pipeline.sweep.resample import arrivals_a_minute

FloatArray = NDArray[np.float64]
Runner = Callable[[Sequence[Point]], list[Outcome]]

FACTORS = ("belt-speed", "arrival-rate")
STEP = 1.5  # by which a factor is raised or lowered until the answer lies in between
SLOWEST, FASTEST = 0.05, 20.0
CLOSE = 0.01  # bisection stops at this share of the factor


@dataclass(frozen=True)
class Answer:
    """What was found.

    value: the answer, NaN where there is none. low, high: its 95 % interval. each: what was found seed by seed.
    share: lost at the answer, or left of the best. outcomes: every point that was run for it. why: where there is none.
    """

    setting: str
    value: float
    low: float
    high: float
    each: tuple[float, ...]
    share: float
    outcomes: tuple[Outcome, ...]
    why: str = ""


@dataclass(frozen=True)
class _Bracket:
    """A factor at which little enough is lost, and one at which too much is; 0 and inf where none is known yet."""

    passes: float = 0.0
    fails: float = np.inf

    @property
    def next(self) -> float:
        """The factor to try next; NaN where the answer is close enough, or there is none."""
        if self.passes == 0.0 and self.fails == np.inf:
            return 1.0
        if self.passes == 0.0:
            return self.fails / STEP if self.fails > SLOWEST else np.nan
        if self.fails == np.inf:
            return self.passes * STEP if self.passes < FASTEST else np.nan
        return float(np.sqrt(self.passes * self.fails)) if self.fails > self.passes * (1 + CLOSE) else np.nan


def greatest_factor(setting: str, lost_below: float, base: Sequence[Point], run: Runner) -> Answer:
    """The greatest belt speed or arrival rate at which less than `lost_below` of the parts that can be had is lost.

    base: a point for each seed, to which the factor is added. For each of them by bisection on the factor's logarithm;
    every seed draws the same parts at every factor. The answer is the mean over seeds, with the 95 % interval of a mean
    by Student's t (Student, Biometrika 6, 1908). Raises InputFault for an unknown setting or share.
    """
    if setting not in FACTORS:
        raise InputFault("--find", printable(setting), "can't be found", f"find {', '.join(FACTORS)} or horizon")
    _check_share("--missed-below", lost_below)
    brackets, lost, outcomes = [_Bracket() for _ in base], [np.nan for _ in base], []
    while True:
        tried = [(k, bracket.next) for k, bracket in enumerate(brackets) if np.isfinite(bracket.next)]
        if not tried:
            break
        points = [_with(base[k], setting, round(factor, 6)) for k, factor in tried]
        for (k, factor), outcome in zip(tried, run(points), strict=True):
            share = _figures(outcome)["lost_share"]
            if share < lost_below:
                brackets[k], lost[k] = replace(brackets[k], passes=factor), share
            else:
                brackets[k] = replace(brackets[k], fails=factor)
            outcomes.append(outcome)
    each = tuple(bracket.passes for bracket in brackets)
    if 0.0 in each:
        least = min((outcome for outcome in outcomes), key=lambda outcome: float(outcome.figures["lost_share"]))
        return _none(setting, each, np.nan, outcomes, _why_none(setting, least))
    if np.inf in [bracket.fails for bracket in brackets]:
        why = f"at {FASTEST:g} times what was recorded still less is lost: give a longer run, with more parts"
        return _none(setting, each, float(np.mean(lost)), outcomes, why)
    return Answer(setting, *mean_interval(each), each, float(np.mean(lost)), tuple(outcomes))


def shortest_horizon(within: float, base: Sequence[Point], run: Runner, most: int = MOST_LOOKED_AT) -> Answer:
    """The fewest parts to look at together that pick 1 - within of what the best horizon does, or more, over all seeds.

    base: a point for each seed. most: the longest horizon tried. The interval is where the answer lies when seeds are
    drawn anew (percentile bootstrap: Efron, Ann. Statist. 7, 1979), each with all its horizons. Raises InputFault for a
    share that will not do.
    """
    _check_share("--within", within)
    horizons = range(1, most + 1)
    outcomes = run([_with(point, "horizon", horizon) for point in base for horizon in horizons])
    picked = np.array([_figures(outcome)["picked"] for outcome in outcomes], float).reshape(len(base), len(horizons))
    if not picked.any():
        return _none("horizon", (), np.nan, outcomes, "nothing is picked at any horizon")
    rng = np.random.default_rng(0)
    drawn = picked[rng.integers(len(base), size=(2000, len(base)))].sum(axis=1)
    low, high = np.percentile(_shortest(drawn, within), [2.5, 97.5])
    value, total = _shortest(picked.sum(axis=0, keepdims=True), within)[0], picked.sum(axis=0)
    return Answer("horizon", float(value), float(low), float(high), tuple(_shortest(picked, within).tolist()),
                  float(1 - total[int(value) - 1] / total.max()), tuple(outcomes))


def most_together(cases: Sequence[Case]) -> int:
    """The longest horizon that makes a difference: as long as can be looked at; on trays, as many as lie on one."""
    if any(case.cell.belt is not None for case in cases):
        return MOST_LOOKED_AT
    on_tray = [np.bincount([part.first_row for part in case.parts], minlength=1).max() for case in cases]
    return min(max(int(max(on_tray)), 1), MOST_ON_TRAY)


def mean_interval(values: Sequence[float]) -> tuple[float, float, float]:
    """Mean of n values and its 95 % interval by Student's t; an interval without ends for a single value."""
    from scipy.stats import t

    mean = float(np.mean(values))
    if len(values) < 2:
        return mean, -np.inf, np.inf
    half = float(t.ppf(0.975, len(values) - 1) * np.std(values, ddof=1) / np.sqrt(len(values)))
    return mean, mean - half, mean + half


def in_units(answer: Answer, case: Case) -> str:
    """The answer in mm/s, parts a minute, or parts."""
    if answer.setting == "horizon":
        return f"{answer.value:.0f} parts"
    if answer.setting == "belt-speed":
        return f"{answer.value * float(np.ptp(case.travel_mm)) / case.lasts_s:.0f} mm/s on the mean"
    return f"{answer.value * arrivals_a_minute(case):.1f} parts a minute on the mean"


def _shortest(picked: FloatArray, within: float) -> FloatArray:
    """For each row of picks by horizon (n, h): the shortest horizon within a share of the row's best."""
    enough = picked >= (1 - within) * picked.max(axis=1, keepdims=True) - 1e-9
    return np.asarray(enough.argmax(axis=1) + 1.0)


def _with(point: Point, name: str, value: float) -> Point:
    return replace(point, settings=(*(one for one in point.settings if one[0] != name), (name, value)))


def _figures(outcome: Outcome) -> dict[str, Any]:
    if outcome.failed:
        raise InputFault("--find", outcome.point.told(), f"failed: {outcome.failed}", "mend that first")
    return outcome.figures


def _none(setting: str, each: tuple[float, ...], share: float, outcomes: Sequence[Outcome], why: str) -> Answer:
    return Answer(setting, np.nan, np.nan, np.nan, each, share, tuple(outcomes), why)


def _why_none(setting: str, least: Outcome) -> str:
    missed = least.figures["missed"]
    reasons = ", ".join(f"{many} {reason}" for reason, many in sorted(missed.items(), key=lambda one: -one[1]))
    return (f"not even at a {setting} of {dict(least.point.settings)[setting]:.3g} times what was recorded: still "
            f"{least.figures['lost']} of {least.figures['had']} lost ({reasons})")


def _check_share(option: str, share: float) -> None:
    if not 0 < share < 1:
        raise InputFault(option, f"{share:g}", "will not do", "give a share above 0 and below 100 %, as 1%")
