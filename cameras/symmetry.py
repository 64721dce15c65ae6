"""What a part's symmetry tells: shadows left out of its outline, heights of its edges from one view, turns it shows.

An edge taken for lower than it is lands displaced away from the camera. Turned by a part's own symmetry, the displaced
edge misses its twin; the height at which it does not is the edge's.
"""

from typing import Any, Protocol

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

FloatArray = NDArray[np.float64]

PLAN_MM = 0.15
ROUND_TURNS = 24
ALIKE_MM = 0.35
MOST_TURNS = 12
ALIKE_SHARE, ALIKE_REACH = 0.24, 0.025  # copies that look alike are apart by less: of what any copies are, of the reach
ROUND_REACH = 0.043  # any copies of a circle are apart by less, of its reach
HEIGHT_STEPS = 25
SEEN_SIGMA_MM = 0.2  # light and chamfers shift edges by as much
PRIOR, PRIOR_SIGMA = 0.5, 0.3  # of the height of the top face
INNER_PRIOR = 0.85
VOTED_HEIGHTS = 7


class Frame(Protocol):
    """Pixels to the grip frame and back."""

    def from_pixels(self, pixels: FloatArray, height_mm: float) -> FloatArray: ...  # noqa: D102
    def to_pixels(self, points_mm: FloatArray, height_mm: float) -> FloatArray: ...  # noqa: D102
    def away(self) -> FloatArray: ...  # noqa: D102


def turned(points: FloatArray, angle: float) -> FloatArray:
    """Points (n, 2), or one (2,), turned about the origin."""
    cosine, sine = np.cos(angle), np.sin(angle)
    return np.asarray(points @ np.array([[cosine, sine], [-sine, cosine]]))


def voted_plan(
    lines: NDArray[np.uint8], corner: FloatArray, frame: Frame, top_mm: float, turns: int, least_px: float
) -> tuple[FloatArray, float]:
    """Polygon (k, 2) in the grip frame that the lines enclose where their turned copies agree; and its height.

    A shadow's edge is in a minority among the copies, and a gap in one copy is closed by another. Of all heights, and
    of how many copies have to agree, the polygon counts on whose rim most of them do; it encloses at least `least_px`
    pixels, so as to be no inner edge. The polygon is empty where nothing is enclosed.
    """
    j, i = np.nonzero(lines)
    if len(i) == 0:
        return np.zeros((0, 2)), 0.0
    reach = float(np.max(np.linalg.norm(frame.from_pixels(np.column_stack([i, j]) + corner, 0.0), axis=1))) + 1.0
    side = np.linspace(-reach, reach, min(int(2.0 * reach / PLAN_MM) + 1, 1200))
    step = side[1] - side[0]
    x, y = np.meshgrid(side, side)
    grid = np.column_stack([x.ravel(), y.ravel()])
    thick = cv2.dilate(lines, np.ones((3, 3), np.uint8)).astype(np.float32) / 255.0
    count = turns or ROUND_TURNS
    best, plan, height = 0.0, np.zeros((0, 2)), 0.0
    for h in np.linspace(0.0, top_mm, VOTED_HEIGHTS):
        at = (frame.to_pixels(grid, h) - corner).reshape(*x.shape, 2).astype(np.float32)
        one = cv2.remap(thick, at[..., 0], at[..., 1], cv2.INTER_LINEAR)
        pixels_mm2 = abs(area(at[[0, 0, -1, -1], [0, -1, -1, 0]])) / (side[-1] - side[0]) ** 2
        votes: NDArray[Any] = np.zeros_like(one)
        for k in range(count):
            middle = (len(side) - 1) / 2.0
            turn = cv2.getRotationMatrix2D((middle, middle), 360.0 * k / count, 1.0)
            votes += cv2.warpAffine(one, turn, (len(side), len(side)))
        for need in {2: (1.5,), 3: (2.4, 1.5)}.get(count, (0.75 * count, 0.55 * count, 0.4 * count, 0.25 * count)):
            shape = _enclosing((votes >= need).astype(np.uint8), step)
            if float(shape.sum()) * step * step * pixels_mm2 < least_px:
                continue
            worth = float(np.minimum(votes, count)[_rim(shape, step)].mean())
            if worth > best:
                outlines, _ = cv2.findContours(shape, cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_NONE)
                best, plan, height = worth, max(outlines, key=len)[:, 0] * step + side[0], float(h)
    return np.asarray(plan), height


def area(polygon: NDArray[Any]) -> float:
    """Area of a polygon (n, 2), positive where it runs counter-clockwise."""
    x, y = np.asarray(polygon, dtype=np.float64).T
    return 0.5 * float(np.sum(x * np.roll(y, -1) - y * np.roll(x, -1)))


