"""Commands for decisions about a cell: new, compare, export."""

from pathlib import Path
from typing import Annotated

import typer

from pipeline.app.shown import progress, show_table

Recorded = Annotated[Path, typer.Argument(help="Folder with frames.csv and its images.")]
Out = Annotated[Path, typer.Option(help="Folder to write to.")]
Detections = Annotated[Path | None, typer.Option(help="Detections made elsewhere, in pixels, instead of images.")]
Located = Annotated[Path | None, typer.Option(help="Poses made elsewhere, in the cell frame, instead of images.")]
Horizon = Annotated[int, typer.Option(min=0, help="Parts looked at together; 0: the cell's.")]
LeastScore = Annotated[float, typer.Option(min=0, max=1, help="Parts found with less are not picked.")]


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
    app.command()(new)
    app.command()(compare)
    app.command()(export)


def new(folder: Annotated[Path, typer.Argument(help="Folder to make.")]) -> None:
    """Lay out a folder for a cell of one's own: a commented cell file, and tables with headers and no rows.

    Example: sanderling new my_cell
    """
    from pipeline.new_cell import new_cell

    for path in new_cell(folder):
        print(path)
    print(f"fill in {folder / 'cell.toml'}, then run: sanderling check {folder / 'cell.toml'}")


def compare(
    recording: Recorded, out: Out,
    cell: Annotated[list[Path], typer.Option(help="A cell file; give the option again for more.")],
    orders: Annotated[str, typer.Option(help="Orders to try, as arrival,lookahead; otherwise each cell's own.")] = "",
    detections: Detections = None, located: Located = None, horizon: Horizon = 0, least_score: LeastScore = 0.5,
) -> None:
    """Replay one recording under several orders or cells, side by side: a table, pictures, a page.

    Example: sanderling compare demo_images/bells --cell demo_images/bells/cell.toml --orders arrival,lookahead
    --out out/compare
    """
    from cameras.written import written_whole
    from pipeline.cell import load_cell
    from pipeline.compare import compare as compared
    from pipeline.compare.page import write_compare_page
    from pipeline.compare.plots import draw_compare
    from pipeline.compare.tables import figure_rows, write_compare
    from pipeline.study import Source

    cells, wanted = [load_cell(path) for path in cell], [one.strip() for one in orders.split(",") if one.strip()]
    tried = compared(cells, recording, Source(detections, located), wanted, horizon, least_score,
                     lambda rows: progress(rows, len(list(rows)), "find"),
                     lambda work, total: progress(work, total, "replay"))
    with written_whole(out / "compare.csv") as table, written_whole(out / "compare.html") as page:
        write_compare(table, tried)
        write_compare_page(page, tried)
    draw_compare(out, tried)
    show_table("Compared", ("", *(one.label for one in tried)), figure_rows(tried))
    print(f"-> {out / 'compare.html'}")


def export(
    recording: Recorded, out: Out, cell: Annotated[Path, typer.Option(help="The cell file.")],
    order: Annotated[str, typer.Option(help="arrival, nearest or lookahead; otherwise the cell's.")] = "",
    period_s: Annotated[float, typer.Option(help="Time between samples of the joints.")] = 0.004,
    detections: Detections = None, located: Located = None, horizon: Horizon = 0, least_score: LeastScore = 0.5,
) -> None:
    """Replay a recording and hand its plan over: plan.csv, plan.json with its JSON Schema, joints over time.

    Example: sanderling export demo_images/bells --cell demo_images/bells/cell.toml --period-s 0.01 --out out/plan
    """
    from pipeline.cell import load_cell
    from pipeline.export import check_period, write_export
    from pipeline.study import Source, run, see, setting

    check_period(period_s)
    whole = load_cell(cell)
    seen = see(whole, recording, Source(detections, located), lambda rows: progress(rows, len(list(rows)), "find"))
    chosen = setting(seen, least_score)
    done = run(chosen, order or whole.order.policy, horizon or whole.horizon)
    for path in write_export(out, chosen, done, period_s):
        print(path)
    print(f"{len(done.picks)} picks of {len(done.parts)} parts")
