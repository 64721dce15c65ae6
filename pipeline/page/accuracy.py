"""What the calibrations say of themselves, and what that adds up to at the gripper."""

import numpy as np

from cameras.camera import CameraMap
from pipeline.budget import budgets_of, maps_at_hand
from pipeline.page.listings import plain_table
from pipeline.page.markup import Child, Markup, joined, tag
from pipeline.page.subject import Subject

BASIS = {"pose": "lens and touches: any height maps", "rays": "touches at two heights: any height maps",
         "plane": "touches at one height: height is ignored"}  # fmt: skip


def accuracy(subject: Subject) -> Markup | None:
    """The section's content; None where no camera's calibration can be read."""
    names = np.unique(subject.seen.recording.cameras).tolist()
    cameras = maps_at_hand(subject.setting.cell, names)
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


def _scale(subject: Subject, camera: CameraMap) -> float:
    """Mm a pixel in the middle of what the camera sees, on the surface."""
    middle = camera.touched_px.mean(axis=0)
    at = camera.to_cell(middle, subject.setting.cell.surface_mm)
    return float(camera.mm_per_pixel(at, subject.setting.cell.surface_mm))


def _budget(subject: Subject, cameras: dict[str, CameraMap]) -> Markup | None:
    """95 % of the errors of each kind of part, source by source."""
    budgets = budgets_of(subject.setting.cell, cameras, subject.seen.sightings, subject.setting.belt.fastest_mm_s)
    head = [("source", False), ("95 % within mm", True), ("95 % within °", True)]
    tables = [plain_table(f"Error budget: {one.part}", head, [list(row) for row in one.rows()]) for one in budgets]
    if not tables:
        return None
    note = ("What is not given counts as nothing. The cell file may give mm_per_count_error, heading_error_deg and "
            "time_error_s.")
    missing = any(one.missing for one in budgets)
    return joined(tag("div", *tables, class_="charts"), tag("p", note, class_="note") if missing else None)
