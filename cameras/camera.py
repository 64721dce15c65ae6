"""The camera file, and the map it holds: pixel to cell frame at any height, and back.

One projection (3, 4) takes cell points to rays of the camera; a pixel at a given height is the point of that height
which the projection puts on the pixel's ray. So the two directions are exact inverses.
"""

from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any, Literal, cast, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from cameras.jsonfile import JsonFile
from cameras.lens import NAMES, Lens, lens_of, pixels_of

FloatArray = NDArray[np.float64]
CAMERA_FORMAT = 1
_WRITER = "sanderling calibrate plane"
_KEYS = (*NAMES, "image_size_px", "basis", "plane_mm", "projection", "covariance", "freedom", "rms_mm",
         "leave_one_out_rms_mm", "touches", "touched_px")  # fmt: skip

Basis = Literal["pose", "rays", "plane"]
"""What a map rests on: `pose`: lens and touches; `rays`: touches at two heights, no lens; `plane`: touches at one
height, no lens, so that height makes no difference to it."""


@dataclass(frozen=True)
class CameraMap:
    """Pixel (u, v) to cell frame (x, y) at a height, and back. Heights are z in the cell frame, mm.

    basis: see `Basis`.  lens: for a map without one it shifts and scales pixels, with one radial term at the most.
    projection (3, 4): cell point (x, y, z, 1) to a multiple of (ray, 1); its last row is positive before the camera.
    plane_mm: height of the touched plane.
    covariance: of what was fitted: the lens's nine, then for a pose (15, 15) a small rotation (rad) and a shift (mm) in
    the camera frame, else (21, 21) the projection's numbers by rows.  freedom: degrees of freedom it rests on.
    rms_mm: root mean square of the distance between touched and mapped points; leave_one_out_rms_mm: the same for
    each touch under the map fitted without it, None where that leaves too few.  touches: how many it was fitted to.
    touched_px (k, 2): convex hull of the touched marks in the image.
    """

    basis: Basis
    lens: Lens
    projection: FloatArray
    plane_mm: float
    covariance: FloatArray
    freedom: float
    rms_mm: float
    leave_one_out_rms_mm: float | None = None
    touches: int = 0
    touched_px: FloatArray = field(default_factory=lambda: np.zeros((0, 2)))

    @property
    def image_size_px(self) -> tuple[int, int] | None:
        """Width and height of the camera's images, None where not known."""
        return self.lens.image_size_px

    @property
    def maps_height(self) -> bool:
        """Whether height makes a difference to the map."""
        return self.basis != "plane"

    def to_cell(self, pixels: ArrayLike, height_mm: ArrayLike | None = None) -> FloatArray:
        """Cell points (..., 2) at `height_mm` (z in the cell frame; the touched plane's by default) seen at `pixels`.

        pixels (..., 2); height_mm broadcasts against (...). NaN for a pixel that no point before the camera falls on.
        """
        ray = self.lens.rays(pixels)
        z = np.asarray(self.plane_mm if height_mm is None else height_mm, dtype=np.float64)
        p = self.projection
        # (p0 - u p2) . (x, y, z, 1) = 0 and the same for v: two linear equations for x and y
        a, b = p[0, 0] - ray[..., 0] * p[2, 0], p[0, 1] - ray[..., 0] * p[2, 1]
        c, d = p[1, 0] - ray[..., 1] * p[2, 0], p[1, 1] - ray[..., 1] * p[2, 1]
        far = p[2, 2] * z + p[2, 3]
        e = ray[..., 0] * far - (p[0, 2] * z + p[0, 3])
        f = ray[..., 1] * far - (p[1, 2] * z + p[1, 3])
        with np.errstate(divide="ignore", invalid="ignore"):
            x, y = (d * e - b * f) / (a * d - b * c), (a * f - c * e) / (a * d - b * c)
            before = p[2, 0] * x + p[2, 1] * y + far > 0.0
        return np.where(before[..., None], np.stack([x, y], axis=-1), np.nan)

    def to_pixel(self, points_mm: ArrayLike, height_mm: ArrayLike | None = None) -> FloatArray:
        """Pixels (..., 2) on which cell points (..., 3) are seen; NaN for a point behind the camera.

        Points (..., 2) lie at `height_mm`, by default in the touched plane.
        """
        return _seen(self.points(points_mm, height_mm), self.projection, self.lens.parameters)

    def points(self, points_mm: ArrayLike, height_mm: ArrayLike | None = None) -> FloatArray:
        """Points (..., 3) from points (..., 3), or from (..., 2) and a height."""
        given = np.asarray(points_mm, dtype=np.float64)
        if given.shape[-1] == 3:
            return given
        z = self.plane_mm if height_mm is None else height_mm
        return np.concatenate([given, np.broadcast_to(np.asarray(z, np.float64), given.shape[:-1])[..., None]], axis=-1)

    def mm_per_pixel(self, points_mm: ArrayLike, height_mm: ArrayLike | None = None) -> FloatArray:
        """(...) the side of the square in the plane of that height with the area that a pixel covers there."""
        jacobian = self._pixel_per_mm(self.points(points_mm, height_mm))
        with np.errstate(divide="ignore"):
            return np.asarray(1.0 / np.sqrt(np.abs(np.linalg.det(jacobian))))

    def covariance_mm2(self, points_mm: ArrayLike, height_mm: ArrayLike | None = None) -> FloatArray:
        """(..., 2, 2) covariance of where the map puts the pixel of a point: by first order from the fit's own."""
        moved = self._moved(self.points(points_mm, height_mm))
        return np.asarray(moved @ np.swapaxes(moved, -1, -2))

    def sigma_mm(self, points_mm: ArrayLike, height_mm: ArrayLike | None = None) -> FloatArray:
        """(...) predicted standard deviation of one coordinate of the map at points (..., 2 or 3)."""
        return np.asarray(np.sqrt(np.trace(self.covariance_mm2(points_mm, height_mm), axis1=-2, axis2=-1) / 2.0))

    def yaw_sigma_rad(self, points_mm: ArrayLike, height_mm: ArrayLike | None = None) -> FloatArray:
        """(...) predicted standard deviation of the yaw of a line 20 mm long at points (..., 2 or 3).

        Root mean square over four directions, which is that over all: yaw errors have two lobes at the most.
        """
        points = self.points(points_mm, height_mm)
        variance = np.zeros(points.shape[:-1])
        for angle in np.pi / 4 * np.arange(4):
            x, y = np.cos(angle), np.sin(angle)
            end = 10.0 * np.array([x, y, 0.0])
            apart = self._moved(points + end) - self._moved(points - end)
            variance += (((x * apart[..., 1, :] - y * apart[..., 0, :]) / 20.0) ** 2).sum(axis=-1) / 4
        return np.sqrt(variance)

    def lens_known(self) -> "CameraMap":
        """The map as unsure as it would be if the lens file were exact: covariance given the lens."""
        if self.basis != "pose":
            return self
        lens, pose = slice(0, 9), slice(9, 15)
        c, rest = self.covariance, np.zeros((15, 15))
        values, axes, size = scaled_axes(c[lens, lens])
        cross = c[pose, lens] / size @ axes
        rest[pose, pose] = c[pose, pose] - cross / values @ cross.T
        return replace(self, covariance=rest)

    def shifted(self, change: FloatArray) -> "CameraMap":
        """The map with what was fitted changed by `change` (15,) or (21,), in the order of `covariance`."""
        lens = replace(self.lens, parameters=self.lens.parameters + change[:9])
        if self.basis != "pose":
            return replace(self, lens=lens, projection=self.projection + change[9:].reshape(3, 4))
        projection = rotation(change[9:12]) @ self.projection
        projection[:, 3] += change[12:]
        return replace(self, lens=lens, projection=projection)

    def _pixel_per_mm(self, points: FloatArray) -> FloatArray:
        """(..., 2, 2) slope of pixels over x and y, by central differences of a hundredth of a millimetre."""
        step = 0.01 * np.eye(3)[:2].reshape(2, *(1,) * (points.ndim - 1), 3)
        slope = (self.to_pixel(points + step) - self.to_pixel(points - step)) / 0.02
        return np.moveaxis(slope, 0, -1)

    def _moved(self, points: FloatArray) -> FloatArray:
        """(..., 2, m) where the pixel of each point would be put by the maps of `_deviations`, less the point."""
        lenses, projections = self._deviations
        many = (len(lenses), *(1,) * (points.ndim - 1))
        seen = _seen(points, projections.reshape(*many, 3, 4), lenses.reshape(*many, 9)) - self.to_pixel(points)
        return np.asarray(np.linalg.solve(self._pixel_per_mm(points), np.moveaxis(seen, 0, -1)), dtype=np.float64)

    @cached_property
    def _deviations(self) -> tuple[FloatArray, FloatArray]:
        """Lens parameters (m, 9) and projections (m, 3, 4) one standard deviation off along each principal axis."""
        values, axes, size = scaled_axes(self.covariance)
        changes = (np.sqrt(values) * axes).T * size
        maps = [self.shifted(change) for change in changes]
        return (np.array([one.lens.parameters for one in maps]).reshape(-1, 9),
                np.array([one.projection for one in maps]).reshape(-1, 3, 4))

    def document(self) -> dict[str, Any]:
        """The map as a JSON object, to be read by `load_camera`."""
        own = {
            "kind": "camera", "format": CAMERA_FORMAT, "basis": self.basis, "plane_mm": self.plane_mm,
            "projection": self.projection.tolist(), "covariance": self.covariance.tolist(), "freedom": self.freedom,
            "rms_mm": self.rms_mm, "leave_one_out_rms_mm": self.leave_one_out_rms_mm, "touches": self.touches,
            "touched_px": self.touched_px.tolist(),
        }  # fmt: skip
        return {**self.lens.document(), **own}


