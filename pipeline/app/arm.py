"""Commands about the arm alone: reach, fit."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from cameras.written import written_whole
from pipeline.app.shown import show_table

if TYPE_CHECKING:
    from pipeline.cell import Cell
    from pipeline.reach import Floats, Spots
    from pipeline.reach_suggest import Suggestion

REACH_HEADER = ("where", "slot", "x_mm", "y_mm", "z_mm", "angles", "share_right", "share_left", "share", "to_limit_deg",
                "to_limit_mm", "nearest", "follow_mm_s")


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
    app.command("reach")(reach)
    app.command("fit")(fit)


def reach(
    cell: Annotated[Path, typer.Option(help="The cell file.")],
    out: Annotated[Path, typer.Option(help="The folder to write reach.csv and reach.png to.")],
    suggest: Annotated[bool, typer.Option("--suggest", help="Look for a better window and base position.")] = False,
    lanes_mm: Annotated[
        tuple[float, float] | None, typer.Option(help="Where parts come: from, to; mm to the left of the heading.")
    ] = None,
) -> None:
    """Where over the belt and the places the arm can grip, at which part angles, how fast a belt it can follow.

    Example: sanderling reach --cell demo_images/bells/cell.toml --suggest --out out/reach
    """
    import numpy as np

    from pipeline import reach_suggest
    from pipeline.cell import load_cell
    from pipeline.reach import Reacher
    from pipeline.reach_plot import plot_reach

    read = load_cell(cell)
    better = reach_suggest.suggest(read, _lanes(lanes_mm)) if suggest else None
    reacher = Reacher(read)
    window, slots = reacher.window(), reacher.slots()
    with written_whole(out / "reach.csv") as part:
        part.write_text(_csv([window, *slots]), encoding="utf-8")
    with written_whole(out / "reach.png") as part:
        plot_reach(reacher, window, slots, part)
    rows = [(spots.where[0], len(spots), f"{100 * np.mean(spots.share[:, 2] > 0):.0f} %",
             *(f"{100 * share:.0f} %" for share in spots.share.mean(axis=0)),
             _least(np.degrees(spots.to_limit)), _least(spots.to_limit_mm), _least(spots.follow_mm_s))
            for spots in (window, *slots)]
    print("Angles: share of the part angles that can be gripped. To limit: least left of a turning joint, of J3.")
    show_table("Reach", ("where", "points", "gripped", "right", "left", "either", "deg", "mm", "belt mm/s"), rows)
    if better is not None:
        _show_suggestion(better, read)
    print(f"-> {out / 'reach.csv'}, {out / 'reach.png'}")


def fit(
    moves: Annotated[Path, typer.Argument(help="CSV: j1_from ... j4_from, j1_to ... j4_to (deg, mm), time_s.")],
    cell: Annotated[Path, typer.Option(help="The cell file.")],
) -> None:
    """Speed, acceleration and jerk of each joint from measured moves.

    Example: sanderling fit moves.csv --cell cell.toml
    """
    from pipeline.arm import Arm
    from pipeline.cell import load_cell
    from pipeline.fit import JOINTS, LIMITS, cell_with, fit_moves, read_moves

    read = load_cell(cell)
    measured = read_moves(moves)
    found = fit_moves(measured, Arm(read.arm, read.tool))
    fitted = cell_with(read, found)
    rows = []
    for n, name in enumerate(JOINTS):
        for k, limit in enumerate(LIMITS):
            was, now = (getattr(c.arm.joints[n], limit) for c in (read, fitted))
            error = f"{now * found.share_error[n, k]:.3g}" if found.identified[n, k] else "not identified"
            rows.append((name, limit, "none" if was is None else f"{was:g}", "none" if now is None else f"{now:.5g}",
                         error))
    show_table("Limits", ("joint", "limit", "cell file", "fitted", "standard error"), rows)
    show_table("Moves", ("move", "measured s", "residual ms"),
               [(n + 1, f"{time:.4f}", f"{1e3 * residual:+.2f}")
                for n, (time, residual) in enumerate(zip(measured.time_s, found.residual_s, strict=True))])
    print(f"{len(measured)} moves, residual RMS {1e3 * found.rms_s:.2f} ms, "
          f"error of moves not fitted to (cross-validation) {1e3 * found.predicted_s:.2f} ms")


def _lanes(given: tuple[float, float] | None) -> tuple[float, float] | None:
    from cameras.faults import InputFault

    if given is not None and not -1e5 < given[0] < given[1] < 1e5:
        raise InputFault("--lanes-mm", "", f"{given[0]:g} to {given[1]:g} is no band", "give the smaller one first")
    return given


def _csv(several: "list[Spots]") -> str:
    """The rows of reach.csv; what is not known is left empty."""
    import csv
    import io

    import numpy as np

    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(REACH_HEADER)
    for spots in several:
        for k in range(len(spots)):
            numbers = [*spots.share[k], np.degrees(spots.to_limit[k]), spots.to_limit_mm[k]]
            writer.writerow([
                spots.where[k], spots.slot[k] if spots.slot[k] >= 0 else "", *(f"{v:.3f}" for v in spots.tip_mm[k]),
                spots.angles[k], *("" if np.isnan(v) else f"{v:.4f}" for v in numbers),
                f"J{spots.nearest[k] + 1}" if spots.nearest[k] >= 0 else "",
                "" if np.isnan(spots.follow_mm_s[k]) else f"{spots.follow_mm_s[k]:.1f}",
            ])  # fmt: skip
    return text.getvalue()


def _least(values: "Floats") -> str:
    """The least of the numbers that are known."""
    import numpy as np

    known = values[np.isfinite(values)]
    return f"{known.min():.1f}" if len(known) else "-"


def _show_suggestion(better: "Suggestion", cell: "Cell") -> None:
    belt = cell.belt
    now = belt.window_mm if belt is not None else None
    rows = [
        ("lanes, mm to the left", "", "{:.0f} to {:.0f}".format(*better.lanes_mm)),
        ("window_mm, base as it is", _span(now), _span(better.window_mm)),
        ("base_mm", "{:g}, {:g}".format(*cell.arm.base_mm[:2]), "{:g}, {:g}".format(*better.base_mm)),
        ("window_mm, base moved", "", _span(better.base_window_mm)),
        ("angles gripped in the lanes", *(f"{100 * share:.1f} %" for share in better.share)),
        (f"slots served, of {better.slots_of}", *better.slots),
    ]
    show_table("Suggested", ("what", "now", "suggested"), rows)


def _span(window: tuple[float, float] | None) -> str:
    return "none" if window is None else f"[{window[0]:g}, {window[1]:g}]"
