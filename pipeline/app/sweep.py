"""The command that replays under many settings: sweep."""

import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from cameras.faults import InputFault, printable
from cameras.written import written_whole
from pipeline.app.shown import progress, show_table

if TYPE_CHECKING:
    from pipeline.sweep.case import Case
    from pipeline.sweep.find import Answer, Runner
    from pipeline.sweep.kept import Outcome
    from pipeline.sweep.points import Point, Row

SHOWN = 40  # rows of a table on the terminal
MOST_COLUMNS = 4  # for what differs from point to point
SEEDS = 5  # draws of arrivals that a question is asked of, unless told otherwise


def register(app: typer.Typer) -> None:
    """Add this module's command."""
    app.command()(sweep)


def sweep(
    recordings: Annotated[list[Path], typer.Argument(help="Folders with frames.csv and its images.")],
    cell: Annotated[Path, typer.Option(help="The cell file.")],
    out: Annotated[Path, typer.Option(help="Folder to write to; points already done there are not done again.")],
    change: Annotated[list[str] | None, typer.Option("--set", help="NAME=v1,v2,… or NAME=from:to:steps.")] = None,
    settings: Annotated[Path | None, typer.Option(help="A TOML file with [set] or [[points]] instead.")] = None,
    find: Annotated[str, typer.Option(help="belt-speed, arrival-rate or horizon: find the best one.")] = "",
    missed_below: Annotated[str, typer.Option(help="What may be lost of the parts that can be had.")] = "1%",
    within: Annotated[str, typer.Option(help="How near to the best horizon a shorter one must come.")] = "1%",
    seeds: Annotated[int, typer.Option(min=0, max=10_000, help="Draw arrivals anew so many times.")] = 0,
    length_s: Annotated[float, typer.Option(min=0, help="How long each drawn run is; 0: as the recording.")] = 0,
    jobs: Annotated[int, typer.Option(help="Replays at a time; -1: one a core.")] = -1,
    dask: Annotated[str, typer.Option(help="Address of a cluster's scheduler, as tcp://host:8786.")] = "",
    detections: Annotated[Path | None, typer.Option(help="Detections in pixels, instead of images.")] = None,
    located: Annotated[Path | None, typer.Option(help="Poses in the cell frame, instead of images.")] = None,
    least_score: Annotated[float, typer.Option(min=0, max=1, help="Parts found with less are not picked.")] = 0.5,
) -> None:
    """Replay recordings under many settings, on all cores or a cluster; a table, curves and a heat map.

    Settings: belt-speed, arrival-rate, limits (factors); order, horizon; window-shift, window-length, base-x, base-y,
    travel-height, clear-height, approach (mm); base-yaw (deg); grasp-dwell, release-dwell, latency (s); or any key of
    the cell file, as motion.grasp_s. A table of poses or detections may be named as it is called in each recording.
    Points that are done are kept in OUT: a sweep that was broken off goes on where it was.

    Example: sanderling sweep demo_images/bells --cell demo_images/bells/cell.toml --set belt-speed=0.8:1.6:5 --set
    order=arrival,lookahead --out out/sweep

    Example: sanderling sweep demo_images/bells --cell demo_images/bells/cell.toml --find belt-speed --missed-below 1%
    --out out/sweep
    """
    from pipeline.sweep.find import most_together
    from pipeline.sweep.plots import draw_sweep
    from pipeline.sweep.points import points_of
    from pipeline.sweep.run import run_points
    from pipeline.sweep.tables import write_sweep

    rows = _rows(change or [], settings)
    shares = _share("--missed-below", missed_below), _share("--within", within)
    if not rows and not find:
        raise InputFault("sweep", "", "nothing to change", "give --set, --settings or --find")
    cases = _cases(recordings, cell, detections, located, least_score, out / "found")
    names = [case.name for case in cases]
    lasts = length_s or max(case.lasts_s for case in cases)
    draws = range(1, (seeds or (SEEDS if find else 0)) + 1)
    begun = time.perf_counter()

    def run(points: "Sequence[Point]") -> "list[Outcome]":
        return run_points(cases, points, out / "points", jobs, dask,
                          lambda outcomes, total: progress(outcomes, total, "replay"))

    try:
        answers = [(row, _answer(find, shares, points_of([row], len(cases), draws, lasts), run, most_together(cases)))
                   for row in rows or [()] if find]  # fmt: skip
        outcomes = _points_of(answers) if find else run(points_of(rows, len(cases), draws, lasts))
    except KeyboardInterrupt:
        print("interrupted; what is done is kept, the same command goes on from there", file=sys.stderr)
        raise typer.Exit(130) from None
    took_s = time.perf_counter() - begun
    with written_whole(out / "sweep.csv") as part:
        write_sweep(part, outcomes, names)
    if find:
        _tell_answers(answers, cases, out)
    else:
        draw_sweep(out, outcomes)
        _show(outcomes, names)
    _sum_up(outcomes, took_s, jobs, dask)
    print(f"-> {out}")
    if any(outcome.failed for outcome in outcomes):
        raise typer.Exit(1)


def _rows(change: list[str], settings: Path | None) -> list["Row"]:
    """What is to be set: a grid of what the command line gives, and what a file lists."""
    from pipeline.sweep.points import grid, parsed, read_settings

    values = [parsed(text) for text in change]
    for name, _ in values:
        if sum(other == name for other, _ in values) > 1:
            raise InputFault("--set", name, "stands twice", "give all its values at once")
    return (grid(dict(values)) if values else []) + (read_settings(settings) if settings else [])


