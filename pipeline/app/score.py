"""Command: score."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from cameras.written import written_whole
from pipeline.app.shown import show_table

if TYPE_CHECKING:
    from pipeline.cell import Cell
    from pipeline.score import Score
    from pipeline.sighted import Sighted

SHARES, UNITS = ("recall", "precision", "position_coverage", "yaw_coverage"), ("_mm", "_deg")
PARTS, DETECTIONS = "parts.csv", "detections.csv"


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
    app.command("score")(score)


def score(
    folder: Annotated[Path, typer.Argument(help="What a replay wrote (parts.csv), or find (detections.csv).")],
    truth: Annotated[Path, typer.Option(help="True or hand-labelled poses, at counts 0.")],
    cell: Annotated[Path | None, typer.Option(
        help="The cell file, for the parts' symmetry; by default cell.toml beside the truth. Without one no yaw is "
        "scored.")] = None,
    recording: Annotated[Path | None, typer.Option(help="The recording, where detections are scored.")] = None,
    out: Annotated[Path | None, typer.Option(help="Folder for score.json, errors.csv and errors.png.")] = None,
    match_mm: Annotated[float, typer.Option(min=0.001, max=1000, help="Nearer than this, found is true.")] = 5.0,
    min_recall: Annotated[float | None, typer.Option(help="Fail below.")] = None,
    min_precision: Annotated[float | None, typer.Option(help="Fail below.")] = None,
    max_doubles: Annotated[float | None, typer.Option(help="Fail above.")] = None,
    max_wrong_kind: Annotated[float | None, typer.Option(help="Fail above.")] = None,
    max_wrong_side: Annotated[float | None, typer.Option(help="Fail above.")] = None,
    max_position_median_mm: Annotated[float | None, typer.Option(help="Fail above.")] = None,
    max_position_p95_mm: Annotated[float | None, typer.Option(help="Fail above.")] = None,
    max_yaw_median_deg: Annotated[float | None, typer.Option(help="Fail above.")] = None,
    max_yaw_p95_deg: Annotated[float | None, typer.Option(help="Fail above.")] = None,
    min_position_coverage: Annotated[float | None, typer.Option(
        help="Fail below: share of errors inside the predicted 95 %.")] = None,
) -> None:  # fmt: skip
    """Compare what was found with the truth. With a limit it is a check: exit status 1 where one is not kept.

    Example: sanderling score out/bells --truth demo_images/bells/truth.csv --max-position-p95-mm 0.5
    """
    from pipeline.cell import load_cell
    from pipeline.score import over_limits, read_parts, read_truth
    from pipeline.score import score as compared

    beside = truth.parent / "cell.toml"
    whole = load_cell(cell or beside) if cell or beside.is_file() else None
    sighted = None if (folder / PARTS).is_file() else _sighted(folder, recording, whole)
    found = read_parts(folder / PARTS) if sighted is None else sighted.poses
    turns = {name: part.turns for name, part in whole.parts.items()} if whole else None
    result = compared(found, read_truth(truth), turns, match_mm)
    figures = result.figures()
    if out is not None:
        _write(out, result, figures, sighted)
    _show(figures)
    if whole is None:
        print("no yaw is scored: give --cell for the parts' symmetry")
    told = over_limits(
        figures,
        {name: limit for name, limit in (
            ("recall", min_recall), ("precision", min_precision), ("position_coverage", min_position_coverage),
        ) if limit is not None},
        {name: limit for name, limit in (
            ("doubles", max_doubles), ("wrong_kind", max_wrong_kind), ("wrong_side", max_wrong_side),
            ("position_median_mm", max_position_median_mm), ("position_p95_mm", max_position_p95_mm),
            ("yaw_median_deg", max_yaw_median_deg), ("yaw_p95_deg", max_yaw_p95_deg),
        ) if limit is not None},
    )  # fmt: skip
    for line in told:
        print(line)
    if told:
        raise typer.Exit(1)


def _sighted(folder: Path, recording: Path | None, cell: "Cell | None") -> "Sighted":
    """The detections in a folder, followed to parts."""
    from cameras.faults import InputFault
    from pipeline.sighted import read_sighted

    if not (folder / DETECTIONS).is_file():
        raise InputFault(folder, "", f"holds neither {PARTS} nor {DETECTIONS}", "name what a replay or find wrote")
    if recording is None or cell is None:
        raise InputFault(folder / DETECTIONS, "", "detections are scored by the counts of their frames",
                         "give --recording and --cell")
    return read_sighted(folder / DETECTIONS, recording, cell)


def _write(out: Path, result: "Score", figures: dict[str, float], sighted: "Sighted | None") -> None:
    import json
    import math

    from pipeline.error_plot import plot_errors
    from pipeline.score import write_errors

    told = {name: round(value, 6) if math.isfinite(value) else None for name, value in figures.items()}
    with (written_whole(out / "score.json") as summary, written_whole(out / "errors.csv") as table,
          written_whole(out / "errors.png") as picture):  # fmt: skip
        summary.write_text(json.dumps(told, indent=2) + "\n", encoding="utf-8")
        write_errors(table, result)
        plot_errors(result, picture, None if sighted is None else sighted.errors(result))


def _show(figures: dict[str, float]) -> None:
    """The figures as a table; what there is nothing to take from is left out."""
    import math

    def shown(name: str) -> str:
        value = figures[name]
        return f"{100 * value:.2f} %" if name in SHARES else f"{value:.3f}" if name.endswith(UNITS) else f"{value:.0f}"

    rows = [(name.replace("_", " "), shown(name)) for name, value in figures.items() if math.isfinite(value)]
    show_table("Score", ("figure", "value"), rows)
