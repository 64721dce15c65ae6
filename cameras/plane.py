"""Fit the map from pixels to the cell frame to touched marks, robust to a few bad ones.

A linear start (Hartley and Zisserman 2004, algorithm 4.2; pose from it as in Zhang 2000, section 3.1), then every
parameter refined on the residuals in millimetres (least squares, Hartley and Zisserman 2004, section 4.2.4).
"""

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import least_squares
from scipy.spatial import ConvexHull

from cameras.camera import CameraMap
from cameras.faults import InputFault
from cameras.lens import Lens
from cameras.plane_start import linear_start

FloatArray = NDArray[np.float64]
_ROUNDS = 20


@dataclass(frozen=True)
class PlaneFit:
    """A map and the n touches it was fitted to.

    residuals_mm (n, 2): mapped less touched.  left_out_mm (n, 2): the same under the map fitted without that touch.
    kept (n,): False for a touch left out of the fit as bad.  sigma_mm: standard deviation of one coordinate of a touch.
    """

    map: CameraMap
    pixels: FloatArray
    points: FloatArray
    residuals_mm: FloatArray
    left_out_mm: FloatArray
    kept: NDArray[np.bool_]
    sigma_mm: float


def fit_plane(
    pixels: ArrayLike, points: ArrayLike, lens: Lens | None = None, file: str | Path = "touches"
) -> CameraMap:
    """The map alone; see `fit_touches`."""
    return fit_touches(pixels, points, lens, file).map


def fit_touches(
    pixels: ArrayLike, points: ArrayLike, lens: Lens | None = None, file: str | Path = "touches"
) -> PlaneFit:
    """Fit a map to marks seen at pixels (n, 2) and known at points (n, 2: z = 0, or n, 3) of the cell frame, mm.

    With a lens the pose is fitted, and the lens within what its own covariance allows; without, the projection of a
    pinhole camera where marks lie at two heights, else a homography to which height makes no difference.
    Raises InputFault, naming `file`, for fewer than four marks, marks on one line and numbers not finite.
    """
    pixels, points = _checked(np.asarray(pixels, np.float64), np.asarray(points, np.float64), file)
    start = linear_start(pixels, points, lens, file)
    free, tied = _free(start, points)
    fitted, found = 2 * len(pixels) - (free.shape[1] - tied), start
    off = _off(found, pixels, points)
    kept, sigma = _agreeing(off, fitted, 6.0)
    for _ in range(_ROUNDS):
        found = _refined(start, free, tied, pixels[kept], points[kept], sigma)
        off = _off(found, pixels, points)
        before = kept
        kept, sigma = _agreeing(off, fitted, 4.0)
        if (before == kept).all():
            break
    if kept.sum() < max(4, len(kept) / 2):
        raise InputFault(file, "", "the touches agree on no map", "check pixels, positions, counts and the lens file")
    return _judged(found, free, tied, pixels, points, kept)


def _checked(pixels: FloatArray, points: FloatArray, file: str | Path) -> tuple[FloatArray, FloatArray]:
    if pixels.ndim != 2 or pixels.shape[1] != 2 or points.ndim != 2 or points.shape[1] not in (2, 3) \
            or len(pixels) != len(points):
        raise InputFault(file, "", f"pixels {pixels.shape} and points {points.shape} do not pair",
                         "give (n, 2) pixels and (n, 2) or (n, 3) points")
    if not (np.isfinite(pixels).all() and np.isfinite(points).all()):
        raise InputFault(file, "", "a number is not finite", "write plain numbers")
    if points.shape[1] == 2:
        points = np.column_stack([points, np.zeros(len(points))])
    different = min(len(np.unique(pixels, axis=0)), len(np.unique(points, axis=0)))
    if different < 4:
        raise InputFault(file, "", f"{different} different touches", "touch at least 4 marks, better 12 or more")
    return pixels, points


def _free(start: CameraMap, points: FloatArray) -> tuple[FloatArray, int]:
    """Directions (15 or 12, q) in which a map may change, and how many of the first are tied to the lens file.

    A tied direction is one standard deviation of the lens long.
    """
    if start.basis == "pose":
        deviation = start.lens.standard_errors
        scale = np.where(deviation > 0, deviation, 1.0)
        values, axes = np.linalg.eigh(start.lens.covariance / np.outer(scale, scale))
        real = values > 1e-12
        tied = scale[:, None] * axes[:, real] * np.sqrt(values[real])
        free = np.zeros((15, tied.shape[1] + 6))
        free[:9, : tied.shape[1]] = tied
        free[9:, tied.shape[1] :] = np.eye(6)
        return free, tied.shape[1]
    # the projection's scale means nothing, so it must not change along itself
    size = np.tile([*np.full(3, 1.0 / max(float(np.abs(points).max()), 1.0)), 1.0], 3)
    some = np.ones((3, 4), dtype=bool)
    some[:, 2] = start.basis == "rays"
    at = np.flatnonzero(some.ravel())
    along = (start.projection.ravel() / size)[at]
    across = np.linalg.svd(along[None])[2][1:].T
    free = np.zeros((12, len(at) - 1))
    free[at] = size[at, None] * across
    return free, 0