def _enclosing(agreed: NDArray[Any], step: float) -> NDArray[Any]:
    """The largest thing that agreed lines enclose, less the lines' own width."""
    size = 2 * max(round(0.6 / step), 1) + 1
    disc = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (size, size))
    closed = cv2.morphologyEx(agreed, cv2.MORPH_CLOSE, disc)
    outlines, _ = cv2.findContours(closed, cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_NONE)
    shape: NDArray[Any] = np.zeros_like(agreed)
    cv2.drawContours(shape, outlines, -1, 1, cv2.FILLED)
    shape = cv2.morphologyEx(shape, cv2.MORPH_OPEN, cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (size + 4, size + 4)))
    count, label, stats, _ = cv2.connectedComponentsWithStats(shape)
    if count < 2:
        return np.zeros_like(agreed)
    return np.asarray(label == 1 + int(np.argmax(stats[1:, cv2.CC_STAT_AREA])), dtype=np.uint8)


def _rim(shape: NDArray[np.uint8], step: float) -> NDArray[np.bool_]:
    size = 2 * max(round(0.3 / step), 1) + 1
    return np.asarray(cv2.morphologyEx(shape, cv2.MORPH_GRADIENT, np.ones((size, size), np.uint8)) > 0)


def _misses(seen: FloatArray, turns: int) -> float:
    """Robust mean of squared distances of points from their turned copies, across the edge."""
    return float(np.mean(np.minimum(_apart(seen, turns), 1.5) ** 2))


def _apart(points: FloatArray, turns: int) -> FloatArray:
    """How far (copies, n) each point of a closed line's copies, turned about the origin, lies from that line."""
    tree, count, apart = cKDTree(points), turns or ROUND_TURNS, []
    for k in range(1, count):
        copy = turned(points, 2.0 * np.pi * k / count)
        near, at = (np.asarray(one) for one in tree.query(copy, k=2))
        apart.append(_to_line(copy, points[at[:, 0]], points[at[:, 1]], near[:, 0]))
    return np.array(apart)


def _to_line(points: FloatArray, first: FloatArray, second: FloatArray, apart: FloatArray) -> FloatArray:
    along = second - first
    length = np.linalg.norm(along, axis=1)
    away = points - first
    across = np.abs(along[:, 0] * away[:, 1] - along[:, 1] * away[:, 0]) / np.maximum(length, 1e-9)
    return np.where(length > 1e-9, np.minimum(across, apart), apart)


def wall_heights(
    pixels: FloatArray, frame: Frame, top_mm: float, turns: int
) -> tuple[tuple[float, float], float]:
    """Heights of the outline (pixels (n, 2)) where it faces the camera and where away, as it repeats; their sigma."""
    foot = frame.from_pixels(pixels, 0.0)
    along = np.roll(foot, -2, axis=0) - np.roll(foot, 2, axis=0)
    normal = np.column_stack([along[:, 1], -along[:, 0]])
    x, y = foot.T
    if np.sum(x * np.roll(y, -1) - y * np.roll(x, -1)) < 0.0:
        normal = -normal
    away = (normal @ frame.away() > 0.0)[:, None]
    steps = np.linspace(0.0, top_mm, HEIGHT_STEPS)
    levels = [frame.from_pixels(pixels, h) for h in steps]
    usual = PRIOR_SIGMA * top_mm

    def cost(low: int, high: int) -> float:
        known = np.sum((steps[[low, high]] - PRIOR * top_mm) ** 2) + (steps[low] - steps[high]) ** 2
        plan = np.where(away, levels[high], levels[low])[::2]
        return _misses(plan, turns) / SEEN_SIGMA_MM**2 + float(known) / usual**2

    low = high = int(np.argmin([cost(k, k) for k in range(len(steps))]))
    for _ in range(2):
        low = int(np.argmin([cost(k, high) for k in range(len(steps))]))
        high = int(np.argmin([cost(low, k) for k in range(len(steps))]))
    seen = SEEN_SIGMA_MM / max(float(np.linalg.norm(frame.away())), 1e-6)
    return (float(steps[low]), float(steps[high])), seen / float(np.hypot(1.0, seen / usual))


def edge_height(line: FloatArray, every: FloatArray, frame: Frame, top_mm: float, turns: int) -> tuple[float, float]:
    """Height, and its sigma, at which an inner line (rows u, v, ...) turned falls on lines of the same height."""
    heights = np.linspace(0.0, top_mm, HEIGHT_STEPS)
    count = turns or ROUND_TURNS
    cost = np.empty(len(heights))
    for k, h in enumerate(heights):
        tree = cKDTree(frame.from_pixels(every[:, :2], h))
        own = frame.from_pixels(line[:, :2], h)
        missed = np.concatenate([tree.query(turned(own, 2.0 * np.pi * m / count))[0] for m in range(1, count)])
        cost[k] = np.mean(np.minimum(missed, 1.0) ** 2)
    return _least(heights, cost, frame, len(line), top_mm)


