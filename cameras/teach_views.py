"""Teaching from several images of the same lone part: what one view assumes of its heights, several measure.

An edge taken for lower than it is lands displaced away from the camera's foot; seen from elsewhere, it lands elsewhere.
The height at which the views agree is the edge's (stereo by the belt's own travel).
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from cameras.model import Contour, Model
from cameras.symmetry import turned
from cameras.teach import GripFrame, Taught, teach
from cameras.view import CameraMap

FloatArray = NDArray[np.float64]

SEEN_SIGMA_MM = 0.1  # noise and light shift a taught edge by as much from view to view
ALIKE_MM = 0.5
NEAR_MM = 4.0
ENOUGH_VIEWS = 3  # from which on an edge that most of them do not show is left out


@dataclass(frozen=True)
class TeachingView:
    """One image (rows, columns) of the lone part, its camera, what is said of the part in it, its file for faults."""

    grey: NDArray[np.uint8]
    camera: CameraMap
    taught: Taught
    file: str


def teach_views(views: Sequence[TeachingView], surface_mm: float) -> Model:
    """The model of the first view, its heights those at which all views agree; of one view, what `teach` says.

    Raises InputFault as `teach` does, naming the image. surface_mm: height of what the part lies on.
    """
    models = [teach(view.grey, view.camera, surface_mm, view.taught, view.file) for view in views]
    if len(models) == 1:
        return models[0]
    first = models[0]
    frame = GripFrame(views[0].camera, surface_mm, views[0].taught.pose)
    raised, sigma = _raised(first.outline, [_outline_offset(first, other) for other in models[1:]], models)
    model = _lifted(first, raised, sigma, frame)
    if first.turns == 1 and first.inner:
        apart = [_offset(_every(first.inner), _every(other.inner)) for other in models[1:]]
        raised, sigma = _raised(first.inner[0], apart, models)
    model = replace(model, inner=tuple(_contour_lifted(one, raised, sigma, frame, first.turns != 1)
                                       for one in first.inner))  # fmt: skip
    return model if len(models) < ENOUGH_VIEWS else replace(model, outline=_seen_by_most(model.outline, models[1:]))


def _outline_offset(first: Model, other: Model) -> FloatArray:
    """How far (2,) another view's plan lies from the first's, in the grip frame."""
    if first.turns == 1:
        return _offset(np.column_stack([first.outline.points_mm, first.outline.normals]), other.outline_mm)
    return turned(other.shift_mm - first.shift_mm, -first.yaw_rad)  # symmetric plans were centred, each by its shift


def _every(contours: Sequence[Contour]) -> FloatArray:
    """Points and normals (n, 4) of several contours."""
    return np.concatenate([np.column_stack([one.points_mm, one.normals]) for one in contours] or [np.zeros((0, 4))])


def _offset(edges: FloatArray, points: FloatArray) -> FloatArray:
    """Translation (2,) of points (m, 2 or 4) against edges (n, 4), across these; NaN where too few lie near."""
    offset, within = np.zeros(2), NEAR_MM
    if len(edges) < 8 or len(points) < 8:
        return np.full(2, np.nan)
    tree = cKDTree(points[:, :2])
    for _ in range(4):
        apart, at = (np.asarray(one) for one in tree.query(edges[:, :2] + offset))
        near = apart < within
        if near.sum() < 8:
            return np.full(2, np.nan)
        normal = edges[near, 2:]
        across = np.sum(normal * (points[at[near], :2] - edges[near, :2]), axis=1)
        offset = np.asarray(np.linalg.lstsq(normal, across, rcond=None)[0])
        within = max(0.5 * within, ALIKE_MM)
    return offset


def _raised(contour: Contour, apart: Sequence[FloatArray], models: Sequence[Model]) -> tuple[float, float]:
    """How much higher a contour is than its one view assumed, and the sigma of that; least squares over the views.

    All offsets are against the first view and share its error. The height stays between the surface and the top face.
    """
    known = max(contour.height_sigma_mm, 1e-6) ** -2
    pairs = [(offset, other.away - models[0].away) for offset, other in zip(apart, models[1:], strict=True)
             if np.all(np.isfinite(offset))]  # fmt: skip
    if not pairs:
        return 0.0, contour.height_sigma_mm
    offsets, leans = (np.array(one) for one in zip(*pairs, strict=True))
    shared = np.linalg.inv(np.eye(len(pairs)) + 1.0) / SEEN_SIGMA_MM**2
    weight = known + float(np.sum(shared * (leans @ leans.T)))
    raised = float(np.sum(shared * (leans @ offsets.T))) / weight
    top = models[0].height_mm
    return float(np.clip(raised, -contour.height_mm, max(top - contour.height_mm, 0.0))), weight**-0.5


def _lifted(model: Model, raised: float, sigma: float, frame: GripFrame) -> Model:
    """The model with its outline higher: the plan that is then seen where it was."""
    centred = model.turns != 1
    outline = _contour_lifted(model.outline, raised, sigma, frame, centred)
    height = model.outline.height_mm
    shift = model.shift_mm + frame.turn @ _moved(np.zeros((1, 2)), height, raised, frame)[0] if centred \
        else model.shift_mm  # fmt: skip
    return replace(model, outline=outline, outline_mm=_placed(model.outline_mm, height, raised, frame, centred),
                   facing_height_mm=model.facing_height_mm + raised, facing_sigma_mm=min(model.facing_sigma_mm, sigma),
                   shift_mm=shift)  # fmt: skip


def _contour_lifted(contour: Contour, raised: float, sigma: float, frame: GripFrame, centred: bool) -> Contour:
    points = _placed(contour.points_mm, contour.height_mm, raised, frame, centred)
    return replace(contour, points_mm=points, height_mm=contour.height_mm + raised,
                   height_sigma_mm=min(contour.height_sigma_mm, sigma))  # fmt: skip


def _placed(points_mm: FloatArray, height_mm: float, raised: float, frame: GripFrame, centred: bool) -> FloatArray:
    moved = _moved(points_mm, height_mm, raised, frame)
    return points_mm + moved - (_moved(np.zeros((1, 2)), height_mm, raised, frame) if centred else 0.0)


def _moved(points_mm: FloatArray, height_mm: float, raised: float, frame: GripFrame) -> FloatArray:
    """How far points (n, 2) of the grip frame move that are seen where they are, but higher."""
    return frame.from_pixels(frame.to_pixels(points_mm, height_mm), height_mm + raised) - points_mm


def _seen_by_most(contour: Contour, others: Sequence[Model]) -> Contour:
    """The contour less what no more than half of the other views show."""
    votes = np.zeros(len(contour.points_mm))
    for other in others:
        offset = _offset(np.column_stack([contour.points_mm, contour.normals]), other.outline_mm)
        if np.all(np.isfinite(offset)):
            votes += cKDTree(other.outline_mm).query(contour.points_mm + offset)[0] < ALIKE_MM
    kept = 2 * votes > len(others)
    if kept.mean() < 0.5:
        return contour
    return replace(contour, points_mm=contour.points_mm[kept], normals=contour.normals[kept],
                   steps=contour.steps[kept])  # fmt: skip
