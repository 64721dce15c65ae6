"""Teaching: from one image of a lone part, and the tool pose that grips it, to the part's outline and inner edges."""

from dataclasses import dataclass, replace
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.blobs import blobs_of
from cameras.chain import even, outward, snapped
from cameras.edges import MOST_SAMPLES, edge_along, edge_map, noise_of
from cameras.faults import InputFault
from cameras.model import MOST_CONTOURS, Contour, Model
from cameras.outline import rough_outline
from cameras.resized import pixel_mm, resized
from cameras.symmetry import alike_under_turn, area, edge_height, off_centre, repeated, turns_seen, wall_heights
from cameras.view import CameraMap

FloatArray = NDArray[np.float64]
Grey = NDArray[np.uint8]

SPACING_MM = 0.8
LEAST_INNER_MM = 4.0
LEAST_INNER_SLOPE, INNER_NOISE = 20.0, 14.0  # of a 3 x 3 Sobel filter; of the image's noise
MARGIN_PX = 14
PART_OF_BLOB = 0.6  # the rest is shadow
UNKNOWN_TOP, UNKNOWN_SIGMA = 0.65, 0.22  # of the height, where one view cannot tell it
UNKNOWN_INNER = 0.85


@dataclass(frozen=True)
class Taught:
    """What is said of a part when it is taught. pose (3,): x, y mm, yaw rad of the tool when the image was taken.

    turns: how many yaws grip alike, 0 for all.
    """

    part: str
    height_mm: float
    turns: int
    pose: tuple[float, float, float]


class GripFrame:
    """Pixels to the grip frame of the taught part, and back, at any height above the surface."""

    def __init__(self, camera: CameraMap, surface_mm: float, pose: tuple[float, float, float]) -> None:
        self.camera, self.surface_mm = camera, surface_mm
        self.origin = np.array(pose[:2])
        cosine, sine = np.cos(pose[2]), np.sin(pose[2])
        self.turn = np.array([[cosine, -sine], [sine, cosine]])

    def from_pixels(self, pixels: FloatArray, height_mm: float) -> FloatArray:
        """Pixels (n, 2) to the grip frame (n, 2)."""
        return np.asarray((self.camera.to_cell(pixels, self.surface_mm + height_mm) - self.origin) @ self.turn)

    def to_pixels(self, points_mm: FloatArray, height_mm: float) -> FloatArray:
        """Points of the grip frame (n, 2) to pixels (n, 2)."""
        xy = points_mm @ self.turn.T + self.origin
        return self.camera.to_pixel(np.column_stack([xy, np.full(len(xy), self.surface_mm + height_mm)]))

    def away(self) -> FloatArray:
        """How far (2,) a point moves in the grip frame, on the surface, for each millimetre that it is higher."""
        origin = np.zeros((1, 2))
        return np.asarray(self.from_pixels(self.to_pixels(origin, 1.0), 0.0)[0])


def teach(grey: Grey, camera: CameraMap, surface_mm: float, taught: Taught, file: str = "image") -> Model:
    """The model of the part that lies at the tool pose. Raises InputFault where there is none, or the border cuts it.

    grey (rows, columns).  surface_mm: height of what the part lies on.  file: named in faults.
    """
    blob = _window(grey, GripFrame(camera, surface_mm, taught.pose), taught, file)[2]
    area_mm2 = PART_OF_BLOB * float(blob.sum()) * pixel_mm(camera, surface_mm, grey.shape) ** 2
    usual = resized(camera, surface_mm, grey.shape, area_mm2)
    return _taught(usual.seen(grey), GripFrame(usual, surface_mm, taught.pose), taught, file)


