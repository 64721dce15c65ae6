"""Fit the map from pixels to the cell frame to touched marks, robust to a few bad ones.

A linear start (Hartley and Zisserman 2004, algorithm 4.2; pose from it as in Zhang 2000, section 3.1), then every
parameter refined on the residuals in millimetres (least squares, Hartley and Zisserman 2004, section 4.2.4).
"""

from dataclasses import dataclass, replace
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import least_squares

from cameras.camera import CameraMap, scaled_axes
from cameras.faults import InputFault
from cameras.lens import NAMES, Lens
from cameras.plane_start import linear_start

FloatArray = NDArray[np.float64]
K1 = NAMES.index("k1")
FEWEST_FOR_DISTORTION = 9  # touches; with fewer, curvature and bad touches look alike
_GATE = 4.0  # standard deviations; one good touch in 3000 lies beyond
_FLOOR_MM = 1e-7  # residuals below it are rounding
_ROUNDS = 20


@dataclass(frozen=True)
class PlaneFit:
    """A map and the n touches it was fitted to.

    residuals_mm (n, 2): mapped less touched.  left_out_mm (n, 2): the same under the map fitted without that touch.
    kept (n,): False for a touch left out of the fit as bad.  sigma_mm: standard deviation of one coordinate of a touch.
    slope (n, 2, q): of the residuals over the q numbers fitted.
    """

    map: CameraMap
    pixels: FloatArray
    points: FloatArray
    residuals_mm: FloatArray
    left_out_mm: FloatArray
    kept: NDArray[np.bool_]
    sigma_mm: float
    slope: FloatArray


@dataclass(frozen=True)
class _Problem:
    """What is to be fitted: a start, the directions (15 or 21, q) in which it may change, and the touches.

    The first `tied` directions are held by the lens file; each is one standard deviation of the lens long.
    """

    start: CameraMap
    free: FloatArray
    tied: int
    pixels: FloatArray
    points: FloatArray

    @property
    def numbers(self) -> int:
        """How many numbers are fitted."""
        return int(self.free.shape[1])

    def off_mm(self, found: CameraMap) -> FloatArray:
        """(n, 2) mapped less touched; far off where a pixel has no point."""
        return np.nan_to_num(found.to_cell(self.pixels, self.points[:, 2]) - self.points[:, :2], nan=1e6)

    def slope(self, found: CameraMap) -> FloatArray:
        """(n, 2, q) slope of `off_mm` over the free directions, by central differences."""
        step = 1e-4 / np.maximum(np.linalg.norm(self.free, axis=0), 1.0)
        return np.stack([(self.off_mm(found.shifted(h * way)) - self.off_mm(found.shifted(-h * way))) / (2 * h)
                         for h, way in zip(step, self.free.T, strict=True)], axis=-1)  # fmt: skip


def fit_plane(
    pixels: ArrayLike,
    points: ArrayLike,
    lens: Lens | None = None,
    image_size_px: tuple[int, int] | None = None,
    file: str | Path = "touches",
) -> CameraMap:
    """The map alone; see `fit_touches`."""
    return fit_touches(pixels, points, lens, image_size_px, file).map


def fit_touches(
    pixels: ArrayLike,
    points: ArrayLike,
    lens: Lens | None = None,
    image_size_px: tuple[int, int] | None = None,
    file: str | Path = "touches",
) -> PlaneFit:
    """Fit a map to marks seen at pixels (n, 2) and known at points (n, 2: z = 0, or n, 3) of the cell frame, mm.

    With a lens the pose is fitted, and the lens within what its own covariance allows. Without one, the projection of a
    pinhole camera where marks lie at two heights, else a homography to which height makes no difference; to either a
    radial distortion about the middle of the image (of the marks, where its size is not given) if they ask for it.
    Raises InputFault, naming `file`, for fewer than four marks, marks on one line and numbers not finite.
    """
    pixels, points = _checked(np.asarray(pixels, np.float64), np.asarray(points, np.float64), file)
    seen_by = _no_lens(pixels, image_size_px) if lens is None else lens
    start, agreeing = linear_start(pixels, points, seen_by, lens is not None, file)
    found = None
    if lens is None and len(pixels) >= FEWEST_FOR_DISTORTION:
        found = _settled(_problem(start, pixels, points, radial=True), agreeing)
    if found is None or abs(found.map.lens.parameters[K1]) < 2 * found.map.lens.standard_errors[K1]:
        found = _settled(_problem(start, pixels, points, radial=False), agreeing)
    if found is None or found.kept.sum() < 0.3 * len(pixels):
        raise InputFault(file, "", f"hardly any of the {len(pixels)} touches agree on a map",
                         "check pixels, positions, counts and the lens file")
    return found


