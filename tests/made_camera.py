"""Cameras and touches made up for tests, with the truth known."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cameras.camera import CameraMap, rotation
from cameras.lens import Lens

FloatArray = NDArray[np.float64]
SIZE = (1024, 800)
STRONG = np.array([700.0, 704.0, 520.0, 395.0, -0.28, 0.09, 6e-4, -4e-4, -0.012])
MILD = np.array([2600.0, 2604.0, 505.0, 410.0, -0.18, 0.05, 6e-4, -4e-4, 0.0])


def made_camera(
    parameters: FloatArray = MILD,
    tilt_deg: tuple[float, float] = (3.0, -2.0),
    above_mm: float = 760.0,
    plane_mm: float = -50.0,
) -> CameraMap:
    """A camera over (320, 40), looking down, `above_mm` above the plane."""
    turn = rotation(np.radians([*tilt_deg, 0.0])) @ np.diag([1.0, -1.0, -1.0]) @ rotation(np.array([0.0, 0.0, 0.3]))
    centre = np.array([320.0, 40.0, plane_mm + above_mm])
    projection = np.column_stack([turn, -turn @ centre])
    return CameraMap("pose", Lens(parameters, SIZE), projection, plane_mm, np.zeros((15, 15)), 0.0, 0.0)


@dataclass(frozen=True)
class MadeTouches:
    """Pixels (n, 2) and points (n, 3) as an integrator would have measured them."""

    pixels: FloatArray
    points: FloatArray


def made_touches(
    camera: CameraMap, n: int = 24, off_plane: int = 0, pixel_noise: float = 0.1, touch_noise: float = 0.05,
    seed: int = 0,
) -> MadeTouches:
    """n marks on the camera's plane, spread over the image, then some 20 mm above it; noise in px and mm."""
    rng = np.random.default_rng(seed)
    side = int(np.ceil(np.sqrt(n)))
    net = np.stack(np.meshgrid(np.linspace(0.08, 0.92, side), np.linspace(0.08, 0.92, side)), axis=-1).reshape(-1, 2)
    spread = np.concatenate([net[rng.permutation(len(net))[:n]], rng.uniform(0.15, 0.85, (off_plane, 2))])
    pixels = (spread + rng.uniform(-0.05, 0.05, spread.shape)) * SIZE
    heights = np.full(n + off_plane, camera.plane_mm) + 20.0 * (np.arange(n + off_plane) >= n)
    points = np.column_stack([camera.to_cell(pixels, heights), heights])
    points[:, :2] += rng.normal(0, touch_noise, (len(points), 2)) if touch_noise else 0.0
    return MadeTouches(pixels + (rng.normal(0, pixel_noise, pixels.shape) if pixel_noise else 0.0), points)


def image_net(rows: int = 9, columns: int = 11) -> FloatArray:
    """Pixels (rows, columns, 2) over the whole image."""
    return np.stack(np.meshgrid(np.linspace(0, SIZE[0] - 1, columns), np.linspace(0, SIZE[1] - 1, rows)), axis=-1)


def map_errors_mm(found: CameraMap, true: CameraMap, height_mm: float) -> FloatArray:
    """Distances (rows, columns) between two maps over the whole image at a height."""
    return np.linalg.norm(found.to_cell(image_net(), height_mm) - true.to_cell(image_net(), height_mm), axis=-1)
