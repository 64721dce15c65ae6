"""The folder that a replay writes: tables, summary, pictures, report. Each file is written whole or not at all."""

import json
from pathlib import Path
from typing import Any

import numpy as np

from cameras.written import written_whole
from pipeline.belt import Belt
from pipeline.budget import budgets_of, maps_at_hand
from pipeline.decision import Decision, told
from pipeline.doubts import doubts_of
from pipeline.finding import write_overlays
from pipeline.page import write_page
from pipeline.plan_graph import decision_graph, write_graph
from pipeline.replay import Run, Setting
from pipeline.study import Seen
from pipeline.tables import summary, write_parts, write_picks, write_summary, write_trajectory


def write_run(out: Path, seen: Seen, setting: Setting, run: Run, horizon: int, trajectory: bool,
              overlays: bool) -> dict[str, Any]:
    """Write everything about a run, its misses with their remedies; its figures, as in summary.json."""
    figures = summary(run, horizon, seen.find_s.tolist(), more_figures(seen, run))
    with written_whole(out / "parts.csv") as part:
        write_parts(part, run, seen.recording)
    with written_whole(out / "picks.csv") as part:
        write_picks(part, run)
    if trajectory:
        with written_whole(out / "trajectory.csv") as part:
            write_trajectory(part, run)
    if overlays:
        write_overlays(out / "frames", seen.recording, seen.cell, seen.sightings)
    with written_whole(out / "report.html") as part:
        write_page(part, seen, setting, run, figures)
    with written_whole(out / "summary.json") as part:
        write_summary(part, figures)
    return figures


def write_decision(out: Path, decision: Decision) -> None:
    """Write a decision: order.json, the graph behind it as order.graphml, and order.png, drawn over the belt."""
    from pipeline.plots.decision import plot_decision
    from pipeline.plots.written import saved
    from pipeline.whole_tray import WholeTray, told_tray, tray_graph

    if isinstance(decision, WholeTray):
        plain, graph = told_tray(decision), tray_graph(decision)
    else:
        plain, graph = told(decision), decision_graph(decision)
    with written_whole(out / "order.json") as part:
        part.write_text(json.dumps(plain, indent=1, ensure_ascii=False, allow_nan=False) + "\n", encoding="utf-8")
    with written_whole(out / "order.graphml") as part:
        write_graph(part, graph)
    saved(plot_decision(decision), out / "order.png")


def more_figures(seen: Seen, run: Run) -> dict[str, Any]:
    """Further figures: how the cycle splits, how sightings drift."""
    cycles = [pick.cycle for pick in run.picks]
    split = {
        "to_part": [c.met_s - c.depart_s for c in cycles], "down": [c.grasp_start_s - c.met_s for c in cycles],
        "grasp": [c.grasp_end_s - c.grasp_start_s for c in cycles], "up": [c.left_s - c.grasp_end_s for c in cycles],
        "across": [c.there_s - c.left_s for c in cycles], "set_down": [c.release_end_s - c.there_s for c in cycles],
    }  # fmt: skip
    for k, pick in enumerate(run.picks):
        if pick.set_down:
            split["across"][k] += pick.set_down.there_s - pick.set_down.way.depart_s
            split["set_down"][k] += pick.set_down.release_end_s - pick.set_down.there_s
    drift = seen.followed.drift
    return {
        "cell": seen.cell.name,
        "cycle_s": {name: round(float(np.mean(times)), 4) if times else 0.0 for name, times in split.items()},
        "error_budget": _error_budget(seen),
        "drift": [*doubts_of(seen), *(drift.findings if drift is not None else [])],
    }


def _error_budget(seen: Seen) -> dict[str, Any]:
    """For each kind of part what puts it off at the gripper; empty without a calibrated camera."""
    maps = maps_at_hand(seen.cell, np.unique(seen.recording.cameras).tolist())
    belt = Belt(seen.recording.times_s, seen.recording.counts, seen.cell.belt)
    return {one.part: one.document() for one in budgets_of(seen.cell, maps, seen.sightings, belt.fastest_mm_s)}
