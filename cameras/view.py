"""A camera as seen from close by: where a few centimetres of the cell project, as polynomials cheap enough for loops.

The camera never moves, so the polynomials are fitted once, on a net of places, and serve every frame.
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numba import njit
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

SPACING_MM = 30.0
REACH_MM = 45.0
TERMS = 14
MOST_PLACES = 20_000


class CameraMap(Protocol):
    """What a finder needs of a camera: pixels to the cell frame at a height, and back."""

    def to_cell(self, pixels: FloatArray, height_mm: float) -> FloatArray:
        """Pixels (..., 2) to x, y (..., 2) in the cell frame where their rays pass the height."""
        ...

    def to_pixel(self, points_mm: FloatArray) -> FloatArray:
        """Points (..., 3) in the cell frame to pixels (..., 2)."""
        ...


def _terms(x: FloatArray, y: FloatArray, z: FloatArray) -> FloatArray:
    one = np.ones_like(x)
    return np.stack([one, x, y, x * x, x * y, y * y, x * x * x, x * x * y, x * y * y, y * y * y,
                     z, x * z, y * z, z * z], axis=-1)  # fmt: skip


@dataclass(frozen=True)
class Views:
    """Local projections over the belt a camera sees.

    places_mm (m, 2): where each holds, cell frame.  coefficients (m, 2, 14): pixel u, v as polynomials of x, y
    (millimetres from the place) and z (millimetres above the surface): cubic in x, y, to 0.01 px within 45 mm.
    """

    places_mm: FloatArray
    coefficients: FloatArray
    surface_mm: float

    def nearest(self, xy_mm: FloatArray) -> NDArray[np.int64]:
        """Index of the place nearest to each of the points (n, 2)."""
        apart = np.linalg.norm(self.places_mm[None] - np.asarray(xy_mm)[:, None], axis=2)
        return np.asarray(np.argmin(apart, axis=1), dtype=np.int64)


def views_of(camera: CameraMap, surface_mm: float, highest_mm: float, shape: tuple[int, int]) -> Views:
    """Fit the local projections for an image of `shape` (rows, columns) and things up to `highest_mm` high.

    Places of which the camera sees nothing are left out; there may be none left.
    """
    rows, columns = shape
    u, v = np.meshgrid(np.linspace(0, columns - 1, 17), np.linspace(0, rows - 1, 17))
    seen = camera.to_cell(np.stack([u, v], axis=-1).reshape(-1, 2), surface_mm)
    seen = seen[np.all(np.isfinite(seen), axis=1)]
    if not len(seen):
        return Views(np.zeros((0, 2)), np.zeros((0, 2, TERMS)), surface_mm)
    low, high = seen.min(axis=0), seen.max(axis=0)
    steps = [max(int(np.ceil((b - a) / SPACING_MM)) + 1, 2) for a, b in zip(low, high, strict=True)]
    if steps[0] * steps[1] > MOST_PLACES:
        steps = [min(step, 140) for step in steps]
    x, y = np.meshgrid(np.linspace(low[0], high[0], steps[0]), np.linspace(low[1], high[1], steps[1]))
    places = np.stack([x.ravel(), y.ravel()], axis=1)
    near = np.linalg.norm(places[:, None] - seen[None], axis=2).min(axis=1)
    places = places[near < 2 * REACH_MM] if np.any(near < 2 * REACH_MM) else places
    side = np.linspace(-REACH_MM, REACH_MM, 6)
    dx, dy, z = (a.ravel() for a in np.meshgrid(side, side, np.linspace(0.0, max(highest_mm, 1.0), 3)))
    points = np.empty((len(places), len(dx), 3))
    points[..., :2] = places[:, None] + np.stack([dx, dy], axis=1)
    points[..., 2] = surface_mm + z
    pixels = camera.to_pixel(points.reshape(-1, 3)).reshape(len(places), len(dx), 2)
    before = np.all(np.isfinite(pixels), axis=(1, 2))
    places, pixels = places[before], pixels[before]
    fitted = np.einsum("tk,mkc->mct", np.linalg.pinv(_terms(dx, dy, z)), pixels)
    return Views(places, np.ascontiguousarray(fitted), surface_mm)


@njit("f8(f8[::1], f8, f8, f8)", cache=True, inline="always")
def _value(c, x, y, z):  # type: ignore[no-untyped-def]
    along = c[1] + x * (c[3] + x * c[6] + y * c[7]) + y * c[4] + z * c[11]
    across = c[2] + y * (c[5] + x * c[8] + y * c[9]) + z * c[12]
    return c[0] + x * along + y * across + z * (c[10] + z * c[13])


@njit("UniTuple(f8, 2)(f8[:,::1], f8, f8, f8)", cache=True, inline="always")
def project(c, x, y, z):  # type: ignore[no-untyped-def]
    """Pixel u, v of one point by the coefficients (2, 14) of a place."""
    return _value(c[0], x, y, z), _value(c[1], x, y, z)


@njit("void(f8[:,::1], f8, f8, f8, f8[:,::1])", cache=True)
def slopes(c, x, y, z, out):  # type: ignore[no-untyped-def]
    """Derivatives of u, v (rows of `out` (2, 3)) by x, y, z at one point."""
    for k in range(2):
        out[k, 0] = c[k, 1] + 2 * x * c[k, 3] + y * c[k, 4] + 3 * x * x * c[k, 6] + 2 * x * y * c[k, 7] \
            + y * y * c[k, 8] + z * c[k, 11]  # fmt: skip
        out[k, 1] = c[k, 2] + x * c[k, 4] + 2 * y * c[k, 5] + x * x * c[k, 7] + 2 * x * y * c[k, 8] \
            + 3 * y * y * c[k, 9] + z * c[k, 12]  # fmt: skip
        out[k, 2] = c[k, 10] + x * c[k, 11] + y * c[k, 12] + 2 * z * c[k, 13]


@njit("void(f8[:,::1], f8, f8, f8, f8[::1])", cache=True)
def unproject(c, u, v, z, out):  # type: ignore[no-untyped-def]
    """The point (2,) at height z that is seen at pixel u, v; by Newton's method from the place itself."""
    local = np.empty((2, 3))
    out[0], out[1] = 0.0, 0.0
    for _ in range(4):
        slopes(c, out[0], out[1], z, local)
        at_u, at_v = project(c, out[0], out[1], z)
        det = local[0, 0] * local[1, 1] - local[0, 1] * local[1, 0]
        du, dv = u - at_u, v - at_v
        out[0] += (local[1, 1] * du - local[0, 1] * dv) / det
        out[1] += (local[0, 0] * dv - local[1, 0] * du) / det
