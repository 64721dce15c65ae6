"""Fine images made coarser before parts are looked for.

Light and chamfers shift edges by tenths of a millimetre however fine the pixels are, and a blurred edge spreads over
more of them: what counts as an edge, and how far off it may lie, is said in pixels of the usual size.
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
WORTHWHILE = 0.8


@dataclass(frozen=True)
class Coarser:
    """A camera whose image is seen in `shape` (rows, columns). scale (2,): coarser pixels for each of its own, u, v."""

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
        """The image (rows, columns) in its coarser shape."""
        if grey.shape == self.shape:
            return grey
        found: NDArray[Any] = cv2.resize(grey, self.shape[::-1], interpolation=cv2.INTER_AREA)
        return np.asarray(found, dtype=np.uint8)


def coarser(camera: CameraMap, surface_mm: float, shape: tuple[int, int], area_mm2: float) -> Coarser:
    """The camera with pixels of the usual size, unless they are as coarse anyway or the smallest part needs finer ones.

    shape (rows, columns) of its image.  area_mm2: of the smallest part.
    """
    rows, columns = shape
    size_mm = pixel_mm(camera, surface_mm, shape)
    wanted = max(size_mm / USUAL_MM, LEAST_ACROSS_PX * size_mm / (2.0 * float(np.sqrt(area_mm2 / np.pi)) + 1e-9))
    if not wanted < WORTHWHILE:  # also where the camera does not see the surface
        return Coarser(camera, np.ones(2), shape)
    less = (max(round(rows * wanted), 32), max(round(columns * wanted), 32))
    return Coarser(camera, np.array([less[1] / columns, less[0] / rows]), less)


def pixel_mm(camera: CameraMap, surface_mm: float, shape: tuple[int, int]) -> float:
    """How large a pixel in the middle of the image (rows, columns) is on the surface; NaN where it is not seen."""
    middle = 0.5 * np.array([shape[1], shape[0]]) + np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]])
    at = camera.to_cell(middle, surface_mm)
    return float(np.sqrt(abs(np.linalg.det(at[1:] - at[0]))))