def _no_lens(pixels: FloatArray, image_size_px: tuple[int, int] | None) -> Lens:
    """Stands in for a lens: moves the middle to 0 and scales to a size near 1."""
    middle = pixels.mean(axis=0) if image_size_px is None else (np.array(image_size_px) - 1) / 2
    scale = float(np.linalg.norm(pixels - middle, axis=1).mean())
    return Lens(np.array([scale, scale, *middle, 0, 0, 0, 0, 0]), image_size_px)


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


def _problem(start: CameraMap, pixels: FloatArray, points: FloatArray, radial: bool) -> _Problem:
    """With a lens: pose and, as far as its covariance goes, lens; without: the projection and, if `radial`, k1."""
    if start.basis == "pose":
        values, axes, size = scaled_axes(start.lens.covariance)
        tied = size[:, None] * axes * np.sqrt(values)
        free = np.zeros((15, tied.shape[1] + 6))
        free[:9, : tied.shape[1]] = tied
        free[9:, tied.shape[1] :] = np.eye(6)
        return _Problem(start, free, tied.shape[1], pixels, points)
    # the projection's scale means nothing, so it must not change along itself
    size = np.tile([*np.full(3, 1.0 / max(float(np.abs(points).max()), 1.0)), 1.0], 3)
    some = np.ones((3, 4), dtype=bool)
    some[:, 2] = start.basis == "rays"
    at = np.flatnonzero(some.ravel())
    across = np.linalg.svd((start.projection.ravel() / size)[None, at])[2][1:].T
    free = np.zeros((21, len(at) - 1 + radial))
    free[9 + at, radial:] = size[at, None] * across
    if radial:
        free[K1, 0] = 1.0
    return _Problem(start, free, 0, pixels, points)


def _settled(problem: _Problem, kept: NDArray[np.bool_]) -> PlaneFit | None:
    """The fit to those touches that lie within the gate of it; from `kept`, until no touch joins or leaves.

    None where too few are left to determine one. First the gate goes by the median, so that a few bad touches do not
    widen it for one another; then, as the median of a few touches is rough, by the standard deviation of those left.
    """
    sigma = max(float(np.sqrt((problem.off_mm(problem.start)[kept] ** 2).mean())), _FLOOR_MM)
    spare = 2 * len(kept) - (problem.numbers - problem.tied)
    if spare < 4:  # with a touch to spare, none can be told to be the bad one
        kept = np.ones(len(kept), dtype=bool)
    change = np.zeros(problem.numbers)
    for by_median in (True, False):
        for _ in range(_ROUNDS):
            if kept.sum() < 4 or 2 * kept.sum() + problem.tied < problem.numbers:
                return None
            change = _refined(problem, change, kept, sigma)
            fit = _judged(problem, problem.start.shifted(problem.free @ change), kept)
            sigma = fit.sigma_mm
            near = _near(fit, by_median)
            if spare < 4 or (near == kept).all():
                break
            kept = near
    return fit


def _refined(problem: _Problem, change: FloatArray, kept: NDArray[np.bool_], sigma: float) -> FloatArray:
    """The change (q,) of least squares from a given one: residuals in mm over sigma, and the lens's own deviations."""

    def residuals(change: FloatArray) -> FloatArray:
        off = problem.off_mm(problem.start.shifted(problem.free @ change))[kept]
        return np.concatenate([off.ravel() / sigma, change[: problem.tied]])

    best = least_squares(residuals, change, method="lm", x_scale="jac", xtol=1e-12, ftol=1e-12)
    return np.asarray(best.x, dtype=np.float64)


