"""Circles that hold 95 % of a plane error."""

from functools import cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import erf, fdtri

FloatArray = NDArray[np.float64]
PER_SIGMA_95 = 1.959964  # of one Gaussian coordinate


def radius_95(covariance: ArrayLike, freedom: float = np.inf) -> FloatArray:
    """(...) radius about the mean that holds 95 % of a plane Gaussian error of covariance (..., 2, 2).

    With a covariance estimated on few degrees of freedom wider by Hotelling's rule (1931); infinite without any.
    """
    variances = np.clip(np.linalg.eigvalsh(np.asarray(covariance, dtype=np.float64)), 0.0, None)
    least, most = np.sqrt(variances[..., 0]), np.sqrt(variances[..., 1])
    if freedom < 1:
        return np.full(most.shape, np.inf)
    ratios, radii = _radii()
    round_ones = np.interp(np.divide(least, most, out=np.zeros_like(most), where=most > 0), ratios, radii)
    return np.asarray(most * round_ones * _widened(freedom))


def _widened(freedom: float) -> float:
    exact = -np.log(0.05)  # half the 95 % quantile of chi-square with two degrees of freedom
    return float(np.sqrt(fdtri(2, freedom, 0.95) / exact)) if np.isfinite(freedom) else 1.0


@cache
def _radii() -> tuple[FloatArray, FloatArray]:
    """Ratios of the lesser to the greater standard deviation, and the 95 % radius over the greater, by bisection.

    Within radius R lies the integral of phi(x) erf(sqrt(R^2 - x^2) / (ratio sqrt 2)) over x from -R to R.
    """
    ratios = np.linspace(0.0, 1.0, 101)
    turn = (np.arange(400) + 0.5) * (np.pi / 400) - np.pi / 2
    low, high = np.full(101, 1.9), np.full(101, 2.5)
    for _ in range(40):
        middle = (low + high) / 2
        x, rest = middle[:, None] * np.sin(turn), middle[:, None] * np.cos(turn)
        inner = erf(rest / np.maximum(ratios[:, None], 1e-9) / np.sqrt(2))
        inside = (np.exp(-x * x / 2) / np.sqrt(2 * np.pi) * inner * rest).sum(axis=1) * np.pi / 400
        low, high = np.where(inside < 0.95, middle, low), np.where(inside < 0.95, high, middle)
    return ratios, (low + high) / 2