def _off(found: CameraMap, pixels: FloatArray, points: FloatArray) -> FloatArray:
    """(n, 2) mapped less touched, mm; far off where a pixel has no point."""
    return np.nan_to_num(found.to_cell(pixels, points[:, 2]) - points[:, :2], nan=1e6)


def _agreeing(off: FloatArray, fitted: int, times: float) -> tuple[NDArray[np.bool_], float]:
    """Which touches lie within `times` standard deviations, and that deviation, from the median distance.

    The distance of a touch with equal Gaussian errors in x and y has the median 1.1774 standard deviations (Rayleigh).
    `fitted`: residuals beyond the parameters fitted to them; none are turned away where there is hardly any.
    """
    apart = np.linalg.norm(off, axis=1)
    spread = float(np.median(apart)) / 1.1774 * np.sqrt(2 * len(off) / max(fitted, 1))
    sigma = max(spread, 1e-7)
    return (apart <= times * sigma) | (fitted < 4), sigma


def _refined(
    start: CameraMap, free: FloatArray, tied: int, pixels: FloatArray, points: FloatArray, sigma: float
) -> CameraMap:
    """The map of least squares: residuals in mm over sigma, and the lens's own deviations."""

    def residuals(change: FloatArray) -> FloatArray:
        off = _off(start.shifted(free @ change), pixels, points)
        return np.concatenate([off.ravel() / sigma, change[:tied]])

    best = least_squares(residuals, np.zeros(free.shape[1]), method="lm", x_scale="jac", xtol=1e-12, ftol=1e-12)
    return start.shifted(free @ best.x)


def _judged(
    found: CameraMap, free: FloatArray, tied: int, pixels: FloatArray, points: FloatArray, kept: NDArray[np.bool_]
) -> PlaneFit:
    """The fit with its covariance and leave-one-out residuals, from the slope of the residuals at the solution."""
    off = _off(found, pixels, points)
    slope = _slope(found, free, pixels, points)
    used, prior = slope[kept], np.diag(np.arange(free.shape[1]) < tied).astype(float)
    flat = used.reshape(-1, free.shape[1])
    squares, freedom, sigma = float((off[kept] ** 2).sum()), 0.0, 1e-7
    for _ in range(10):  # the weight of the lens file against the touches depends on sigma, and sigma on it
        inverse = _inverse(flat.T @ flat / sigma**2 + prior)
        freedom = max(len(flat) - float(np.trace(flat @ inverse @ flat.T)) / sigma**2, 0.0)
        sigma = max(np.sqrt(squares / max(freedom, 1.0)), 1e-7)
    inverse = _inverse(flat.T @ flat / sigma**2 + prior)
    lever = used @ inverse @ np.swapaxes(used, -1, -2) / sigma**2
    left = off.copy()
    with np.errstate(all="ignore"):
        rest = np.eye(2) - lever
        alone = np.linalg.det(rest) > 1e-9
    left[kept] = np.where(alone[:, None], np.linalg.solve(np.where(alone[:, None, None], rest, np.eye(2)),
                                                          off[kept][..., None])[..., 0], np.nan)
    left_rms = float(np.sqrt((left[kept] ** 2).sum(axis=1).mean()))
    told = replace(
        found, covariance=free @ inverse @ free.T, freedom=freedom, touches=int(kept.sum()),
        rms_mm=float(np.sqrt(squares / kept.sum())), leave_one_out_rms_mm=left_rms if np.isfinite(left_rms) else None,
        touched_px=pixels[kept][ConvexHull(pixels[kept]).vertices],
    )  # fmt: skip
    return PlaneFit(told, pixels, points, off, left, kept, sigma if freedom > 0 else float("nan"))


def _slope(found: CameraMap, free: FloatArray, pixels: FloatArray, points: FloatArray) -> FloatArray:
    """(n, 2, q) slope of the residuals over the free directions, by central differences."""
    step = 1e-4 / np.maximum(np.linalg.norm(free, axis=0), 1.0)
    return np.stack([(_off(found.shifted(h * way), pixels, points) - _off(found.shifted(-h * way), pixels, points))
                     / (2 * h) for h, way in zip(step, free.T, strict=True)], axis=-1)


def _inverse(normal: FloatArray) -> FloatArray:
    """The inverse of a positive matrix, scaled first: its numbers may differ by many orders."""
    size = np.sqrt(np.diag(normal))
    return np.asarray(np.linalg.pinv(normal / np.outer(size, size), hermitian=True) / np.outer(size, size))