def _near(fit: PlaneFit, by_median: bool) -> NDArray[np.bool_]:
    """Which touches lie within the gate.

    A touch that took part draws the map to itself: its residual grows by one over the root of what it leaves to the
    others, which makes it the mean, by product, of residual and left-out residual. One that took no part is held
    against a map that is uncertain too.
    """
    apart, left = (np.linalg.norm(off, axis=1) for off in (fit.residuals_mm, fit.left_out_mm))
    apart = np.where(np.isfinite(left), np.sqrt(apart * left), apart)
    # the distance with equal errors in x and y has the median 1.1774 standard deviations (Rayleigh)
    sigma = float(np.median(apart[fit.kept])) / 1.1774 if by_median else fit.sigma_mm
    doubt = np.where(fit.kept, 0.0, fit.map.sigma_mm(fit.points))
    return np.asarray(apart <= _GATE * np.hypot(max(sigma, _FLOOR_MM), doubt))


def _judged(problem: _Problem, found: CameraMap, kept: NDArray[np.bool_]) -> PlaneFit:
    """The fit with its covariance and leave-one-out residuals, from the slope of the residuals at the solution."""
    off, slope = problem.off_mm(found), problem.slope(found)
    flat, prior = slope[kept].reshape(-1, problem.numbers), np.diag(np.arange(problem.numbers) < problem.tied)
    squares, freedom, sigma = float((off[kept] ** 2).sum()), 0.0, _FLOOR_MM
    for _ in range(10):  # the weight of the lens file against the touches depends on sigma, and sigma on it
        inverse = _inverse(flat.T @ flat / sigma**2 + prior)
        freedom = len(flat) - float(np.sum(flat @ inverse * flat)) / sigma**2
        sigma = max(float(np.sqrt(squares / max(freedom, 1.0))), _FLOOR_MM)
    if freedom < 0.5:  # nothing tells how good the touches are: a pixel is assumed
        freedom, sigma = 0.0, float(np.median(found.mm_per_pixel(problem.points)))
    inverse = _inverse(flat.T @ flat / sigma**2 + prior)
    left = _left_out(off, slope, inverse / sigma**2, kept)
    left_rms = float(np.sqrt((left[kept] ** 2).sum(axis=1).mean()))
    covariance = problem.free @ inverse @ problem.free.T
    told = replace(
        found, covariance=covariance, freedom=freedom, touches=int(kept.sum()),
        lens=replace(found.lens, covariance=covariance[:9, :9]),
        rms_mm=float(np.sqrt(squares / kept.sum())), leave_one_out_rms_mm=left_rms if np.isfinite(left_rms) else None,
        touched_px=cv2.convexHull(problem.pixels[kept].astype(np.float32)).reshape(-1, 2).astype(np.float64),
    )  # fmt: skip
    return PlaneFit(told, problem.pixels, problem.points, off, left, kept, sigma, slope)


def _left_out(off: FloatArray, slope: FloatArray, inverse: FloatArray, kept: NDArray[np.bool_]) -> FloatArray:
    """(n, 2) residual of each touch under the map fitted without it; NaN where the others do not determine it.

    Residual over 1 less leverage (Cook and Weisberg 1982, section 2.2): exact where the map is linear in its numbers.
    """
    lever = slope[kept] @ inverse @ np.swapaxes(slope[kept], -1, -2)
    rest = np.eye(2) - lever
    lone = np.linalg.det(rest) < 1e-6
    rest[lone] = np.nan
    left = off.copy()
    left[kept] = np.linalg.solve(rest, off[kept][..., None])[..., 0]
    return left


def _inverse(normal: FloatArray) -> FloatArray:
    """The inverse of a positive matrix, scaled first: its numbers may differ by many orders."""
    size = np.sqrt(np.diag(normal))
    return np.asarray(np.linalg.pinv(normal / np.outer(size, size), hermitian=True) / np.outer(size, size))
