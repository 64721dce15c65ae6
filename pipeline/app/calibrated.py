"""What the calibrations tell on the terminal: figures in tables, then one line for each thing to mend."""

from collections.abc import Sequence
from itertools import product
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.camera import load_camera
from cameras.coverage import uncovered_corners
from cameras.faults import printable
from cameras.field import Field, parallax_mm, share_touched
from cameras.lens import NAMES
from cameras.lens_fit import FEWEST_VIEWS, LensFit, fit_lens
from cameras.plane import PlaneFit
from cameras.plane_checks import CarryDrift
from pipeline.app.shown import show_table
from pipeline.belt_scale import BeltScale
from pipeline.budget import longest_carry_mm
from pipeline.cell import Cell

_WORST = 5  # touches listed
_ABOVE, _BESIDE = ("top", "middle", "bottom"), ("left", "middle", "right")


def warn(lines: Sequence[str]) -> None:
    """Print each line as a warning."""
    for line in lines:
        print(f"warning: {printable(line, 400)}")


def tell_lens(fit: LensFit, not_found: Sequence[Path]) -> None:
    """Views, parameters with standard errors, and warnings of a lens fit."""
    show_table("Views", ("image", "corners", "RMS px", ""),
               [(Path(view.file).name, len(view.pixels), f"{rms:.3f}", "spoils the fit" if k in fit.spoilers else "")
                for k, (view, rms) in enumerate(zip(fit.views, fit.view_rms_px, strict=True))])  # fmt: skip
    numbers = zip(NAMES, fit.lens.parameters, fit.lens.standard_errors, strict=True)
    show_table("Lens", ("number", "value", "standard error"),
               [(name, f"{value:.6g}", f"{error:.2g}" if error > 0 else "held at 0") for name, value, error in numbers])
    print(f"reprojection RMS {fit.rms_px:.3f} px over {len(fit.views)} views")
    warn([f"no board found in {path.name}" for path in not_found])
    warn(_lens_warnings(fit))


def _lens_warnings(fit: LensFit) -> list[str]:
    lines = [f"no board corner near the {name} corner of the image: distortion is extrapolated there"
             for name in uncovered_corners(fit.views)]
    kept = [view for k, view in enumerate(fit.views) if k not in fit.spoilers]
    if fit.spoilers and len(kept) >= FEWEST_VIEWS:
        clean = fit_lens(kept)
        lines.append(f"without {', '.join(Path(fit.views[k].file).name for k in fit.spoilers)} the RMS is "
                     f"{clean.rms_px:.3f} px and fx {clean.lens.parameters[0]:.1f} px: look at them, or leave them out")
    error = fit.lens.standard_errors[0] / fit.lens.parameters[0]
    if error > 0.005:
        lines.append(f"the focal length is sure to {error:.1%} only: tilt the board more, about 30 degrees both ways")
    width, height = fit.views[0].image_size_px
    corners = np.array([[0, 0], [width, 0], [0, height], [width, height]], dtype=float)
    if not np.isfinite(fit.lens.rays(corners)).all():
        lines.append("the distortion folds over inside the image: give views that reach its corners")
    return lines


def tell_plane(fit: PlaneFit, lines_of_file: Sequence[int], surface: Field, higher: Field, cell: Cell) -> None:
    """Residuals, scale, uncertainty over the field, and what height does."""
    found, size = fit.map, np.linalg.norm(fit.residuals_mm, axis=1)
    alone = found.leave_one_out_rms_mm
    scale = surface.mm_per_pixel
    show_table("Plane map", ("", ""), [
        ("rests on", {"pose": "lens and touches: any height maps", "plane": "touches at one height: height is ignored",
                      "rays": "touches at two heights: any height maps"}[found.basis]),
        ("touches used", f"{found.touches} of {len(fit.kept)}"),
        ("residual RMS", f"{found.rms_mm:.3f} mm"),
        ("leave-one-out RMS", "too few touches" if alone is None else f"{alone:.3f} mm"),
        ("mm per pixel", f"{np.nanmedian(scale):.4f}, from {np.nanmin(scale):.4f} to {np.nanmax(scale):.4f}"),
        ("field touched", f"{share_touched(found, surface):.0%}"),
    ])  # fmt: skip
    left = np.linalg.norm(fit.left_out_mm, axis=1)
    worst = [int(k) for k in np.argsort(-size) if not fit.kept[k]]
    worst += [int(k) for k in np.argsort(-size) if fit.kept[k]][:_WORST]
    rows = [(lines_of_file[k], f"{size[k]:.3f}", *(f"{d:+.3f}" for d in fit.residuals_mm[k]), _most(left[k : k + 1]),
             "" if fit.kept[k] else "LEFT OUT") for k in worst]
    show_table("Worst touches", ("line", "residual mm", "dx mm", "dy mm", "left-out mm", ""), rows)
    _tell_uncertainty(surface, higher)
    if cell.parts and found.maps_height:
        offs = {name: parallax_mm(found, surface, part.height_mm) for name, part in cell.parts.items()}
        parallaxes = [(name, f"{cell.parts[name].height_mm:g}", f"{np.nanmean(off):.2f}", f"{np.nanmax(off):.2f}")
                      for name, off in offs.items()]
        show_table("Parallax: were height ignored, a part's top would be put off by",
                   ("part", "height mm", "mean mm", "most mm"), parallaxes)


def _tell_uncertainty(surface: Field, higher: Field) -> None:
    down, across = (np.array_split(np.arange(n), 3) for n in surface.radius_95_mm.shape)
    rows = []
    for (i, above), (j, beside) in product(enumerate(_ABOVE), enumerate(_BESIDE)):
        ninths = (field.radius_95_mm[np.ix_(down[i], across[j])] for field in (surface, higher))
        rows.append((f"{above} {beside}", *(_most(ninth) for ninth in ninths)))
    show_table("95 % of the map's errors are within (worst place of each ninth of the image), mm",
               ("place", f"at z = {surface.height_mm:g}", f"at z = {higher.height_mm:g}"), rows)


