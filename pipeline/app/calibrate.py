"""Commands: calibrate lens, calibrate plane, calibrate belt."""

import json
from pathlib import Path
from typing import Annotated

import typer

from pipeline.app.shown import progress, show_table, written_whole


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
    group = typer.Typer(no_args_is_help=True, help="Lens, plane map and belt scale from measurements.")
    group.command("lens")(lens)
    group.command("plane")(plane)
    group.command("belt")(belt)
    app.add_typer(group, name="calibrate")


def lens(
    images: Annotated[list[Path], typer.Argument(help="Images of the board, each tilted another way.")],
    out: Annotated[Path, typer.Option(help="The lens file to write.")],
    board: Annotated[str, typer.Option(help="Inner corners, COLUMNSxROWS.")] = "9x6",
    square_mm: Annotated[float, typer.Option(help="Side of a square.")] = 25.0,
    charuco: Annotated[str, typer.Option(help="Marker dictionary of a ChArUco board, like DICT_4X4_50.")] = "",
    marker_mm: Annotated[float, typer.Option(help="Side of a ChArUco marker.")] = 0.0,
) -> None:
    """Find a lens's focal length and distortion from images of a flat board."""
    from cameras.boards import checked_board, view_of
    from cameras.lens_fit import fit_lens

    pattern = checked_board(board, square_mm, charuco, marker_mm)
    views = [view_of(path, pattern) for path in progress(images, len(images), "boards")]
    fit = fit_lens([view for view in views if view is not None])
    with written_whole(out) as part:
        part.write_text(json.dumps(fit.document(), indent=1, allow_nan=False) + "\n", encoding="utf-8")
    seen = [view.file for view in views if view is not None]
    rows = [(Path(file).name, f"{rms:.3f}") for file, rms in zip(seen, fit.view_rms_px, strict=True)]
    show_table("Views", ("image", "rms px"), rows)
    print(f"reprojection RMS {fit.rms_px:.3f} px over {len(seen)} views -> {out}")


def plane(
    touches: Annotated[Path, typer.Argument(help="CSV: u_px,v_px,counts,x_mm,y_mm,z_mm,touch_counts.")],
    cell: Annotated[Path, typer.Option(help="The cell file (its belt moves the marks).")],
    out: Annotated[Path, typer.Option(help="The camera file to write.")],
    lens: Annotated[Path | None, typer.Option(help="The lens file; without it heights may not map.")] = None,
    camera: Annotated[str, typer.Option(help="Which camera's rows to take, where the file has several.")] = "",
) -> None:
    """Find the map from pixels to the cell frame from marks seen and touched."""
    import math

    from cameras.lens import load_lens
    from cameras.plane import fit_touches
    from cameras.touches import Carriage, read_touches
    from pipeline.cell import load_cell

    belt = load_cell(cell).belt
    moved = None if belt is None else Carriage(math.radians(belt.heading_deg), belt.mm_per_count, belt.counts_modulus)
    marks = read_touches(touches, moved, camera)
    fit = fit_touches(marks.pixels, marks.points, None if lens is None else load_lens(lens), touches)
    with written_whole(out) as part:
        part.write_text(json.dumps(fit.map.document(), indent=1, allow_nan=False) + "\n", encoding="utf-8")
    print(f"{fit.map.touches} of {len(fit.kept)} touches, RMS {fit.map.rms_mm:.3f} mm -> {out}")


def belt(
    touches: Annotated[Path, typer.Argument(help="CSV: mark,counts,x_mm,y_mm.")],
    counts_modulus: Annotated[int | None, typer.Option(min=2, help="Where the counter rolls over.")] = None,
) -> None:
    """Find the belt's heading and its millimetres per count from marks touched along the belt."""
    from pipeline.belt_scale import fit_belt, read_marks

    scale = fit_belt(read_marks(touches, counts_modulus))
    print(f"heading_deg = {scale.heading_deg:.4f}\nmm_per_count = {scale.mm_per_count:.8g}")
