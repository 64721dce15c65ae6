"""Commands: teach, find."""

from pathlib import Path
from typing import Annotated

import typer

from cameras.written import written_whole
from pipeline.app.shown import progress, show_table


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
    app.command("teach")(teach)
    app.command("find")(find)


def teach(
    images: Annotated[list[Path], typer.Argument(help="Images of one lone part, right side up, left as it lies.")],
    cell: Annotated[Path, typer.Option(help="The cell file.")],
    part: Annotated[str, typer.Option(help="The part's name in the cell file.")],
    tool: Annotated[str, typer.Option(help="Tool pose that grips it: X,Y,YAW in mm and degrees.")],
    out: Annotated[Path, typer.Option(help="The model file to write.")],
    counts: Annotated[list[float] | None, typer.Option(help="Belt counts of each image, in order.")] = None,
    touch_counts: Annotated[float | None, typer.Option(help="Belt counts when the part was gripped.")] = None,
    camera: Annotated[str, typer.Option(help="Which camera took it, where there are several.")] = "",
) -> None:
    """Teach a part: its outline, its inner edges and its grip frame, from images and the tool pose that grips it.

    One image will do; of several, the belt moved on between them, the heights of its edges are measured.

    Example: sanderling teach teach/lever.png --cell cell.toml --part lever --tool=321.6,-58.6,-26.1 --counts 21475
    --touch-counts 30868 --out parts/lever.json
    """
    from cameras.camera import load_camera
    from cameras.find import grey_of
    from cameras.image import read_image
    from cameras.teach import Taught
    from cameras.teach_views import TeachingView, teach_views
    from pipeline.cell import load_cell
    from pipeline.finding import calibration_of
    from pipeline.teaching import part_of, poses_when_seen, remarks
    from pipeline.teaching import picture as model_picture

    whole = load_cell(cell)
    kind = part_of(whole, part)
    poses = poses_when_seen(whole, tool, counts or [], touch_counts, len(images))
    view = load_camera(calibration_of(whole, camera))
    views = [TeachingView(grey_of(read_image(image)), view, Taught(part, kind.height_mm, kind.turns, pose), str(image))
             for image, pose in zip(images, poses, strict=True)]  # fmt: skip
    model = teach_views(views, whole.surface_mm)
    shown = out.with_suffix(".png")
    with written_whole(out) as text, written_whole(shown) as drawn:
        text.write_text(model.as_json(), encoding="utf-8")
        model_picture(views[0].grey, view, whole, model, poses[0], drawn)
    print(f"{len(model.outline.steps)} outline points, {len(model.inner)} inner edges -> {out}, {shown}")
    for line in remarks(whole, model, len(images)):
        print(line)


def find(
    recording: Annotated[Path, typer.Argument(help="Folder with frames.csv and its images.")],
    cell: Annotated[Path, typer.Option(help="The cell file.")],
    out: Annotated[Path, typer.Option(help="The folder to write to.")],
) -> None:
    """Find the taught parts in every image of a recording; write detections.csv and the images with what was found.

    Example: sanderling find demo_images/bells --cell demo_images/bells/cell.toml --out out/found
    """
    import numpy as np

    from cameras.recording import read_recording
    from pipeline.cell import load_cell
    from pipeline.finding import found_in, write_detections, write_overlays

    whole = load_cell(cell)
    modulus = whole.belt.counts_modulus if whole.belt else None
    frames = read_recording(recording, modulus)
    sightings, times = found_in(frames, whole, lambda rows: progress(rows, len(frames), "find"))
    write_detections(out / "detections.csv", frames, sightings)
    write_overlays(out, frames, whole, sightings)
    kinds, counts = np.unique(np.where(sightings.kind == "", "unknown", sightings.kind), return_counts=True)
    show_table("Found", ("part", "sightings"), list(zip(kinds, counts, strict=True)))
    print(f"{len(frames)} frames, median {np.median(times) * 1e3:.0f} ms a frame to find -> {out}")


