"""Edges of an image: a coarse map of their directions for searching, and their sub-pixel places for fitting.

The map keeps, for each cell of 4 x 4 pixels, the set of edge directions in it and around it (after Hinterstoisser et
al., "Gradient response maps", IEEE PAMI 34(5), 2012, section 3), without regard to which side is the lighter.
Only ridges count (non-maximum suppression, Canny 1986): a shaded or glittering face is no crowd of edges.
"""

from dataclasses import dataclass

import cv2
import numpy as np
from numba import njit
from numpy.typing import NDArray

CELL_PX = 4
TAN_EIGHTH, TAN_STEEP = np.tan(np.pi / 8), np.tan(3 * np.pi / 8)
NOISE_FACTOR = 4.0
TWIST_TRIMMED = 2 * 0.5586  # mean of the lower four fifths of the size of a twist of normal noise of 1
LEAST_GRADIENT = 16.0  # of a 3 x 3 Sobel filter at half size: a step of 4 grey levels


@dataclass(frozen=True)
class EdgeMap:
    """Edges of one image, coarsely.

    strength (h, w) float32: strongest gradient in each cell of 4 x 4 pixels, Sobel units at half size.
    own (h, w) uint8: bit k set where the cell holds an edge's ridge with its normal in the k-th of 8 sectors of half a
    turn.
    near (h, w) uint8: the same for the cell and its eight neighbours.  least: gradient that counts as an edge.
    noise: standard deviation of a pixel about its neighbours, grey levels.
    """

    strength: NDArray[np.float32]
    own: NDArray[np.uint8]
    near: NDArray[np.uint8]
    least: float
    noise: float