def _seen(points: FloatArray, projection: FloatArray, lens: FloatArray) -> FloatArray:
    """Pixels (..., 2) of points (..., 3) under projections (..., 3, 4) and lens parameters (..., 9)."""
    at = (projection[..., :3] @ points[..., None])[..., 0] + projection[..., 3]
    with np.errstate(divide="ignore", invalid="ignore"):
        ray = np.where(at[..., 2:] > 0.0, at[..., :2] / at[..., 2:], np.nan)
    return pixels_of(ray, lens)


def scaled_axes(covariance: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Principal axes of a covariance (q, q) scaled to unit deviations: variances (m,), axes (q, m), deviations (q,).

    covariance = diag(deviations) axes diag(variances) axes^T diag(deviations). Axes of no variance are left out; a
    number that was not fitted has the deviation 1, so that numbers of all sizes can stand side by side.
    """
    deviation = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    deviation = np.where(deviation > 0.0, deviation, 1.0)
    values, axes = np.linalg.eigh(covariance / np.outer(deviation, deviation))
    real = values > 1e-12
    return values[real], axes[:, real], deviation


def rotation(vector: FloatArray) -> FloatArray:
    """Rotation matrix (3, 3) about `vector` (3,) by its length in radians (Rodrigues)."""
    angle = float(np.linalg.norm(vector))
    x, y, z = vector
    cross = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    # sinc keeps its digits at angle 0
    return np.asarray(np.eye(3) + np.sinc(angle / np.pi) * cross
                      + 0.5 * np.sinc(angle / (2 * np.pi)) ** 2 * (cross @ cross))


def load_camera(path: str | Path) -> CameraMap:
    """Read a camera file. Raises InputFault naming file, key, fault and remedy."""
    file = JsonFile(path, "camera", CAMERA_FORMAT, _KEYS, _WRITER)
    basis = _basis(file)
    many = 15 if basis == "pose" else 21
    covariance = file.numbers("covariance", (many, many))
    if (np.diag(covariance) < 0).any() or not np.allclose(covariance, covariance.T):
        raise file.fault("covariance", "is no covariance")
    alone = file.values.get("leave_one_out_rms_mm") is None
    return CameraMap(
        basis=basis, lens=lens_of(file, covariance[:9, :9]),
        projection=file.numbers("projection", (3, 4)), plane_mm=file.number("plane_mm"), covariance=covariance,
        freedom=file.number("freedom"), rms_mm=file.number("rms_mm"),
        leave_one_out_rms_mm=None if alone else file.number("leave_one_out_rms_mm"),
        touches=int(file.number("touches")), touched_px=file.numbers("touched_px", (-1, 2)),
    )  # fmt: skip


def _basis(file: JsonFile) -> Basis:
    given = file.text("basis")
    for known in get_args(Basis):
        if given == known:
            return cast(Basis, known)
    raise file.fault("basis", f"{given!r} is none of {', '.join(get_args(Basis))}")
