"""Images brought to pixels of the usual size before parts are looked for.

Light and chamfers shift edges by tenths of a millimetre however fine the pixels are, and a blurred edge spreads over
more of them, over fewer where they are coarse: what counts as an edge, and how far off it may lie, is said in pixels.
"""

from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.view import CameraMap

FloatArray = NDArray[np.float64]

USUAL_MM = 0.3  # a pixel
LEAST_ACROSS_PX = 80.0  # the smallest part, as a disc of its area
COARSER, FINER, MOST_FINER = 0.8, 1.25, 2.0  # changes worth the resampling, and the largest
MOST_PIXELS = 4e6  # of an image made finer


@dataclass(frozen=True)
class Resized:
    """A camera whose image is seen in `shape` (rows, columns). scale (2,): pixels for each of its own, u, v."""

    camera: CameraMap
    scale: FloatArray
    shape: tuple[int, int]

    def to_cell(self, pixels: FloatArray, height_mm: float) -> FloatArray:
        """See CameraMap."""
        return self.camera.to_cell((np.asarray(pixels) + 0.5) / self.scale - 0.5, height_mm)

    def to_pixel(self, points_mm: FloatArray) -> FloatArray:
        """See CameraMap."""
        return (self.camera.to_pixel(points_mm) + 0.5) * self.scale - 0.5

    def seen(self, grey: NDArray[np.uint8]) -> NDArray[np.uint8]:
        """The camera's image (rows, columns) in that shape."""
        if grey.shape == self.shape:
            return grey
        way = cv2.INTER_AREA if self.shape[0] < grey.shape[0] else cv2.INTER_CUBIC
        found: NDArray[Any] = cv2.resize(grey, self.shape[::-1], interpolation=way)
        return np.asarray(found, dtype=np.uint8)


def resized(camera: CameraMap, surface_mm: float, shape: tuple[int, int], area_mm2: float) -> Resized:
    """The camera with pixels of about the usual size; not made coarser than the smallest part allows.

    shape (rows, columns) of its image.  area_mm2: of the smallest part.
    """
    rows, columns = shape
    size_mm = pixel_mm(camera, surface_mm, shape)
    wanted = size_mm / USUAL_MM
    if wanted < 1.0:
        across_px = 2.0 * float(np.sqrt(area_mm2 / np.pi)) / size_mm
        wanted = min(max(wanted, LEAST_ACROSS_PX / max(across_px, 1e-9)), 1.0)
    else:
        wanted = min(wanted, MOST_FINER, max(float(np.sqrt(MOST_PIXELS / (rows * columns))), 1.0))
    if not (wanted < COARSER or wanted > FINER):  # also where the camera does not see the surface
        return Resized(camera, np.ones(2), shape)
    made = (max(round(rows * wanted), 32), max(round(columns * wanted), 32))
    return Resized(camera, np.array([made[1] / columns, made[0] / rows]), made)


def pixel_mm(camera: CameraMap, surface_mm: float, shape: tuple[int, int]) -> float:
    """How large a pixel in the middle of the image (rows, columns) is on the surface; NaN where it is not seen."""
    middle = 0.5 * np.array([shape[1], shape[0]]) + np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]])
    at = camera.to_cell(middle, surface_mm)
    return float(np.sqrt(abs(np.linalg.det(at[1:] - at[0]))))
