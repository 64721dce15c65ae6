"""Homographies by normalised direct linear transformation, and the one that most points agree on."""

from math import comb, log

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
    system = _system(mapped(from_norm, from_points), mapped(to_norm, to_points))
    last = np.linalg.svd(system, full_matrices=False)[2][..., -1, :]
    plane = np.linalg.solve(to_norm, last.reshape(*last.shape[:-1], 3, 3) @ from_norm)
    return np.asarray(plane / np.linalg.norm(plane, axis=(-2, -1), keepdims=True))


def determinacy(from_points: FloatArray, to_points: FloatArray) -> float:
    """How firmly points (n, 2) fix a homography: 0 where more than one passes, about 0.4 for the corners of a square.

    Ratio of the second least to the greatest singular value of the linear system.
    """
    a, b = mapped(normalising(from_points), from_points), mapped(normalising(to_points), to_points)
    values = np.linalg.svd(_system(a, b), compute_uv=False)
    return float(values[-2] / values[0])


def _system(a: FloatArray, b: FloatArray) -> FloatArray:
    """(..., 2n + 1, 9) equations of a homography from a to b (..., n, 2).

    The last is one of zeros: four points give eight, and the ninth singular vector is wanted.
    """
    one, zero = np.ones(a.shape[:-1]), np.zeros(a.shape[:-1])
    x, y, u, v = a[..., 0], a[..., 1], b[..., 0], b[..., 1]
    rows_u = np.stack([x, y, one, zero, zero, zero, -u * x, -u * y, -u], axis=-1)
    rows_v = np.stack([zero, zero, zero, x, y, one, -v * x, -v * y, -v], axis=-1)
    return np.concatenate([rows_u, rows_v, np.zeros_like(rows_u[..., :1, :])], axis=-2)


def mapped(plane: FloatArray, points: FloatArray) -> FloatArray:
    """Points (..., n, 2) through homographies (..., 3, 3); infinite or NaN on the horizon."""
    out = points @ np.swapaxes(plane[..., :2], -1, -2) + plane[..., None, :, 2]
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(out[..., :2] / out[..., 2:])


def agreed_homography(
    from_points: FloatArray, to_points: FloatArray, trials: int = 2000, seed: int = 0
) -> tuple[FloatArray, NDArray[np.bool_]]:
    """The homography (3, 3) that most of the (n, 2) points agree on best, and which those are (n,).

    Of homographies through four points each, the one whose agreement is least likely to be chance (a contrario, Moisan
    and Stival 2004): with p_k the share of the field within the k-th smallest distance, chance is as rare as
    C(n, k) C(k, 4) p_k**(k - 4). It needs no threshold and no majority. The same seed makes the same choice.
    """
    n = len(from_points)
    fours = np.argsort(np.random.default_rng(seed).random((trials if n > 4 else 1, n)), axis=1)[:, :4]
    with np.errstate(all="ignore"):
        planes = linear_homography(from_points[fours], to_points[fours])
        apart = np.linalg.norm(mapped(planes, from_points) - to_points, axis=-1)
    apart = np.where(np.isfinite(apart), apart, np.inf)
    size = np.maximum(np.ptp(to_points, axis=0), 1e-12)
    # nothing is nearer than a millionth of the field: exact points would else agree by fours alone
    share = np.clip(np.pi * np.sort(apart, axis=1) ** 2 / size.prod(), 1e-12, 1.0)
    k = np.arange(4, n + 1)
    chance = np.array([log(comb(n, int(i)) * comb(int(i), 4)) for i in k]) + (k - 4) * np.log(share[:, 3:])
    best, many = np.unravel_index(int(np.argmin(chance)), chance.shape)
    agreeing = apart[best] <= np.partition(apart[best], many + 3)[many + 3]
    return linear_homography(from_points[agreeing], to_points[agreeing]), agreeing
