"""What the calibrations say of themselves, and what that adds up to at the gripper."""

import numpy as np

from cameras.camera import CameraMap, load_camera
from cameras.faults import InputFault
from pipeline.budget import error_budget, longest_carry_mm, map_doubt
from pipeline.page.listings import plain_table
from pipeline.page.markup import Child, Markup, joined, tag
from pipeline.page.subject import Subject

BASIS = {"pose": "lens and touches: any height maps", "rays": "touches at two heights: any height maps",
         "plane": "touches at one height: height is ignored"}  # fmt: skip


def accuracy(subject: Subject) -> Markup | None:
    """The section's content; None where no camera's calibration can be read."""
    cameras = _cameras(subject)
    if not cameras:
        return None
    head = [("camera", False), ("rests on", False), ("touches", True), ("residual RMS mm", True),
            ("leave-one-out RMS mm", True), ("mm per pixel", True)]
    rows: list[list[Child]] = []
    for name, camera in cameras.items():
        alone = camera.leave_one_out_rms_mm
        rows.append([name or "overhead", BASIS[camera.basis], camera.touches, f"{camera.rms_mm:.3f}",
                     "-" if alone is None else f"{alone:.3f}", f"{_scale(subject, camera):.4f}"])
    note = "The leave-one-out figure is the honest one: each touch under the map fitted without it."
    return joined(plain_table("Plane maps", head, rows), tag("p", note, class_="note"), _budget(subject, cameras))


def _cameras(subject: Subject) -> dict[str, CameraMap]:
    found: dict[str, CameraMap] = {}
    cell = subject.setting.cell
    for name in np.unique(subject.seen.recording.cameras).tolist():
        try:
            named = cell.camera(name).calibration
            if named is not None:
                found[name] = load_camera(cell.beside(named))
        except InputFault:
            continue
    return found


def _scale(subject: Subject, camera: CameraMap) -> float:
    """Mm a pixel in the middle of what the camera sees, on the surface."""
    middle = camera.touched_px.mean(axis=0)
    at = camera.to_cell(middle, subject.setting.cell.surface_mm)
    return float(camera.mm_per_pixel(at, subject.setting.cell.surface_mm))


def _budget(subject: Subject, cameras: dict[str, CameraMap]) -> Markup | None:
    """95 % of the errors of each kind of part, source by source."""
    cell, seen = subject.setting.cell, subject.seen.sightings
    carry = longest_carry_mm(cell, list(cameras.values()))
    tables = []
    for kind, part in cell.parts.items():
        own = seen.kind == kind
        if not own.any():
            continue
        doubt = map_doubt(next(iter(cameras.values())), cell.surface_mm + part.height_mm)
        budget = error_budget(kind, doubt, finding_mm=float(np.median(seen.sigma_mm[own])),
                              finding_rad=float(np.median(seen.sigma_rad[own])), carry_mm=carry,
                              tolerance_mm=part.grip_tolerance_mm, tolerance_deg=part.grip_tolerance_deg)
        rows = [[source, mm, "-" if part.turns == 0 else deg]  # the yaw of a round part means nothing
                for source, mm, deg in budget.rows() if float(mm or 1) or float(deg or 1)]
        tables.append(plain_table(f"Error budget: {kind}", [("source", False), ("95 % within mm", True),
                                                            ("95 % within °", True)], rows))  # fmt: skip
    if not tables:
        return None
    note = "Errors of the belt's scale, its heading and the time stamps are not in a cell file and not in these sums."
    return joined(tag("div", *tables, class_="charts"), tag("p", note, class_="note"))