def _most(values: NDArray[np.float64]) -> str:
    """The greatest of some millimetres; what no point is seen at does not count."""
    seen = values[~np.isnan(values)]
    if len(seen) == 0:
        return "not seen"
    return f"{seen.max():.3f}" if np.isfinite(seen).all() else "unknown"


def no_lens_lines(fit: PlaneFit, surface: Field, cell: Cell) -> list[str]:
    """What it costs to do without a lens file."""
    reach = float(np.nanmax(np.linalg.norm(surface.points_mm - np.nanmean(surface.points_mm, axis=(0, 1)), axis=-1)))
    k1 = fit.map.lens.standard_errors[4] > 0
    lines = ["no lens file: " + ("a distortion was taken from the touches, one number for the whole lens; "
                                 if k1 else "no distortion is taken out; ")
             + f"95 % within {_most(surface.radius_95_mm)} mm at the worst place of the field, if the lens is no worse "
             "than that"]
    tallest = max((part.height_mm for part in cell.parts.values()), default=0.0)
    if fit.map.basis == "plane" and tallest > 0:
        costs = ", ".join(f"{reach * tallest / (above - tallest):.1f} mm below a camera {above} mm up"
                          for above in (500, 800, 1200) if above > tallest)
        lines.append(f"height is ignored: a top {tallest:g} mm up is put off by up to {costs} that looks straight "
                     "down, more by a tilted one; calibrate the lens, or touch marks on a block too")
    return lines


def drift_line(drift: CarryDrift | None, cell: Cell) -> list[str]:
    """A warning where the touches contradict the cell's belt."""
    if drift is None or not drift.certain or cell.belt is None:
        return []
    belt = cell.belt
    return [f"touches carried farther lie off by {100 * drift.along:+.2f} mm along and {100 * drift.across:+.2f} mm "
            f"across the belt per 100 mm: the touches ask for mm_per_count {belt.mm_per_count * (1 + drift.along):.6g} "
            f"(cell: {belt.mm_per_count:g}) and heading_deg {belt.heading_deg + np.degrees(drift.across):.3f} "
            f"(cell: {belt.heading_deg:g}); run `sanderling calibrate belt`"]


def tell_belt(scale: BeltScale, lines_of_file: Sequence[int], cell: Cell | None, carry_mm: float | None) -> None:
    """Heading and scale, ready to be copied into the cell file, with what they are worth."""
    off = np.hypot(scale.along_mm, scale.across_mm)
    carry, why = _carry(scale, cell, carry_mm)
    show_table("Belt", ("figure", "value", "standard error"), [
        ("heading_deg", f"{scale.heading_deg:.4f}", f"{np.degrees(scale.heading_error_rad):.2g}"),
        ("mm_per_count", f"{scale.mm_per_count:.7g}", f"{scale.mm_per_count_error:.2g}"),
        ("residual of a touch, mm", f"{scale.sigma_mm:.3f}", f"{scale.kept.sum()} of {len(scale.kept)} touches"),
        (f"drift over {carry:.0f} mm ({why}), 95 %, mm", f"{scale.drift_95_mm(carry):.3f}", ""),
    ])  # fmt: skip
    order = sorted(range(len(off)), key=lambda k: (bool(scale.kept[k]), -off[k]))
    show_table("Worst touches", ("line", "along mm", "across mm", ""),
               [(lines_of_file[k], f"{scale.along_mm[k]:+.3f}", f"{scale.across_mm[k]:+.3f}",
                 "" if scale.kept[k] else "LEFT OUT")
                for k in order[: _WORST + int((~scale.kept).sum())]])  # fmt: skip
    print("for [belt] in the cell file:\n"
          f"heading_deg = {scale.heading_deg:.4f}\nheading_error_deg = {np.degrees(scale.heading_error_rad):.2g}\n"
          f"mm_per_count = {scale.mm_per_count:.7g}\nmm_per_count_error = {scale.mm_per_count_error:.2g}")
    warn(_belt_warnings(scale, cell, carry))


def _carry(scale: BeltScale, cell: Cell | None, carry_mm: float | None) -> tuple[float, str]:
    if carry_mm is not None:
        return carry_mm, "as given"
    if cell is not None:
        files = [cell.beside(camera.calibration) for camera in cell.cameras if camera.calibration]
        longest = longest_carry_mm(cell, [load_camera(file) for file in files if file.is_file()])
        if longest > 0:
            return longest, "camera to window end"
    return scale.longest_mm, "as far as marks were followed"


def _belt_warnings(scale: BeltScale, cell: Cell | None, carry: float) -> list[str]:
    lines = []
    if scale.longest_mm < 0.5 * carry:
        lines.append(f"marks were followed over {scale.longest_mm:.0f} mm only, parts are carried {carry:.0f} mm: "
                     "touch them farther apart")
    if cell is not None and cell.belt is not None:
        belt = cell.belt
        turn = np.radians(belt.heading_deg) - scale.heading_rad
        times = belt.mm_per_count / scale.mm_per_count
        along, across = carry * (times * np.cos(turn) - 1), carry * times * np.sin(turn)
        if np.hypot(along, across) > 2 * scale.drift_95_mm(carry):
            lines.append(f"the cell says heading_deg = {belt.heading_deg:g}, mm_per_count = {belt.mm_per_count:g}: "
                         f"over {carry:.0f} mm that is {along:+.2f} mm along and {across:+.2f} mm across of what was "
                         "touched")
    return lines