def _least(heights: FloatArray, cost: FloatArray, frame: Frame, points: int, top_mm: float) -> tuple[float, float]:
    """Height of least cost; its sigma, drawn towards what is usual where the view is steep."""
    at = int(np.argmin(cost))
    height = heights[at]
    if 0 < at < len(heights) - 1:
        before, here, after = cost[at - 1 : at + 2]
        curve = before - 2.0 * here + after
        height += 0.5 * (before - after) / curve * (heights[1] - heights[0]) if curve > 0.0 else 0.0
    slope = float(np.linalg.norm(frame.away()))
    seen = SEEN_SIGMA_MM / max(slope, 1e-6)
    share = 1.0 / (1.0 + (seen / (PRIOR_SIGMA * top_mm)) ** 2)
    return share * float(height) + (1.0 - share) * INNER_PRIOR * top_mm, float(np.sqrt(share)) * seen


def off_centre(polygon: FloatArray, turns: int) -> FloatArray:
    """How far (2,) a polygon, which looks alike at so many turns about the origin, lies off it.

    Least squares on the distances from turned copies to the polygon's lines, nearest points matched anew each time.
    """
    normal = np.roll(polygon, -1, axis=0) - np.roll(polygon, 1, axis=0)
    normal = np.column_stack([normal[:, 1], -normal[:, 0]]) / np.maximum(np.linalg.norm(normal, axis=1), 1e-12)[:, None]
    centre, count = np.zeros(2), turns or ROUND_TURNS
    for within in (3.0, 2.0, 1.0, 0.7, 0.7):
        tree = cKDTree(polygon - centre)
        rows, right = [], []
        for k in range(1, count):
            angle = 2.0 * np.pi * k / count
            copy = turned(polygon - centre, angle)
            apart, at = (np.asarray(one) for one in tree.query(copy))
            near = apart < within * ALIKE_MM
            rows.append(normal[at[near]] @ (np.eye(2) - turned(np.eye(2), angle).T))
            right.append(np.sum(normal[at[near]] * ((polygon - centre)[at[near]] - copy[near]), axis=1))
        a, b = np.concatenate(rows), np.concatenate(right)
        if len(b) < 6:
            break
        centre = centre + np.linalg.lstsq(a, b, rcond=None)[0]
    return centre if float(np.linalg.norm(centre)) < 1.5 else np.zeros(2)


def repeated(line: FloatArray, every: FloatArray, frame: Frame, height: float, turns: int) -> NDArray[np.bool_]:
    """Which points of an inner line (n) have twins at most of the part's turns."""
    count = turns or ROUND_TURNS
    tree = cKDTree(frame.from_pixels(every[:, :2], height))
    own = frame.from_pixels(line[:, :2], height)
    missed = np.array([tree.query(turned(own, 2.0 * np.pi * m / count))[0] for m in range(1, count)])
    return np.asarray(np.mean(missed < ALIKE_MM, axis=0) >= 0.5)


def alike_under_turn(first: FloatArray, second: FloatArray, mirrored: bool = False) -> bool:
    """Whether one outline, turned suitably about its own centroid, covers the other to within 3 % of the radius."""
    a, b = first - first.mean(axis=0), second - second.mean(axis=0)
    tree = cKDTree(a)
    radius = float(np.max(np.linalg.norm(a, axis=1)))
    best = min(float(np.percentile(tree.query(turned(b, angle))[0], 90)) for angle in np.arange(0.0, 2 * np.pi, 0.02))
    return best < max(0.03 * radius, 0.3 if mirrored else 0.2)


def turns_seen(polygon: FloatArray) -> int:
    """How many yaws the outline alone, in its grip frame, looks alike at: 0 for a circle, 1 for none but itself.

    What half of it says counts, as shadows and light spoil some of many an outline: a lug or notch may escape it.
    """
    middle = polygon.mean(axis=0)
    reach = float(np.max(np.linalg.norm(polygon - middle, axis=1)))

    def apart(turns: int) -> FloatArray:
        centred = (polygon - start - off_centre(polygon - start, turns) for start in (middle, np.zeros(2)))
        return min((_apart(one, turns) for one in centred), key=np.median)

    any_turn = apart(0)
    circle = float(np.sqrt(np.mean(any_turn**2)))
    if circle < ALIKE_SHARE * ROUND_REACH * reach:
        return 0
    least = min(ALIKE_SHARE * float(np.median(any_turn)), ALIKE_REACH * reach)
    alike = [turns for turns in range(2, MOST_TURNS + 1) if np.median(apart(turns)) < least]
    return max(alike, default=0 if circle < ROUND_REACH * reach else 1)