def edge_map(grey: NDArray[np.uint8]) -> EdgeMap:
    """The edge map of a grey image (rows, columns), its threshold four times the median gradient of the belt."""
    rows, columns = grey.shape
    whole = grey[: rows - rows % CELL_PX, : columns - columns % CELL_PX]
    half = cv2.resize(whole, (whole.shape[1] // 2, whole.shape[0] // 2), interpolation=cv2.INTER_AREA)
    dx = cv2.Sobel(half, cv2.CV_16S, 1, 0)
    dy = cv2.Sobel(half, cv2.CV_16S, 0, 1)
    middle = np.median(np.abs(dx[::3, ::3]).astype(np.int32) + np.abs(dy[::3, ::3]))
    least = max(NOISE_FACTOR * float(middle) * 0.8, LEAST_GRADIENT)
    strength, own, near = _pooled(dx, dy, least)
    return EdgeMap(strength, own, near, least, noise_of(grey))


def noise_of(grey: NDArray[np.uint8]) -> float:
    """Standard deviation of a pixel's noise, from the twist of 2 x 2 pixels, which slopes and straight edges have not.

    The upper fifth, where something else is seen, is left out (a trimmed mean, as a median of whole numbers is coarse).
    """
    top, bottom = grey[:-1:8].astype(np.int16), grey[1::8].astype(np.int16)
    twist = np.abs(np.diff(top, axis=1) - np.diff(bottom, axis=1))
    count = np.bincount(twist.ravel(), minlength=1)
    kept = np.minimum(np.cumsum(count), 0.8 * twist.size)
    share = np.diff(kept, prepend=0.0)
    return float((share @ np.arange(len(count))) / max(kept[-1], 1.0)) / TWIST_TRIMMED


@njit("i8(f8, f8)", cache=True, inline="always")
def _sector(x, y):  # type: ignore[no-untyped-def]
    """Which eighth of half a turn the direction (x, y) lies in, up to its sign."""
    if y < 0.0 or (y == 0.0 and x < 0.0):
        x, y = -x, -y
    if x > 0.0:
        return (0 if y < TAN_EIGHTH * x else 1) if y < x else (2 if x > TAN_EIGHTH * y else 3)
    return (4 if -x < TAN_EIGHTH * y else 5) if -x < y else (6 if y > TAN_EIGHTH * -x else 7)


@njit("b1(i2[:,::1], i2[:,::1], i8, i8, i4, i4, i4)", cache=True, inline="always")
def _on_ridge(dx, dy, j, i, gx, gy, square):  # type: ignore[no-untyped-def]
    """Whether neither neighbour along the gradient has a steeper one."""
    if j == 0 or i == 0 or j == dx.shape[0] - 1 or i == dx.shape[1] - 1:
        return True
    a, b = abs(gx), abs(gy)
    di = 0 if b > TAN_STEEP * a else (1 if gx > 0 else -1)
    dj = 0 if a > TAN_STEEP * b else (1 if gy > 0 else -1)
    x, y = np.int32(dx[j + dj, i + di]), np.int32(dy[j + dj, i + di])
    if x * x + y * y > square:
        return False
    x, y = np.int32(dx[j - dj, i - di]), np.int32(dy[j - dj, i - di])
    return x * x + y * y <= square


@njit("Tuple((f4[:,::1], u1[:,::1], u1[:,::1]))(i2[:,::1], i2[:,::1], f8)", cache=True)
def _pooled(dx, dy, least):  # type: ignore[no-untyped-def]
    rows, columns = dx.shape[0] // 2, dx.shape[1] // 2
    strength = np.zeros((rows, columns), np.float32)
    own = np.zeros((rows, columns), np.uint8)
    floor = np.int32(least * least)
    for j in range(rows):
        for i in range(columns):
            most = np.int32(0)
            bits = np.uint8(0)
            for k in range(2):
                for m in range(2):
                    gx, gy = np.int32(dx[2 * j + k, 2 * i + m]), np.int32(dy[2 * j + k, 2 * i + m])
                    square = gx * gx + gy * gy
                    most = max(most, square)
                    if square > floor and _on_ridge(dx, dy, 2 * j + k, 2 * i + m, gx, gy, square):
                        bits |= np.uint8(1 << _sector(float(gx), float(gy)))
            own[j, i] = bits
            strength[j, i] = np.sqrt(np.float32(most))
    across = own.copy()
    for j in range(rows):
        for i in range(1, columns - 1):
            across[j, i] = own[j, i - 1] | own[j, i] | own[j, i + 1]
    near = across.copy()
    for j in range(1, rows - 1):
        for i in range(columns):
            near[j, i] = across[j - 1, i] | across[j, i] | across[j + 1, i]
    return strength, own, near


@njit("f8(u1[:,::1], f8, f8)", cache=True, inline="always")
def _at(image, u, v):  # type: ignore[no-untyped-def]
    i, j = int(u), int(v)
    a, b = u - i, v - j
    top = image[j, i] + a * (np.float64(image[j, i + 1]) - image[j, i])
    bottom = image[j + 1, i] + a * (np.float64(image[j + 1, i + 1]) - image[j + 1, i])
    return top + b * (bottom - top)


MOST_SAMPLES = 96
OUTSIDE = 1e9


@njit("void(u1[:,::1], f8, f8, f8, f8, f8, f8, f8, f8, b1, f8[::1], f8[::1])", cache=True)
def edge_along(image, u, v, nu, nv, reach, least, sign, against, fine, profile, found):  # type: ignore[no-untyped-def]
    """Place of the edge that crosses the normal (nu, nv) near (u, v): found[0] pixels along it, found[1] its step.

    The profile is differenced over two pixels; the best peak is its strength less half for one at the end of the reach,
    times `against` for one of the other sign; a parabola gives its top. A fine profile has two samples a pixel,
    each averaged over three pixels along the edge; a rough one has one sample a pixel.
    found[1] is 0 where no step of `least` grey levels is in reach; found[0] is OUTSIDE where the profile leaves the
    image.
    """
    found[0], found[1] = 0.0, 0.0
    d = 2 if fine else 1
    side = int(np.ceil(reach * d)) + d + 1
    n = 2 * side + 1
    far = side / d + 1.5
    if n > profile.shape[0] or not (far < u < image.shape[1] - 2 - far and far < v < image.shape[0] - 2 - far):
        found[0] = OUTSIDE
        return
    for k in range(n):
        s = (k - side) / d
        x, y = u + s * nu, v + s * nv
        profile[k] = _at(image, x, y)
        if fine:
            profile[k] = 0.5 * profile[k] + 0.25 * (_at(image, x - nv, y + nu) + _at(image, x + nv, y - nu))
    best, at = 0.0, -1
    for k in range(d + 1, n - d - 1):
        here = profile[k + d] - profile[k - d]
        size = abs(here)
        if size < least:
            continue
        if size < abs(profile[k + d - 1] - profile[k - d - 1]) or size < abs(profile[k + d + 1] - profile[k - d + 1]):
            continue
        worth = size * (1.0 - 0.5 * abs(k - side) / (d * reach))
        if here * sign < 0.0:
            worth *= against
        if worth > best:
            best, at = worth, k
    if at < 0:
        return
    here = profile[at + d] - profile[at - d]
    before, after = abs(profile[at + d - 1] - profile[at - d - 1]), abs(profile[at + d + 1] - profile[at - d + 1])
    curve = before - 2.0 * abs(here) + after
    shift = 0.0 if curve >= 0.0 else 0.5 * (before - after) / curve
    found[0] = (at - side + min(max(shift, -1.0), 1.0)) / d
    found[1] = here
