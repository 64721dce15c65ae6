"""Commands: replay a recording, plan from one image."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from cameras.faults import printable
from pipeline.app.shown import progress, show_table

if TYPE_CHECKING:
    from pipeline.decision import Decision
    from pipeline.replay import Run, Setting
    from pipeline.study import Seen
    from pipeline.trip import Pick


TOLD = 8  # parts of an order told on one line


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
    app.command()(replay)
    app.command()(plan)


Recorded = Annotated[Path, typer.Argument(help="Folder with frames.csv and its images.")]
CellFile = Annotated[Path, typer.Option(help="The cell file.")]
Out = Annotated[Path, typer.Option(help="Folder to write to.")]
Order = Annotated[str, typer.Option(help="arrival, nearest or lookahead; otherwise the cell's.")]
Detections = Annotated[Path | None, typer.Option(help="Detections made elsewhere, in pixels, instead of images.")]
Located = Annotated[Path | None, typer.Option(help="Poses made elsewhere, in the cell frame, instead of images.")]
Horizon = Annotated[int, typer.Option(min=0, help="Parts looked at together; 0: the cell's.")]
Budget = Annotated[float, typer.Option(min=0, help="Ms that one decision may take, about; 0: the cell's, or no limit.")]
LeastScore = Annotated[float, typer.Option(min=0, max=1, help="Parts found with less are not picked.")]


def replay(
    recording: Recorded, cell: CellFile, out: Out, order: Order = "", trajectory: Annotated[
        bool, typer.Option("--trajectory", help="Also write the joints every 4 ms.")] = False,
    detections: Detections = None, located: Located = None, horizon: Horizon = 0, least_score: LeastScore = 0.5,
    overlays: Annotated[bool, typer.Option(help="Write each image with what was found drawn on it.")] = True,
    plots: Annotated[bool, typer.Option("--plots", help="Also write the plots as pictures.")] = False,
    budget_ms: Budget = 0.0,
) -> None:
    """Replay a recording: find, follow, filter, order, time and simulate; write tables, pictures and a report.

    Example: sanderling replay demo_images/bells --cell demo_images/bells/cell.toml --out out/bells
    """
    from pipeline.cell import load_cell
    from pipeline.outputs import write_run
    from pipeline.remedy import with_remedies
    from pipeline.study import run, setting

    whole = load_cell(cell)
    seen = _seen(whole, recording, detections, located)
    chosen = setting(seen, least_score)
    order, horizon = order or whole.order.policy, horizon or whole.horizon
    done = with_remedies(chosen, run(chosen, order, horizon, _clock(seen), budget_ms))
    drawn = overlays and detections is None and located is None
    figures = write_run(out, seen, chosen, done, horizon, trajectory, drawn)
    if plots:
        from pipeline.plots.written import write_plots

        write_plots(out / "plots", chosen, done)
    _tell(done, figures)
    print(f"-> {out / 'report.html'}")


def plan(
    recording: Recorded, cell: CellFile, out: Out,
    frame: Annotated[int, typer.Option(help="Number of the image in frames.csv.")],
    order: Order = "", detections: Detections = None, located: Located = None, horizon: Horizon = 0,
    least_score: LeastScore = 0.5, budget_ms: Budget = 0.0,
) -> None:
    """Plan from one image: what can be picked of what it shows, in which order, and what each choice costs.

    Example: sanderling plan demo_images/bells --frame 5 --cell demo_images/bells/cell.toml --out out/plan
    """
    from pipeline.cell import load_cell
    from pipeline.decision import first_decision
    from pipeline.outputs import write_decision, write_run
    from pipeline.remedy import with_remedies
    from pipeline.study import horizon_of, one_frame, policy_of, run, setting
    from pipeline.trip import trips_of
    from pipeline.whole_tray import whole_tray

    whole = load_cell(cell)
    seen = one_frame(whole, recording, _source(detections, located), frame)
    chosen = setting(seen, least_score)
    order, horizon = order or whole.order.policy, horizon or whole.horizon
    done = with_remedies(chosen, run(chosen, order, horizon, budget_ms=budget_ms))
    decision = (whole_tray(chosen, order == "lookahead" and whole.order.objective == "travel", horizon, done)
                or first_decision(chosen, policy_of(chosen, order, budget_ms),
                                  horizon_of(chosen, order, horizon, budget_ms), done))
    figures = write_run(out, seen, chosen, done, horizon, True, detections is None and located is None)
    show_table("Plan", ("pick", "part", "kind", "x mm", "y mm", "grip s", "release s", "to", "elbow"),
               [(n, pick.part.number, pick.part.kind, *(f"{v:.0f}" for v in _gripped_mm(chosen, pick)),
                 f"{pick.cycle.grasp_start_s:.2f}", f"{pick.release_start_s:.2f}",
                 f"{pick.place} {pick.slot + 1}",
                 ("right", "left")[pick.cycle.hold.elbow]) for n, pick in enumerate(done.picks, 1)])  # fmt: skip
    trips = trips_of(done.picks)
    if len(trips) < len(done.picks):
        show_table("Trips", ("trip", "parts, by gripper", "to", "begun s", "done s"),
                   [(n, " ".join(str(pick.part.number) for pick in trip),
                     ", ".join(f"{pick.place} {pick.slot + 1}" for pick in trip),
                     f"{trip[0].cycle.depart_s:.2f}", f"{trip[0].release_end_s:.2f}")
                    for n, trip in enumerate(trips, 1)])  # fmt: skip
    if decision is not None:
        write_decision(out, decision)
        _explain(decision, done.picks[0].decide_s)
    _tell(done, figures)
    print(f"-> {out / 'report.html'}")


def _gripped_mm(setting: "Setting", pick: "Pick") -> list[float]:
    """Where the part is gripped: x, y."""
    cycle = pick.cycle
    return (cycle.hold.at_mm + setting.belt.shift_mm(cycle.grasp_start_s)).tolist()  # type: ignore[no-any-return]


def _explain(decision: "Decision", took_s: float) -> None:
    """The first decision: what was chosen, what else could have come next, and how good it is at most."""
    chosen, parts = decision.chosen, {one.part.number: one.part for one in decision.scene.candidates}
    rows = []
    for n, sequence in enumerate((chosen, *decision.others), 1):
        first = parts[decision.part_no(sequence.nodes[0])]
        weight, time_s = decision.costs(sequence)
        rows.append((n, f"{first.number} {first.kind}", f"{sequence.weight:g}", f"{sequence.end_s:.3f}",
                     f"{0 - weight:+g}", f"{time_s:+.3f}", _line(decision, sequence.nodes)))
    show_table("What could come first",
               ("", "part", "weight", "all done s", "more weight", "more time s", "order, by part"), rows)
    bound = decision.picked.weight_bound
    show_table("The first decision", ("", ""), [
        ("parts, grasps", f"{len(decision.scene.choice.weights)}, {len(decision.scene.choice.nodes)}"),
        ("weight, at most", f"{chosen.weight:g}, " + (f"{bound:g}" if bound < float("inf") else "not bounded")),
        (f"gap in {decision.gap_of}", f"{100 * decision.gap:.2f} %"),
        ("sequences looked at", decision.picked.states),
        ("took", f"{1e3 * took_s:.1f} ms"),
    ])  # fmt: skip


def _line(decision: "Decision", nodes: "tuple[int, ...]") -> str:
    """The first parts of an order."""
    numbers = [str(decision.part_no(node)) for node in nodes]
    return " ".join(numbers[:TOLD] + ["and", str(len(numbers) - TOLD), "more"] * (len(numbers) > TOLD))


def _source(detections: Path | None, located: Path | None):  # type: ignore[no-untyped-def]
    from pipeline.study import Source

    return Source(detections, located)


def _seen(whole, recording: Path, detections: Path | None, located: Path | None) -> "Seen":  # type: ignore[no-untyped-def]
    from pipeline.study import see

    return see(whole, recording, _source(detections, located), lambda rows: progress(rows, len(rows), "find"))  # type: ignore[arg-type]


def _tell(done: "Run", figures: dict[str, object]) -> None:
    """The figures of a run, and why parts were missed."""
    decide, find = figures["decide_ms"], figures["find_ms"]
    show_table(f"Replay by {done.order}", ("", ""), [
        ("parts seen", figures["parts_seen"]),
        ("picked", figures["picked"]),
        ("picks a minute", f"{figures['picks_per_min']:.1f}"),
        ("arm busy", f"{100 * figures['arm_busy']:.0f} %"),  # type: ignore[operator]
        ("joint travel a pick", f"{figures['joint_travel_deg_per_pick']:.0f} deg"),
        ("to decide, median and most", f"{decide['median']:.1f} ms, {decide['max']:.1f} ms"),  # type: ignore[index]
        ("to find, median and most", f"{find['median']:.1f} ms, {find['max']:.1f} ms"),  # type: ignore[index]
    ])  # fmt: skip
    if figures["missed"]:
        reasons: dict[str, list[str]] = {}
        for part, fate in zip(done.parts, done.fates, strict=True):
            if fate:
                reasons.setdefault(fate.reason, []).append(f"part {part.number}: {fate.told}")
        most = sorted(reasons.items(), key=lambda one: (-len(one[1]), one[0]))
        show_table("Missed", ("reason", "parts", "for instance"),
                   [(reason, len(lines), lines[0]) for reason, lines in most])
    for note in (*done.notes, *figures["drift"]):  # type: ignore[misc]
        print(printable(note, 400))


def _clock(seen: "Seen"):  # type: ignore[no-untyped-def]
    """A progress bar over the recording's time."""
    from pipeline.app.shown import advancing

    times = seen.recording.times_s
    return advancing(float(times[0]), float(times[-1]), "replay")
