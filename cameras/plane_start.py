"""The linear start of the plane map: near enough to be refined, and blind to a few bad touches."""

from itertools import combinations
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.camera import Basis, CameraMap
from cameras.faults import InputFault
from cameras.homography import normalising, robust_homography
from cameras.lens import Lens

FloatArray = NDArray[np.float64]
_OFF_PLANE_MM = 2.0  # a touch this far from the touched plane counts as one at another height
_OFF_PLANE_TOUCHES = 3  # that many of them fix the three numbers that height adds, with something to spare


def linear_start(pixels: FloatArray, points: FloatArray, lens: Lens | None, file: str | Path) -> CameraMap:
    """A map near enough to be refined, from the touches of the plane with most of them."""
    heights = points[:, 2]
    near = np.abs(heights[:, None] - heights) <= _OFF_PLANE_MM
    on_plane = near[int(np.argmax(near.sum(axis=1)))]
    plane_mm = float(np.median(heights[on_plane]))
    if on_plane.sum() < 4 or thinness(points[on_plane, :2]) < 0.01:
        raise InputFault(file, "", "all marks of one height lie on a line, or they are fewer than 4",
                         "touch marks spread over the whole field")
    seen_by = _shift_and_scale(pixels) if lens is None else lens
    rays = seen_by.rays(pixels)
    if not np.isfinite(rays).all():
        at = int(np.argmin(np.isfinite(rays).all(axis=1)))
        raise InputFault(file, f"touch {at + 1}", "lies outside what the lens file describes", "check pixels and lens")
    outline = robust_homography(rays[on_plane], points[on_plane, :2])
    if np.linalg.cond(outline / np.abs(outline).max(axis=1, keepdims=True)) > 1e8:
        raise InputFault(file, "", "too many of the marks lie on one line", "touch marks spread over the whole field")
    columns: FloatArray = np.linalg.inv(outline).astype(np.float64)
    columns /= columns[2] @ [*points[on_plane, :2].mean(axis=0), 1.0]
    if lens is not None:
        basis: Basis = "pose"
        projection = _pose(columns, plane_mm)
    else:
        basis = "rays" if (~on_plane).sum() >= _OFF_PLANE_TOUCHES else "plane"
        third = np.zeros(3)
        if basis == "rays":
            third = _height_column(columns, rays[~on_plane], points[~on_plane], plane_mm)
        projection = np.column_stack([columns[:, :2], third, columns[:, 2] - plane_mm * third])
    size = 15 if basis == "pose" else 12
    return CameraMap(basis, seen_by, projection, plane_mm, np.zeros((size, size)), 0.0, 0.0)


def thinness(points: FloatArray) -> float:
    """How wide a cloud of points (n, 2) is for its length: 0 on a line, 1 for a disc."""
    long, wide = np.linalg.svd(points - points.mean(axis=0), compute_uv=False)[:2]
    return float(wide / long) if long > 0 else 0.0


def _shift_and_scale(pixels: FloatArray) -> Lens:
    """Stands in for a lens: pixels brought near 0, sized near 1."""
    norm = normalising(pixels)
    scale = 1.0 / norm[0, 0]
    return Lens(np.array([scale, scale, -norm[0, 2] * scale, -norm[1, 2] * scale, 0, 0, 0, 0, 0]))


def _pose(columns: FloatArray, plane_mm: float) -> FloatArray:
    """Rotation and translation (3, 4) from the homography (3, 3) of a plane to rays (Zhang 2000, section 3.1)."""
    scale = 2.0 / (np.linalg.norm(columns[:, 0]) + np.linalg.norm(columns[:, 1]))
    first, second, at = (scale * columns).T
    left, _, right = np.linalg.svd(np.column_stack([first, second, np.cross(first, second)]))
    turn = left @ right
    return np.column_stack([turn, at - plane_mm * turn[:, 2]])


def _height_column(columns: FloatArray, rays: FloatArray, points: FloatArray, plane_mm: float) -> FloatArray:
    """The third column (3,) of a projection whose others are known, from marks off the plane.

    Of all pairs of marks (two fix it) the one whose column sees the other marks best, by their median.
    """
    flat = np.column_stack([points[:, :2], np.ones(len(points))]) @ columns.T
    up = (points[:, 2] - plane_mm)[:, None]
    one, zero = np.ones((len(rays), 1)), np.zeros((len(rays), 1))
    rows_u, rows_v = np.hstack([one, zero, -rays[:, :1]]), np.hstack([zero, one, -rays[:, 1:]])
    rows = up[..., None] * np.stack([rows_u, rows_v], axis=1)
    wanted = rays * flat[:, 2:] - flat[:, :2]
    best, least = np.zeros(3), np.inf
    for first, second in combinations(range(min(len(rays), 24)), 2):
        pair = [first, second]
        third = np.linalg.lstsq(rows[pair].reshape(4, 3), wanted[pair].ravel(), rcond=None)[0]
        seen = flat + up * third
        apart = float(np.median(np.linalg.norm(seen[:, :2] / seen[:, 2:] - rays, axis=1)))
        if apart < least:
            best, least = third, apart
    return best