def _share(option: str, text: str) -> float:
    """`1%` or `0.01` as a share."""
    try:
        share = float(text.rstrip("% ")) / (100 if text.rstrip().endswith("%") else 1)
    except ValueError:
        share = -1.0
    if not 0 < share < 1:
        raise InputFault(option, printable(text), "will not do", "give a share above 0 and below 100 %, as 1%")
    return share


def _cases(recordings: list[Path], cell: Path, detections: Path | None, located: Path | None,
           least_score: float, found: Path) -> list["Case"]:
    """Each recording, its parts found once and kept in a folder."""
    from pipeline.cell import load_cell
    from pipeline.study import Source, see
    from pipeline.sweep.case import case_of
    from pipeline.sweep.found import Found

    whole = load_cell(cell)
    cases = []
    for one in recordings:
        source = Source(_beside(one, detections, recordings), _beside(one, located, recordings))
        seen = see(whole, one, source, lambda rows: progress(rows, len(list(rows)), "find"), Found(found))
        cases.append(case_of(seen, str(one), least_score))
    return cases


def _beside(recording: Path, table: Path | None, recordings: list[Path]) -> Path | None:
    """A table by its own path, or, a bare name, as it is called in each recording's folder."""
    if table is None or (len(recordings) == 1 and table.exists()):
        return table
    if len(table.parts) > 1 and len(recordings) > 1:
        raise InputFault(table, "", "one table for several recordings", "give the name it has in each of their folders")
    return recording / table if len(table.parts) == 1 else table


def _answer(find: str, shares: tuple[float, float], base: "Sequence[Point]", run: "Runner", most: int) -> "Answer":
    from pipeline.sweep.find import greatest_factor, shortest_horizon

    if find == "horizon":
        return shortest_horizon(shares[1], base, run, most)
    return greatest_factor(find, shares[0], base, run)


def _points_of(answers: list[tuple["Row", "Answer"]]) -> list["Outcome"]:
    """Every point that was run for some answers, once."""
    return list({outcome.point: outcome for _, answer in answers for outcome in answer.outcomes}.values())


def _tell_answers(answers: list[tuple["Row", "Answer"]], cases: list["Case"], out: Path) -> None:
    """Write, draw and show answers."""
    from pipeline.sweep.find import in_units
    from pipeline.sweep.plots import draw_answers
    from pipeline.sweep.tables import write_answers

    with written_whole(out / "find.json") as part:
        write_answers(part, answers)
    draw_answers(out / "find.png", answers)
    rows = []
    for row, answer in answers:
        told = ("", "") if answer.why else (f"{answer.low:.3g} to {answer.high:.3g}", in_units(answer, cases[0]))
        rows.append((", ".join(f"{name} {value}" for name, value in row) or "the cell as it is",
                     answer.why or f"{answer.value:.3g}", *told, ", ".join(f"{value:.3g}" for value in answer.each)))
    show_table(f"Found: {answers[0][1].setting}", ("with", "answer", "95 % interval", "in units", "seed by seed"), rows)


def _show(outcomes: list["Outcome"], names: list[str]) -> None:
    """The first rows of the table: only columns in which points differ, then figures."""
    from pipeline.sweep.tables import setting_names

    asked = [("recording", [Path(names[one.point.recording]).name for one in outcomes]),
             *((name, [str(dict(one.point.settings).get(name, "")) for one in outcomes])
               for name in setting_names(outcomes)),
             ("seed", [str(one.point.seed or "") for one in outcomes])]  # fmt: skip
    shown = [(name, column) for name, column in asked if len(set(column)) > 1]
    if len(shown) > MOST_COLUMNS:
        shown = [*(one for one in shown if one[0] == "recording"), ("with", [one.point.told() for one in outcomes])]
    rows = [(*(column[k] for _, column in shown), f"{one.figures['picks_per_min']:.1f}", one.figures["picked"],
             one.figures["parts_seen"], f"{100 * one.figures['lost_share']:.1f} %",
             f"{100 * one.figures['waiting']:.0f} %") for k, one in enumerate(outcomes) if not one.failed]  # fmt: skip
    if not rows:
        return
    show_table("Sweep", (*(name for name, _ in shown), "picks/min", "picked", "of", "lost", "waiting"), rows[:SHOWN])
    if len(rows) > SHOWN:
        print(f"and {len(rows) - SHOWN} more in sweep.csv")


def _sum_up(outcomes: list["Outcome"], took_s: float, jobs: int, dask: str) -> None:
    """What was run, what was taken from before, what failed, and how busy the cores were."""
    import joblib

    ran = [one for one in outcomes if not one.again]
    again, failed = len(outcomes) - len(ran), [one for one in outcomes if one.failed]
    told = f"{len(outcomes)} point{'s' * (len(outcomes) != 1)}: {len(ran)} run"
    told += f", {again} done before" if again else ""
    workers = min(joblib.cpu_count() if jobs < 0 else max(jobs, 1), max(len(ran), 1))
    if ran and not dask:
        told += f", {workers} at a time, each busy {100 * sum(one.ran_s for one in ran) / workers / took_s:.0f} %"
    print(told + f", {took_s:.0f} s")
    alike: dict[str, list[Outcome]] = {}
    for one in failed:
        alike.setdefault(one.failed, []).append(one)
    for why, several in list(alike.items())[:SHOWN]:
        more = f" and {len(several) - 1} more" if len(several) > 1 else ""
        print(f"failed: {several[0].point.told()}{more}: {why}", file=sys.stderr)
