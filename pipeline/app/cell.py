"""The command that looks over a cell: check."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from pipeline.app.shown import show_table

if TYPE_CHECKING:
    from pipeline.cell import Cell


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
    app.command("check")(check)


def check(
    cell: Annotated[Path, typer.Argument(help="The cell file.")],
    moves: Annotated[Path | None, typer.Option(help="Measured moves: show the cycle with fitted limits too.")] = None,
) -> None:
    """Read everything a cell names, say what is wrong and where, and sum the cell up.

    Example: sanderling check demo_images/bells/cell.toml
    """
    from pipeline.cell import load_cell
    from pipeline.check import budgets, check_cell

    read = load_cell(cell)
    verdicts = check_cell(read)
    cycles = [("limits of the cell file", _cycle(read)), *_fitted(read, moves)]
    _sum_up(read)
    show_table("25 mm up, 300 across, 25 down, and back", ("with", "time"), cycles)
    for budget in budgets(read):
        show_table(f"Errors at the gripper: {budget.part}", ("source", "95 % within mm", "deg"), budget.rows())
    show_table("Checks", ("check", "verdict", "found"),
               [(one.what, "well" if one.well else "FAILED", one.found) for one in verdicts])
    failed = sum(not one.well for one in verdicts)
    print(f"{failed} of {len(verdicts)} checks failed" if failed else f"all {len(verdicts)} checks are well")
    if failed:
        raise typer.Exit(1)


def _sum_up(cell: "Cell") -> None:
    arm, belt = cell.arm, cell.belt
    rows = [
        ("arm", f"{arm.link1_mm:g} + {arm.link2_mm:g} mm, base at {', '.join(f'{v:g}' for v in arm.base_mm)} mm, "
                f"turned {arm.base_yaw_deg:g} deg"),
        *((f"J{n}", f"{j.min:g} to {j.max:g}, speed {j.max_speed:g}, acceleration {j.max_accel:g}, jerk "
                    + ("not limited" if j.max_jerk is None else f"{j.max_jerk:g}"))
          for n, j in enumerate(arm.joints, 1)),
        ("belt", "none: a still tray" if belt is None else
         f"heading {belt.heading_deg:g} deg, {belt.mm_per_count:g} mm a count, window "
         + ("not set" if belt.window_mm is None else "{:g} to {:g} mm".format(*belt.window_mm))),
        *((f"part {kind}", f"{part.height_mm:g} mm high, gripped at {part.grasp_mm:g} mm, symmetry {part.symmetry}, to "
                           + ", ".join(part.places)) for kind, part in cell.parts.items()),
        *((f"place {place.name}", f"{place.rows} x {place.columns} slots, "
           + ("exchanged when full" if place.endless else "filled once: endless is false")) for place in cell.places),
        ("keep-outs", ", ".join(keepout.name or "unnamed" for keepout in cell.keepouts) or "none"),
    ]  # fmt: skip
    show_table(cell.name or "Cell", ("what", ""), rows)


def _fitted(cell: "Cell", moves: Path | None) -> list[tuple[str, str]]:
    """The cycle's row with limits fitted to measured moves, if there are any."""
    if moves is None:
        return []
    from pipeline.arm import Arm
    from pipeline.fit import cell_with, fit_moves, read_moves

    found = fit_moves(read_moves(moves), Arm(cell.arm, cell.tool))
    return [(f"limits fitted to {moves.name}", _cycle(cell_with(cell, found)))]


def _cycle(cell: "Cell") -> str:
    from pipeline.arm import Arm
    from pipeline.trade_cycle import overlapped_s, trade_cycle

    arm = Arm(cell.arm, cell.tool)
    found = trade_cycle(arm)
    if found is None:
        return "this arm can't do it"
    overlapped = overlapped_s(cell, arm, found)
    saved = 100 * (1 - overlapped / found.sequence_s)
    return f"{overlapped:.3f} s, {found.sequence_s:.3f} s without overlap ({saved:.0f} % saved)"
