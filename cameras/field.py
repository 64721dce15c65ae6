"""What a camera sees of the cell: the field at a height, how sure the map is over it, and what height does to it."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cameras.camera import CameraMap
from cameras.confidence import radius_95

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Field:
    """A net of places over what is seen at one height: rows from the image's top, columns from its left.

    pixels, points_mm (rows, columns, 2): in the image, and in the cell frame at height_mm.
    radius_95_mm (rows, columns): of the circle that holds the map's error, with 95 % confidence.
    """

    height_mm: float
    pixels: FloatArray
    points_mm: FloatArray
    radius_95_mm: FloatArray
    mm_per_pixel: FloatArray


def field_of(camera: CameraMap, height_mm: float, rows: int = 17, columns: int = 21) -> Field:
    """The field over the whole image; over the touched marks' bounding box where the image's size is not known."""
    if camera.image_size_px is None:
        least, most = camera.touched_px.min(axis=0), camera.touched_px.max(axis=0)
    else:
        least, most = np.zeros(2), np.array(camera.image_size_px, dtype=np.float64) - 1.0
    u, v = np.meshgrid(np.linspace(least[0], most[0], columns), np.linspace(least[1], most[1], rows))
    pixels = np.stack([u, v], axis=-1)
    points = camera.to_cell(pixels, height_mm)
    radius = radius_95(camera.covariance_mm2(points, height_mm), camera.freedom)
    return Field(height_mm, pixels, points, radius, camera.mm_per_pixel(points, height_mm))


def parallax_mm(camera: CameraMap, field: Field, above_mm: float) -> FloatArray:
    """(rows, columns) how far off a point `above_mm` above the field is put when its height is ignored."""
    higher = camera.to_cell(field.pixels, field.height_mm + above_mm)
    return np.asarray(np.linalg.norm(higher - field.points_mm, axis=-1))


def share_touched(camera: CameraMap, field: Field) -> float:
    """Share of the field's places that lie inside the hull of the touched marks in the image."""
    hull = camera.touched_px
    edge = np.roll(hull, -1, axis=0) - hull
    to = field.pixels[..., None, :] - hull
    side = edge[:, 0] * to[..., 1] - edge[:, 1] * to[..., 0]
    return float(((side >= 0).all(axis=-1) | (side <= 0).all(axis=-1)).mean())
