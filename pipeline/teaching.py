"""Around teaching: the tool pose carried back to the image, what to tell the teacher, and a picture of the model."""

import math
from collections.abc import Sequence
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.camera import CameraMap
from cameras.faults import InputFault, printable
from cameras.model import Model, load_model
from cameras.symmetry import alike_under_turn
from pipeline.cell import Cell, PartCell

FloatArray = NDArray[np.float64]
ENLARGED = 5
MEASURED = 0.25  # of the height: heights from several images are that sure at the least


def part_of(cell: Cell, name: str) -> PartCell:
    """The part of this name. Raises InputFault where the cell has none."""
    if name not in cell.parts:
        known = ", ".join(printable(one) for one in cell.parts) or "none"
        raise InputFault(cell.file, f"parts.{printable(name)}", "no such part", f"describe it; known are: {known}")
    return cell.parts[name]


def pose_when_seen(
    cell: Cell, tool: str, counts: float | None, touch_counts: float | None
) -> tuple[float, float, float]:
    """Tool pose `X,Y,YAW` (mm, degrees) carried from the touch back to the image: x, y mm, yaw rad.

    Raises InputFault for text that is no pose, and for a belt without both counts.
    """
    try:
        x, y, yaw = (float(value) for value in tool.split(","))
    except ValueError:
        raise InputFault("--tool", "", f"{printable(tool)!r} is not X,Y,YAW",
                         "give three numbers: mm, mm, degrees") from None
    numbers = (x, y, yaw, counts or 0.0, touch_counts or 0.0)
    if not all(math.isfinite(value) and abs(value) < 1e12 for value in numbers):
        raise InputFault("--tool", "", "a number that is not finite", "give plain numbers")
    if cell.belt is None:
        return x, y, math.radians(yaw)
    if counts is None or touch_counts is None:
        raise InputFault("--counts", "", "the cell has a belt", "give --counts and --touch-counts")
    moved, modulus = counts - touch_counts, cell.belt.counts_modulus
    if modulus is not None:
        moved = (moved + modulus / 2) % modulus - modulus / 2
    heading, travel = math.radians(cell.belt.heading_deg), moved * cell.belt.mm_per_count
    return x + travel * math.cos(heading), y + travel * math.sin(heading), math.radians(yaw)


def poses_when_seen(
    cell: Cell, tool: str, counts: Sequence[float], touch_counts: float | None, images: int
) -> list[tuple[float, float, float]]:
    """The same for each of several images, in order. Raises InputFault where a belt's counts are not one an image."""
    if cell.belt is not None and counts and len(counts) != images:
        raise InputFault("--counts", "", f"{len(counts)} given for {images} images",
                         "give one for each image, in order")  # fmt: skip
    each: list[float | None] = [None] * images if cell.belt is None or not counts else [*counts]
    return [pose_when_seen(cell, tool, one, touch_counts) for one in each]


def remarks(cell: Cell, model: Model, images: int = 1) -> list[str]:
    """What the teacher should know: symmetry seen, how well heights are known from so many images, whether sides can be
    told, kinds that look alike."""
    seen = {0: "round", 1: "1"}.get(model.proposed_turns, str(model.proposed_turns))
    given = "round" if model.turns == 0 else str(model.turns)
    lines = [f"symmetry: {given}" + ("" if seen == given else f", by the cell file; the outline alone shows {seen}")]
    sure_mm = 1.96 * model.outline.height_sigma_mm
    lines.append(f"the edges of its outline lie {model.outline.height_mm:.1f} mm up, +- {sure_mm:.1f} mm (95 %)")
    if images > 1 and sure_mm > MEASURED * model.height_mm:
        lines.append("warning: the images hardly measure that; take one with the part farther along the belt")
    if model.side_told:
        by = "inner edges" if model.mirrored_alike else "outline"
        lines.append(f"the wrong side can be told from the right one by its {by}")
    else:
        lines.append("warning: the wrong side cannot be told from the right one; a part turned over would be picked")
    for name, other in cell.parts.items():
        if name == model.part or not other.model or not cell.beside(other.model).exists():
            continue
        try:
            known = load_model(cell.beside(other.model))
        except InputFault as fault:
            lines.append(f"warning: {printable(name)} was not compared: {fault.fault}")
            continue
        for outline in (known.outline_mm, known.outline_mm * np.array([1.0, -1.0])):
            if alike_under_turn(model.outline_mm, outline):
                lines.append(f"warning: its outline is hard to tell from that of {printable(name)}")
                break
    return lines


def picture(
    grey: NDArray[np.uint8], camera: CameraMap, cell: Cell, model: Model, pose: tuple[float, float, float], path: Path
) -> None:
    """The taught part enlarged, with outline, inner edges, grip frame and the jaws' footprint."""
    cosine, sine = math.cos(pose[2]), math.sin(pose[2])
    turn = np.array([[cosine, sine], [-sine, cosine]])

    def pixels(points: FloatArray, height: float) -> FloatArray:
        return camera.to_pixel(points @ turn + np.array(pose[:2]), cell.surface_mm + height)

    part = part_of(cell, model.part)
    jaws = [np.array(polygon) for polygon in part.footprint_mm or cell.tool.footprint_mm]
    reach = np.concatenate([pixels(one, 0.0) for one in [model.outline_mm, *jaws]])
    low = np.maximum(np.floor(reach.min(axis=0)).astype(int) - 12, 0)
    high = np.minimum(np.ceil(reach.max(axis=0)).astype(int) + 12, [grey.shape[1], grey.shape[0]])
    window = grey[low[1] : high[1], low[0] : high[0]]
    shown = cv2.resize(window, None, fx=ENLARGED, fy=ENLARGED, interpolation=cv2.INTER_CUBIC)
    shown = cv2.cvtColor(cv2.normalize(shown, shown.copy(), 0, 255, cv2.NORM_MINMAX), cv2.COLOR_GRAY2BGR)

    def drawn(points: FloatArray, height: float) -> NDArray[np.int32]:
        at = (pixels(points, height) - low + 0.5) * ENLARGED - 0.5
        return np.asarray(np.round(at * 16), dtype=np.int32)

    for jaw in jaws:
        cv2.polylines(shown, [drawn(jaw, part.grasp_mm)], True, (240, 190, 60), 2, cv2.LINE_AA, 4)
    for contour, colour in [(model.outline, (80, 220, 80)), *((one, (60, 150, 255)) for one in model.inner)]:
        for point in drawn(contour.points_mm, contour.height_mm):
            cv2.circle(shown, (int(point[0]), int(point[1])), 28, colour, -1, cv2.LINE_AA, 4)
    axes = drawn(np.array([[0.0, 0.0], [12.0, 0.0], [0.0, 12.0]]), part.grasp_mm)
    for end, colour, name in ((axes[1], (60, 60, 255), "x"), (axes[2], (80, 220, 80), "y")):
        cv2.arrowedLine(shown, tuple(map(int, axes[0])), tuple(map(int, end)), colour, 2, cv2.LINE_AA, 4)
        cv2.putText(shown, name, (int(end[0]) // 16 + 6, int(end[1]) // 16), cv2.FONT_HERSHEY_SIMPLEX, 0.6, colour, 2)
    path.write_bytes(cv2.imencode(".png", shown)[1].tobytes())
