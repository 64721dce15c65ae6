"""Drawn scenes: straight-walled parts on a belt under a pinhole camera, to teach from and to find in."""

from dataclasses import dataclass, field

import cv2
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
FINE = 4  # drawn so many times larger, then averaged down

PLATE = np.array([[-16.0, -7.0], [14.0, -7.0], [14.0, 1.0], [-4.0, 3.0], [-4.0, 13.0], [-16.0, 13.0]])
HOLE = (np.array([-10.0, 3.0]), 3.2)


def disc(radius_mm: float, corners: int = 90) -> FloatArray:
    """A circle as a polygon."""
    angle = np.linspace(0.0, 2.0 * np.pi, corners, endpoint=False)
    return radius_mm * np.column_stack([np.cos(angle), np.sin(angle)])


class Pinhole:
    """A camera above the belt: `to_cell` and `to_pixel` from a projection, without distortion."""

    def __init__(self, tilt_rad: float = 0.05, height_mm: float = 800.0) -> None:
        self.k = np.array([[2400.0, 0.0, 511.5], [0.0, 2400.0, 399.5], [0.0, 0.0, 1.0]])
        down = np.diag([1.0, -1.0, -1.0])
        self.r = cv2.Rodrigues(np.array([tilt_rad, -0.5 * tilt_rad, 0.2]))[0] @ down
        self.t = np.array([0.0, 0.0, height_mm])

    def to_pixel(self, points_mm: FloatArray) -> FloatArray:
        at = np.asarray(points_mm) @ self.r.T + self.t
        return at[..., :2] / at[..., 2:] * 2400.0 + self.k[:2, 2]

    def to_cell(self, pixels: FloatArray, height_mm: float) -> FloatArray:
        ray = np.concatenate([(np.asarray(pixels) - self.k[:2, 2]) / 2400.0, np.ones((*np.shape(pixels)[:-1], 1))], -1)
        ray, centre = ray @ self.r, -self.r.T @ self.t
        return centre[:2] + ray[..., :2] * ((height_mm - centre[2]) / ray[..., 2])[..., None]


@dataclass(frozen=True)
class Laid:
    """A part on the belt. pose: x, y mm, yaw rad; down: turned over about its x axis."""

    outline: FloatArray
    pose: tuple[float, float, float]
    height_mm: float = 5.0
    level: float = 170.0
    hole: tuple[FloatArray, float] | None = None
    down: bool = False

    def placed(self, points: FloatArray) -> FloatArray:
        """Points of the grip frame in the cell frame."""
        cosine, sine = np.cos(self.pose[2]), np.sin(self.pose[2])
        side = np.array([1.0, -1.0 if self.down else 1.0])
        return points * side @ np.array([[cosine, sine], [-sine, cosine]]) + self.pose[:2]


@dataclass
class Scene:
    """An image of parts on a belt at z = 0."""

    parts: list[Laid]
    belt: float = 60.0
    seed: int = 0
    camera: Pinhole = field(default_factory=Pinhole)

    def image(self) -> NDArray[np.uint8]:
        """The scene in 800 x 1024 grey levels: uneven light, texture, blur and noise."""
        rng = np.random.default_rng(self.seed)
        image = np.full((800 * FINE, 1024 * FINE), self.belt, np.float32)
        for part in self.parts:
            self._draw(image, part)
        image = cv2.resize(image, (1024, 800), interpolation=cv2.INTER_AREA)
        image *= np.linspace(0.85, 1.1, 1024, dtype=np.float32)[None]
        image += cv2.GaussianBlur(rng.normal(0.0, 12.0, image.shape).astype(np.float32), (0, 0), 3.0)
        image = cv2.GaussianBlur(image, (0, 0), 0.8) + rng.normal(0.0, 1.5, image.shape).astype(np.float32)
        return np.clip(np.round(image), 0, 255).astype(np.uint8)

    def _draw(self, image: NDArray[np.float32], part: Laid) -> None:
        foot, top = (self._pixels(part, part.outline, z) for z in (0.0, part.height_mm))
        wall = 0.6 * part.level
        for k in range(len(foot)):
            m = (k + 1) % len(foot)
            cv2.fillConvexPoly(image, np.array([foot[k], foot[m], top[m], top[k]]), wall, shift=8)
        cv2.fillPoly(image, [foot], wall, shift=8)
        cv2.fillPoly(image, [top], part.level, shift=8)
        if part.hole is not None:
            rim = self._pixels(part, part.hole[0] + disc(part.hole[1], 40), part.height_mm)
            cv2.fillPoly(image, [rim], 15.0, shift=8)

    def _pixels(self, part: Laid, outline: FloatArray, z: float) -> NDArray[np.int32]:
        at = self.camera.to_pixel(np.column_stack([part.placed(outline), np.full(len(outline), z)]))
        return np.round(((at + 0.5) * FINE - 0.5) * 256).astype(np.int32)
