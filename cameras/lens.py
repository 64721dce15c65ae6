"""The lens: where a ray of the camera falls on the image, and back; exact both ways.

Frames: a ray is (x, y) at z = 1 of the camera frame (x right, y down, z out); a pixel is (u, v), centres at whole
numbers as in OpenCV.
"""

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from cameras.jsonfile import JsonFile

FloatArray = NDArray[np.float64]
LENS_FORMAT = 1
NAMES = ("fx_px", "fy_px", "cx_px", "cy_px", "k1", "k2", "p1", "p2", "k3")
_KEYS = (*NAMES, "image_size_px", "covariance", "rms_px", "views")
_WRITER = "sanderling calibrate lens"
_STEPS = 50
_CONVERGED = 1e-12  # of a ray: 1e-8 px for any focal length below 10000 px


def _none() -> FloatArray:
    return np.zeros((9, 9))


@dataclass(frozen=True)
class Lens:
    """Focal lengths, principal point, radial and tangential distortion (Brown 1966; Zhang 2000, section 3.3).

    parameters (9,): fx, fy, cx, cy in px; k1, k2, p1, p2, k3.  covariance (9, 9) of them; 0 where held fixed.
    image_size_px: width, height of the images it holds for; None where not known.
    """

    parameters: FloatArray
    image_size_px: tuple[int, int] | None = None
    covariance: FloatArray = field(default_factory=_none)

    @property
    def standard_errors(self) -> FloatArray:
        """(9,) one standard error of each parameter."""
        return np.sqrt(np.maximum(np.diag(self.covariance), 0.0))

    def rays(self, pixels: ArrayLike) -> FloatArray:
        """Undistorted rays (..., 2) of pixels (..., 2), iterated to convergence; NaN where no ray falls on one."""
        return rays_of(np.asarray(pixels, dtype=np.float64), self.parameters)

    def pixels(self, rays: ArrayLike) -> FloatArray:
        """Pixels (..., 2) on which rays (..., 2) fall; the exact inverse of `rays`."""
        return pixels_of(np.asarray(rays, dtype=np.float64), self.parameters)

    def document(self) -> dict[str, Any]:
        """The lens as a JSON object."""
        size = None if self.image_size_px is None else list(self.image_size_px)
        return {"kind": "lens", "format": LENS_FORMAT, "image_size_px": size,
                **dict(zip(NAMES, self.parameters.tolist(), strict=True)), "covariance": self.covariance.tolist()}


def lens_of(file: JsonFile, covariance: FloatArray) -> Lens:
    """The lens in a checked JSON file, with that covariance. Raises InputFault naming what is wrong with it."""
    parameters = np.array([file.number(name) for name in NAMES])
    if (parameters[:2] <= 0).any():
        raise file.fault("fx_px", "a focal length is not positive")
    if file.values.get("image_size_px") is None:
        return Lens(parameters, None, covariance)
    width, height = (int(n) for n in file.numbers("image_size_px", (2,)))
    if not (0 < width <= 100_000 and 0 < height <= 100_000):
        raise file.fault("image_size_px", f"{width} x {height} is no size of an image")
    return Lens(parameters, (width, height), covariance)


def load_lens(path: str | Path) -> Lens:
    """Read a lens file. Raises InputFault naming file, key, fault and remedy."""
    file = JsonFile(path, "lens", LENS_FORMAT, _KEYS, _WRITER)
    return lens_of(file, file.numbers("covariance", (9, 9)))


def pixels_of(rays: FloatArray, parameters: FloatArray) -> FloatArray:
    """Pixels (..., 2) of rays (..., 2) under parameters (..., 9), broadcast together."""
    fx, fy, cx, cy, *distortion = np.moveaxis(parameters, -1, 0)
    x, y = _bent(rays[..., 0], rays[..., 1], distortion)
    return np.stack([fx * x + cx, fy * y + cy], axis=-1)


def rays_of(pixels: FloatArray, parameters: FloatArray) -> FloatArray:
    """Rays (..., 2) of pixels (..., 2): Newton's method on the distortion, NaN where it does not converge.

    A distortion that folds over has two rays for a pixel: the one on the near side of the fold is returned.
    """
    fx, fy, cx, cy, *distortion = parameters
    at = np.stack([(pixels[..., 0] - cx) / fx, (pixels[..., 1] - cy) / fy], axis=-1)
    if not any(distortion):
        return at
    x, y = at[..., 0].copy(), at[..., 1].copy()
    miss = np.full(x.shape, np.inf)
    for _ in range(_STEPS):
        bent_x, bent_y = _bent(x, y, distortion)
        off_x, off_y = at[..., 0] - bent_x, at[..., 1] - bent_y
        miss = np.hypot(off_x, off_y)
        if not (miss > _CONVERGED).any():
            break
        xx, xy, yx, yy, det = _slope(x, y, distortion)
        det = np.where(det > 0.0, det, np.nan)
        x += (yy * off_x - xy * off_y) / det
        y += (xx * off_y - yx * off_x) / det
    straight = _slope(x, y, distortion)[4] > 0.0
    return np.where(((miss <= _CONVERGED) & straight)[..., None], np.stack([x, y], axis=-1), np.nan)


def _bent(x: FloatArray, y: FloatArray, distortion: list[Any]) -> tuple[FloatArray, FloatArray]:
    k1, k2, p1, p2, k3 = distortion
    rr = x * x + y * y
    radial = 1.0 + rr * (k1 + rr * (k2 + rr * k3))
    return x * radial + 2 * p1 * x * y + p2 * (rr + 2 * x * x), y * radial + p1 * (rr + 2 * y * y) + 2 * p2 * x * y


def _slope(
    x: FloatArray, y: FloatArray, distortion: list[Any]
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Derivatives of `_bent`: dx'/dx, dx'/dy, dy'/dx, dy'/dy, and their determinant."""
    k1, k2, p1, p2, k3 = distortion
    rr = x * x + y * y
    radial = 1.0 + rr * (k1 + rr * (k2 + rr * k3))
    growth = 2 * (k1 + rr * (2 * k2 + rr * 3 * k3))
    xx = radial + growth * x * x + 2 * p1 * y + 6 * p2 * x
    yy = radial + growth * y * y + 6 * p1 * y + 2 * p2 * x
    xy = growth * x * y + 2 * p1 * x + 2 * p2 * y
    return xx, xy, xy, yy, xx * yy - xy * xy