def _taught(grey: Grey, frame: GripFrame, taught: Taught, file: str) -> Model:
    window, corner, blob = _window(grey, frame, taught, file)
    chain = rough_outline(window, blob, corner, frame, taught.height_mm, taught.turns)
    if len(chain) < 8:
        raise InputFault(file, "--tool", "no outline can be told from the belt",
                         "take a sharper image, or change the light")
    pixels, steps = snapped(grey, chain, taught.turns != 1)
    top = taught.height_mm
    lighter = float(np.median(steps)) < 0.0  # then a wall, in shade, is not seen as part of it
    heights, sigma = (UNKNOWN_TOP * top if lighter else 0.0, UNKNOWN_TOP * top), UNKNOWN_SIGMA * top
    if taught.turns != 1:
        heights, sigma = wall_heights(pixels, frame, top, taught.turns)
    outline, polygon = _outline(pixels, steps, frame, heights, sigma)
    inner = _inner(grey, polygon, frame, taught)
    shift = np.zeros(2)
    if taught.turns != 1:
        off = off_centre(polygon, taught.turns)
        polygon, outline = polygon - off, replace(outline, points_mm=outline.points_mm - off)
        inner = tuple(replace(one, points_mm=one.points_mm - off) for one in inner)
        shift = frame.turn @ off
    mirrored = taught.turns == 0 or alike_under_turn(polygon, polygon * np.array([1.0, -1.0]), mirrored=True)
    edge_mm = SPACING_MM * sum(len(one.steps) for one in inner)
    told = not mirrored or edge_mm > 0.15 * SPACING_MM * len(outline.steps)
    return Model(taught.part, taught.height_mm, taught.turns, turns_seen(polygon), told, mirrored, polygon,
                 outline, heights[0], sigma, frame.away(), float(taught.pose[2]), shift, inner)


def _window(grey: Grey, frame: GripFrame, taught: Taught, file: str) -> tuple[Grey, FloatArray, NDArray[np.uint8]]:
    found = blobs_of(edge_map(grey))
    at = frame.to_pixels(np.zeros((1, 2)), 0.5 * taught.height_mm)[0] / 4.0
    rows, columns = found.label.shape
    if not (0 <= at[0] < columns and 0 <= at[1] < rows):
        raise InputFault(file, "--tool", "the tool pose lies outside the image", "check pose, counts and touch counts")
    j, i = np.nonzero(found.label)
    apart = np.hypot(i - at[0], j - at[1]) if len(i) else np.array([np.inf])
    best = int(np.argmin(apart))
    if apart[best] > 6.0:
        raise InputFault(file, "--tool", "nothing lies at the tool pose", "check pose, counts and touch counts")
    patch = int(found.label[j[best], i[best]])
    if found.cut[patch - 1]:
        raise InputFault(file, "", "the border of the image cuts the part", "teach it wholly in view and alone")
    x0, y0, x1, y1 = (int(value) for value in found.box[patch - 1])
    left, top = max(4 * x0 - MARGIN_PX, 0), max(4 * y0 - MARGIN_PX, 0)
    right, bottom = min(4 * x1 + 4 + MARGIN_PX, grey.shape[1]), min(4 * y1 + 4 + MARGIN_PX, grey.shape[0])
    own = np.kron((found.label == patch).astype(np.uint8), np.ones((4, 4), np.uint8))
    blob = np.zeros(grey.shape, np.uint8)
    blob[: own.shape[0], : own.shape[1]] = own
    return (np.ascontiguousarray(grey[top:bottom, left:right]), np.array([left, top], float),
            np.ascontiguousarray(blob[top:bottom, left:right]))  # fmt: skip


def _outline(
    pixels: FloatArray, steps: FloatArray, frame: GripFrame, heights: tuple[float, float], sigma: float
) -> tuple[Contour, FloatArray]:
    """The outline's plan: seen points brought to the foot or the top of the wall, as they face the camera or not."""
    near, far = frame.from_pixels(pixels, heights[0]), frame.from_pixels(pixels, heights[1])
    plan = np.where((outward(near) @ frame.away() > 0.0)[:, None], far, near)
    polygon = even(plan, 0.4, 0.25)
    if area(polygon) < 0.0:
        polygon = polygon[::-1]
    points = even(polygon, SPACING_MM)
    normals = outward(points)
    nearest = np.argmin(np.linalg.norm(points[:, None] - plan[None], axis=2), axis=1)
    own = steps[nearest]
    usual = np.convolve(np.concatenate([own[-2:], own, own[:2]]), np.full(5, 0.2), "valid")
    return Contour(points, normals, usual, heights[1], sigma), polygon


