"""Linear starts for the plane map: homographies by normalised direct linear transformation, and a robust choice."""

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def normalising(points: FloatArray) -> FloatArray:
    """Similarities (..., 3, 3) that move points (..., n, 2) to mean 0 and mean distance sqrt(2).

    Hartley and Zisserman (2004), section 4.4.4. Without it the linear system is badly conditioned.
    """
    middle = points.mean(axis=-2)
    spread = np.linalg.norm(points - middle[..., None, :], axis=-1).mean(axis=-1)
    scale = np.sqrt(2.0) / np.where(spread > 0, spread, 1.0)
    turn = np.zeros((*points.shape[:-2], 3, 3))
    turn[..., 0, 0] = turn[..., 1, 1] = scale
    turn[..., :2, 2] = -scale[..., None] * middle
    turn[..., 2, 2] = 1.0
    return turn


def linear_homography(from_points: FloatArray, to_points: FloatArray) -> FloatArray:
    """Homographies (..., 3, 3) of least algebraic error between (..., n, 2) points, n >= 4; Frobenius norm 1.

    Hartley and Zisserman (2004), algorithm 4.2.
    """
    from_norm, to_norm = normalising(from_points), normalising(to_points)
    a, b = mapped(from_norm, from_points), mapped(to_norm, to_points)
    one, zero = np.ones(a.shape[:-1]), np.zeros(a.shape[:-1])
    x, y, u, v = a[..., 0], a[..., 1], b[..., 0], b[..., 1]
    rows_u = np.stack([x, y, one, zero, zero, zero, -u * x, -u * y, -u], axis=-1)
    rows_v = np.stack([zero, zero, zero, x, y, one, -v * x, -v * y, -v], axis=-1)
    # a row of zeros: four points give 8 equations, and the ninth singular vector is wanted
    system = np.concatenate([rows_u, rows_v, np.zeros_like(rows_u[..., :1, :])], axis=-2)
    last = np.linalg.svd(system, full_matrices=False)[2][..., -1, :]
    plane = np.linalg.solve(to_norm, last.reshape(*last.shape[:-1], 3, 3) @ from_norm)
    return np.asarray(plane / np.linalg.norm(plane, axis=(-2, -1), keepdims=True))


def mapped(plane: FloatArray, points: FloatArray) -> FloatArray:
    """Points (..., n, 2) through homographies (..., 3, 3); infinite or NaN on the horizon."""
    out = points @ np.swapaxes(plane[..., :2], -1, -2) + plane[..., None, :, 2]
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(out[..., :2] / out[..., 2:])


def robust_homography(from_points: FloatArray, to_points: FloatArray, trials: int = 600, seed: int = 0) -> FloatArray:
    """The homography (3, 3) through four of the (n, 2) points with the least median distance to all `to_points`.

    Least median of squares (Rousseeuw 1984): holds while less than half of the points are bad. The same seed gives the
    same choice. With four points it is the homography through them.
    """
    n = len(from_points)
    if n <= 4:
        return linear_homography(from_points, to_points)
    fours = np.argsort(np.random.default_rng(seed).random((trials, n)), axis=1)[:, :4]
    with np.errstate(all="ignore"):
        planes = linear_homography(from_points[fours], to_points[fours])
        apart = np.linalg.norm(mapped(planes, from_points) - to_points, axis=-1)
    # with 8 numbers fitted, the half that must agree is counted beyond the four used
    rank = min(n - 1, (n + 4) // 2)
    median = np.partition(np.where(np.isfinite(apart), apart, np.inf), rank, axis=1)[:, rank]
    best = planes[int(np.argmin(median))]
    close = apart[int(np.argmin(median))] <= 2.5 * max(float(median.min()), 1e-12)
    return linear_homography(from_points[close], to_points[close]) if close.sum() >= 4 else best
