"""All points of a sweep, on all cores or a cluster; each done once, however often the sweep is broken off."""

import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path
from typing import Any

from cameras.faults import InputFault, InputFaults, printable
from pipeline.replay import Run
from pipeline.study import run
from pipeline.sweep.case import Case
from pipeline.sweep.kept import Kept, Outcome
from pipeline.sweep.points import Point
from pipeline.sweep.resample import resampled, spread
from pipeline.sweep.settings import changed_cell, factor_of, faster_belt
from pipeline.tables import summary

Ticking = Callable[[Iterator[Outcome], int], Iterator[Outcome]]
NEVER = ("unknown", "wrong_side", "low_score", "out_of_reach", "joint_limit", "keepout")  # at any speed, in any order
RESTARTS = 3  # how often a sweep goes on after a worker process was killed


def run_points(cases: Sequence[Case], points: Sequence[Point], folder: Path, jobs: int = -1, dask: str = "",
               ticking: Ticking = lambda outcomes, total: outcomes) -> list[Outcome]:
    """The outcome of each point, in their order; those kept in `folder` from an earlier run are not run again.

    jobs: how many at a time, -1 for one a core. dask: address of a cluster's scheduler, which runs them instead.
    ticking wraps the outcomes as they come, for a progress bar. A point that fails is an outcome like others.
    """
    kept, digests = Kept(folder), [case.digest() for case in cases]
    keys = [point.key(digests[point.recording]) for point in points]
    outcomes: dict[str, Outcome] = {}

    def coming() -> Iterator[Outcome]:
        wanted = dict(zip(keys, points, strict=True))
        for key, point in list(wanted.items()):
            before = kept.find(point, key)
            if before is not None:
                outcomes[key] = before
                del wanted[key]
                yield before
        for key, outcome in _done(cases, wanted, jobs, dask):
            kept.keep(outcome, key)
            outcomes[key] = outcome
            yield outcome

    for _ in ticking(coming(), len(set(keys))):
        pass
    return [outcomes[key] for key in keys]


def changed(case: Case, point: Point) -> Case:
    """The case as a point's settings make it. Raises InputFault or CellError for settings that will not do."""
    settings = dict(point.settings)
    rate, speed = factor_of(settings, "arrival-rate"), factor_of(settings, "belt-speed")
    case = replace(case, cell=changed_cell(case.cell, settings))
    if point.seed is not None:
        case = resampled(case, point.length_s, point.seed, rate)
    elif rate != 1.0:
        case = spread(case, rate)
    return faster_belt(case, speed) if "belt-speed" in settings else case


def replayed(case: Case, point: Point) -> dict[str, Any]:
    """The figures of one point. Raises InputFault or CellError for settings that will not do."""
    case = changed(case, point)
    horizon = case.cell.horizon
    return figures_of(run(case.setting(), case.cell.order.policy, horizon), horizon)


def figures_of(done: Run, horizon: int) -> dict[str, Any]:
    """summary.json's figures; had: parts that can be had at all; lost: those of them missed; waiting: share of time."""
    figures = summary(done, horizon, [])
    never = sum(many for reason, many in figures["missed"].items() if reason in NEVER)
    had = figures["parts_seen"] - never
    lost = had - figures["picked"]
    return {**figures, "had": had, "lost": lost, "lost_share": lost / had if had else 0.0,
            "waiting": round(1.0 - figures["arm_busy"], 4)}


def _done(cases: Sequence[Case], wanted: Mapping[str, Point], jobs: int, dask: str) -> Iterator[tuple[str, Outcome]]:
    """Each point's outcome as it comes. Where a worker process is killed, the rest goes on in new ones."""
    from joblib.externals.loky.process_executor import TerminatedWorkerError

    left = dict(wanted)
    for _ in range(1 + RESTARTS):
        try:
            for key, outcome in _parallel(cases, left, jobs, dask):
                del left[key]
                yield key, outcome
            return
        except TerminatedWorkerError:
            continue
    for key, point in left.items():
        yield key, Outcome(point, {}, "its worker process was killed (out of memory?): run fewer jobs")


def _parallel(
    cases: Sequence[Case], wanted: Mapping[str, Point], jobs: int, dask: str
) -> Iterator[tuple[str, Outcome]]:
    from joblib import Parallel, delayed, parallel_config

    with ExitStack() as stack:
        if dask:
            stack.enter_context(_cluster(dask))
            stack.enter_context(parallel_config(backend="dask"))
        else:
            stack.enter_context(parallel_config(backend="loky", n_jobs=jobs))
        work = [delayed(_outcome)(key, cases[point.recording], point) for key, point in wanted.items()]
        yield from Parallel(return_as="generator_unordered", batch_size=1)(work)


def _cluster(address: str):  # type: ignore[no-untyped-def]
    try:
        from distributed import Client  # type: ignore[import-not-found,unused-ignore]
    except ImportError:
        raise InputFault("--dask", "", "needs dask.distributed",
                         "run `python -m pip install dask[distributed]`") from None
    try:
        return Client(address, timeout=10, set_as_default=True)
    except (OSError, ValueError, TimeoutError) as error:
        raise InputFault("--dask", printable(address), f"no scheduler answers ({printable(error, 80)})",
                         "give its address, as tcp://host:8786") from None


def _outcome(key: str, case: Case, point: Point) -> tuple[str, Outcome]:
    """What a worker does: replay one point, and bring home whatever becomes of it."""
    begun = time.perf_counter()
    try:
        figures, failed = replayed(case, point), ""
    except (InputFault, InputFaults) as faults:
        figures, failed = {}, printable(faults, 400)
    except Exception as error:  # a fault of ours at one point must not lose the others
        figures, failed = {}, f"{type(error).__name__}: {printable(error, 300)}"
    return key, Outcome(point, figures, failed, time.perf_counter() - begun)
