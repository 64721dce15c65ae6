"""Commands: calibrate lens, calibrate plane, calibrate belt."""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from cameras.written import written_whole
from pipeline.app.shown import progress

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from cameras.touches import Carriage
    from pipeline.cell import Cell


IMAGES = (".png", ".jpg", ".jpeg", ".bmp", ".tif", ".tiff")


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
    group = typer.Typer(no_args_is_help=True, help="Lens, plane map and belt from measurements.")
    group.command("lens")(lens)
    group.command("plane")(plane)
    group.command("belt")(belt)
    app.add_typer(group, name="calibrate")


def lens(
    images: Annotated[list[Path], typer.Argument(help="Images of the board, tilted each another way; or folders.")],
    out: Annotated[Path, typer.Option(help="The lens file to write; a picture goes beside it.")],
    board: Annotated[str, typer.Option(help="Inner corners, COLUMNSxROWS: 10 x 7 squares have 9x6.")] = "9x6",
    square_mm: Annotated[float, typer.Option(help="Side of a square.")] = 25.0,
    charuco: Annotated[str, typer.Option(help="Marker dictionary of a ChArUco board, like DICT_4X4_50.")] = "",
    marker_mm: Annotated[float, typer.Option(help="Side of a ChArUco marker.")] = 0.0,
) -> None:
    """Find a lens's focal lengths and distortion from images of a flat board.

    Example: sanderling calibrate lens calibration/lens --board 9x6 --square-mm 20 --out calibration/lens.json
    """
    from cameras.boards import checked_board, view_of
    from cameras.coverage import draw_coverage
    from cameras.lens_fit import fit_lens
    from pipeline.app.calibrated import tell_lens

    pattern = checked_board(board, square_mm, charuco, marker_mm)
    files = [file for one in images for file in _images(one)]
    views = [view_of(path, pattern) for path in progress(files, len(files), "boards")]
    fit = fit_lens([view for view in views if view is not None])
    _write(out, fit.document(), draw_coverage(fit.views, fit.view_rms_px, fit.spoilers), "coverage")
    tell_lens(fit, [path for path, view in zip(files, views, strict=True) if view is None])


def _images(given: Path) -> list[Path]:
    """An image's own path; of a folder, those of the images in it."""
    from cameras.faults import InputFault

    if not given.is_dir():
        return [given]
    found = sorted(path for path in given.iterdir() if path.suffix.lower() in IMAGES)
    if not found:
        raise InputFault(given, "", "no images in this folder", f"put board images there ({', '.join(IMAGES)})")
    return found


def plane(
    touches: Annotated[Path, typer.Argument(help="CSV: u_px,v_px,counts,x_mm,y_mm,z_mm,touch_counts.")],
    cell: Annotated[Path, typer.Option(help="The cell file: its belt carries the marks.")],
    out: Annotated[Path, typer.Option(help="The camera file to write; a picture goes beside it.")],
    lens: Annotated[Path | None, typer.Option(help="The lens file. Without one the map is less sure.")] = None,
    camera: Annotated[str, typer.Option(help="Whose touches to take, where the file has a camera column.")] = "",
    image: Annotated[Path | None, typer.Option(help="An image of the camera: its size, without a lens file.")] = None,
) -> None:
    """Find the map from pixels to the cell frame, at any height, from marks seen and touched.

    Example: sanderling calibrate plane calibration/touches.csv --cell cell.toml --lens calibration/lens.json --out
    calibration/overhead.json
    """
    from cameras.field import field_of
    from cameras.image import read_image_size
    from cameras.lens import load_lens
    from cameras.plane import fit_touches
    from cameras.plane_checks import carry_drift, plane_warnings
    from cameras.touches import read_touches
    from cameras.uncertainty import draw_uncertainty
    from pipeline.app.calibrated import drift_line, no_lens_lines, tell_plane, warn
    from pipeline.cell import load_cell

    whole = load_cell(cell)
    carriage = _carriage(whole)
    known = None if lens is None else load_lens(lens)
    size = None if known is None else known.image_size_px
    if known is None and image is not None:
        height, width = read_image_size(image)
        size = width, height
    marks = read_touches(touches, carriage, camera, size)
    fit = fit_touches(marks.pixels, marks.points, known, size, touches)
    surface = field_of(fit.map, whole.surface_mm)
    higher = field_of(fit.map, whole.surface_mm + max((part.height_mm for part in whole.parts.values()), default=0.0))
    _write(out, fit.map.document(), draw_uncertainty(fit, surface), "uncertainty")
    tell_plane(fit, marks.line.tolist(), surface, higher, whole)
    warn(plane_warnings(fit, surface))
    warn([] if carriage is None else drift_line(carry_drift(fit, marks.travel_mm, carriage.heading_rad), whole))
    warn([] if known is not None else no_lens_lines(fit, surface, whole))


def belt(
    touches: Annotated[Path, typer.Argument(help="CSV: mark,counts,x_mm,y_mm; each mark at several places.")],
    counts_modulus: Annotated[int | None, typer.Option(min=2, help="Where the counter rolls over.")] = None,
    cell: Annotated[Path | None, typer.Option(help="A cell file, to compare with and for the carry.")] = None,
    carry_mm: Annotated[float | None, typer.Option(min=0.0, help="Longest way from image to gripper.")] = None,
) -> None:
    """Find the belt's heading and its millimetres per count from marks touched along the belt.

    Example: sanderling calibrate belt calibration/belt_touches.csv --cell cell.toml
    """
    from pipeline.app.calibrated import tell_belt
    from pipeline.belt_scale import fit_belt, read_marks
    from pipeline.cell import load_cell

    whole = None if cell is None else load_cell(cell)
    if counts_modulus is None and whole is not None and whole.belt is not None:
        counts_modulus = whole.belt.counts_modulus
    marks = read_marks(touches, counts_modulus)
    tell_belt(fit_belt(marks, touches), marks.line.tolist(), whole, carry_mm)


def _carriage(whole: "Cell") -> "Carriage | None":
    """The cell's belt as what carries marks; None for a tray."""
    import math

    from cameras.touches import Carriage

    if whole.belt is None:
        return None
    return Carriage(math.radians(whole.belt.heading_deg), whole.belt.mm_per_count, whole.belt.counts_modulus)


def _write(out: Path, document: Mapping[str, object], picture: "Figure", name: str) -> None:
    """Write a calibration and the picture beside it."""
    beside = out.with_name(f"{out.stem}_{name}.png")
    with written_whole(out) as part:
        part.write_text(json.dumps(document, indent=1, allow_nan=False) + "\n", encoding="utf-8")
    with written_whole(beside) as part:
        picture.savefig(part, dpi=110)
    print(f"wrote {out} and {beside}")