def _inner(grey: Grey, polygon: FloatArray, frame: GripFrame, taught: Taught) -> tuple[Contour, ...]:
    """The longest edges inside the outline, each at the height that fits the part's symmetry, or the top face's."""
    top = taught.height_mm
    shape = frame.to_pixels(polygon, 0.5 * top)
    low, high = np.floor(shape.min(axis=0)).astype(int) - 4, np.ceil(shape.max(axis=0)).astype(int) + 5
    low = np.maximum(low, 0)
    window = np.ascontiguousarray(grey[low[1] : high[1], low[0] : high[0]])
    inside: NDArray[Any] = np.zeros(window.shape, np.uint8)
    cv2.fillPoly(inside, [np.round(shape - low).astype(np.int32)], 1)
    inside = cv2.erode(inside, np.ones((9, 9), np.uint8))
    smooth = cv2.GaussianBlur(window, (0, 0), 1.0)
    dx, dy = (cv2.Sobel(smooth, cv2.CV_16S, *order) for order in ((1, 0), (0, 1)))
    size = np.hypot(dx.astype(np.float64), dy)[inside > 0]
    if len(size) == 0:
        return ()
    strong = max(float(np.percentile(size, 85)), LEAST_INNER_SLOPE, INNER_NOISE * noise_of(grey))
    lines = np.where(inside > 0, cv2.Canny(dx, dy, 0.5 * strong, strong, L2gradient=True), 0).astype(np.uint8)
    count, label = cv2.connectedComponents(lines, connectivity=8)
    kept = []
    for k in range(1, count):
        j, i = np.nonzero(label == k)
        if len(i) >= 6:
            kept.append(_sharp(grey, np.column_stack([i, j]) + low, dx[j, i], dy[j, i]))
    return _levelled([one for one in kept if len(one) >= 4], frame, taught)


def _sharp(grey: Grey, pixels: NDArray[Any], dx: NDArray[Any], dy: NDArray[Any]) -> FloatArray:
    """Edge pixels at their sub-pixel places: rows u, v, nu, nv, step."""
    profile, found = np.empty(MOST_SAMPLES), np.empty(2)
    rows = []
    for (u, v), gu, gv in zip(pixels.astype(float), dx.astype(float), dy.astype(float), strict=True):
        length = np.hypot(gu, gv)
        if length == 0.0:
            continue
        nu, nv = gu / length, gv / length
        edge_along(grey, u, v, nu, nv, 1.5, 5.0, 0.0, 1.0, True, profile, found)
        if found[1] != 0.0:
            rows.append((u + found[0] * nu, v + found[0] * nv, nu, nv, found[1]))
    return np.array(rows).reshape(-1, 5)


def _levelled(lines: list[FloatArray], frame: GripFrame, taught: Taught) -> tuple[Contour, ...]:
    """Inner lines in the grip frame at their heights, thinned; for symmetric parts only what repeats."""
    top = taught.height_mm
    every = np.concatenate(lines) if lines else np.zeros((0, 5))
    found = []
    for line in lines:
        height, sigma = UNKNOWN_INNER * top, UNKNOWN_SIGMA * top
        if taught.turns != 1:
            height, sigma = edge_height(line, every, frame, top, taught.turns)
            line = line[repeated(line, every, frame, height, taught.turns)]
        found.append(_thinned(line, frame, height, sigma))
    found = [one for one in found if len(one.steps) * SPACING_MM >= LEAST_INNER_MM]
    found.sort(key=lambda one: -len(one.steps))
    return tuple(found[:MOST_CONTOURS])


def _thinned(line: FloatArray, frame: GripFrame, height: float, sigma: float) -> Contour:
    points = frame.from_pixels(line[:, :2], height) if len(line) else np.zeros((0, 2))
    ahead = frame.from_pixels(line[:, :2] + line[:, 2:4], height) if len(line) else points
    kept: list[int] = []
    for k in range(len(points)):
        if not kept or np.min(np.linalg.norm(points[kept] - points[k], axis=1)) >= SPACING_MM:
            kept.append(k)
    normal = ahead[kept] - points[kept]
    normal = normal / np.maximum(np.linalg.norm(normal, axis=1), 1e-12)[:, None]
    return Contour(points[kept], normal, line[kept, 4], height, sigma)
