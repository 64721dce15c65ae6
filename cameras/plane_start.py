"""The linear start of the plane map: near enough to be refined, and blind to a few bad touches."""

from itertools import combinations
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cameras.camera import Basis, CameraMap
from cameras.faults import InputFault
from cameras.homography import agreed_homography, determinacy
from cameras.lens import Lens

FloatArray = NDArray[np.float64]
_OFF_PLANE_MM = 2.0  # a touch this far from the touched plane counts as one at another height
_OFF_PLANE_TOUCHES = 3  # that many of them fix the three numbers that height adds, with something to spare
_DETERMINED = 1e-3  # below it the marks of a field 300 mm long lie in a strip of a millimetre


def linear_start(
    pixels: FloatArray, points: FloatArray, lens: Lens, measured: bool, file: str | Path
) -> tuple[CameraMap, NDArray[np.bool_]]:
    """A map near enough to be refined, from the touches of the plane with most of them, and which (n,) agree on it.

    `measured`: whether the lens was, so that a pose can be had; else it only shifts and scales pixels.
    """
    heights = points[:, 2]
    near = np.abs(heights[:, None] - heights) <= _OFF_PLANE_MM
    on_plane = near[int(np.argmax(near.sum(axis=1)))]
    plane_mm = float(np.median(heights[on_plane]))
    if on_plane.sum() < 4:
        raise InputFault(file, "", f"no more than {on_plane.sum()} marks lie at one height",
                         "touch at least 4 marks on the surface, spread over the whole field")
    rays = lens.rays(pixels)
    if not np.isfinite(rays).all():
        at = int(np.argmin(np.isfinite(rays).all(axis=1)))
        raise InputFault(file, f"touch {at + 1}", "lies outside what the lens file describes", "check pixels and lens")
    to_cell, agree = agreed_homography(rays[on_plane], points[on_plane, :2])
    if determinacy(rays[on_plane][agree], points[on_plane][agree, :2]) < _DETERMINED:
        raise InputFault(file, "", "the marks, or all but one of them, lie on a line",
                         "touch marks spread over the whole field")
    agreeing = np.zeros(len(pixels), dtype=bool)
    agreeing[on_plane] = agree
    columns: FloatArray = np.linalg.inv(to_cell).astype(np.float64)
    columns /= columns[2] @ [*points[agreeing, :2].mean(axis=0), 1.0]
    off_plane = np.flatnonzero(~on_plane)
    basis: Basis = "pose" if measured else "rays" if len(off_plane) >= _OFF_PLANE_TOUCHES else "plane"
    if basis == "pose":
        projection = _pose(columns, plane_mm)
    else:
        third = np.zeros(3)
        if basis == "rays":
            third, agree = _height_column(columns, rays[off_plane], points[off_plane], plane_mm)
            agreeing[off_plane] = agree
        projection = np.column_stack([columns[:, :2], third, columns[:, 2] - plane_mm * third])
    size = 15 if basis == "pose" else 21
    return CameraMap(basis, lens, projection, plane_mm, np.zeros((size, size)), 0.0, 0.0), agreeing


def thinness(points: FloatArray) -> float:
    """How wide a cloud of points (n, 2) is for its length: 0 on a line, 1 for a disc."""
    long, wide = np.linalg.svd(points - points.mean(axis=0), compute_uv=False)[:2]
    return float(wide / long) if long > 0 else 0.0


def _pose(columns: FloatArray, plane_mm: float) -> FloatArray:
    """Rotation and translation (3, 4) from the homography (3, 3) of a plane to rays (Zhang 2000, section 3.1)."""
    scale = 2.0 / (np.linalg.norm(columns[:, 0]) + np.linalg.norm(columns[:, 1]))
    first, second, at = (scale * columns).T
    left, _, right = np.linalg.svd(np.column_stack([first, second, np.cross(first, second)]))
    turn = left @ right
    return np.column_stack([turn, at - plane_mm * turn[:, 2]])


def _height_column(
    columns: FloatArray, rays: FloatArray, points: FloatArray, plane_mm: float
) -> tuple[FloatArray, NDArray[np.bool_]]:
    """The third column (3,) of a projection whose others are known, from marks (n) off the plane; which agree on it.

    Of all pairs of marks (two fix it) the one whose column sees the other marks best, by their median.
    """
    flat = np.column_stack([points[:, :2], np.ones(len(points))]) @ columns.T
    up = (points[:, 2] - plane_mm)[:, None]
    one, zero = np.ones((len(rays), 1)), np.zeros((len(rays), 1))
    rows_u, rows_v = np.hstack([one, zero, -rays[:, :1]]), np.hstack([zero, one, -rays[:, 1:]])
    rows = up[..., None] * np.stack([rows_u, rows_v], axis=1)
    wanted = rays * flat[:, 2:] - flat[:, :2]
    best, least, agreeing = np.zeros(3), np.inf, np.ones(len(rays), dtype=bool)
    for first, second in combinations(range(min(len(rays), 24)), 2):
        pair = [first, second]
        third = np.linalg.lstsq(rows[pair].reshape(4, 3), wanted[pair].ravel(), rcond=None)[0]
        seen = flat + up * third
        apart = np.linalg.norm(seen[:, :2] / seen[:, 2:] - rays, axis=1)
        if np.median(apart) < least:
            best, least, agreeing = third, float(np.median(apart)), apart <= 4 * np.median(apart) + 1e-9
    return best, agreeing
