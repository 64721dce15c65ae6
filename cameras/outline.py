"""A lone part's outline in a taught image: where the part ends and its shadow, or the belt, begins."""

from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.symmetry import Frame, voted_plan

FloatArray = NDArray[np.float64]
Grey = NDArray[np.uint8]
Mask = NDArray[Any]  # uint8, as OpenCV gives it

NOISE_FACTOR = 3.0
LEAST_SLOPE = 2.0
LONGEST_BRIDGE_PX = 9
SHADOW_RATIO = 0.88
LEAST_VOTED, LEAST_OF_BLOB = 0.55, 0.2  # of what is enclosed less shadows, and of all that is no belt: a voted plan
LEAST_LEFT, LEAST_SHADOW = 0.5, 0.02  # of what the lines enclose
SOFTER = 0.75


def edge_lines(window: Grey, belt: NDArray[np.bool_]) -> Mask:
    """Thin lines (255) along the edges of a window that stand out of the texture of its belt (Canny 1986)."""
    dx, dy = _slopes(window)
    size = np.hypot(dx, dy)
    noise = float(np.median(size[belt])) if belt.any() else float(np.percentile(size, 20))
    least = max(NOISE_FACTOR * noise, LEAST_SLOPE)
    fixed = [np.clip(np.round(d * 32.0), -32767, 32767).astype(np.int16) for d in (dx, dy)]
    return np.asarray(cv2.Canny(fixed[0], fixed[1], 32.0 * least, 64.0 * least, L2gradient=True), dtype=np.uint8)


def _slopes(window: Grey) -> tuple[FloatArray, FloatArray]:
    smooth = cv2.GaussianBlur(window.astype(np.float64), (0, 0), 1.0)
    dx, dy = (cv2.Sobel(smooth, cv2.CV_64F, *order, scale=0.125) for order in ((1, 0), (0, 1)))
    return np.asarray(dx, dtype=np.float64), np.asarray(dy, dtype=np.float64)


def rough_outline(window: Grey, blob: Mask, corner: FloatArray, frame: Frame, top_mm: float, turns: int) -> FloatArray:
    """Closed chain (k, 2) of image pixels roughly along the part's outline; none, where nothing encloses an area.

    blob: the window's pixels that are not plain belt.  corner (2,): the window's first pixel.
    """
    lines = edge_lines(window, cv2.dilate(blob, np.ones((9, 9), np.uint8)) == 0)
    lines[cv2.dilate(blob, np.ones((5, 5), np.uint8)) == 0] = 0
    mask = _without_shadow(window, _enclosed(lines, blob), lines, blob)
    if turns not in (1, 2):  # two copies make no majority
        least = max(LEAST_VOTED * float(mask.sum()), LEAST_OF_BLOB * float(blob.sum()))
        plan, height = voted_plan(lines, corner, frame, top_mm, turns, least)
        if len(plan):
            return frame.to_pixels(plan, height)
    outlines, _ = cv2.findContours(mask, cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_NONE)
    if mask.sum() < 60 or not outlines:
        return np.zeros((0, 2))
    return np.asarray(max(outlines, key=len)[:, 0] + corner)


def _enclosed(lines: Mask, blob: Mask) -> Mask:
    """What the lines enclose, their gaps bridged no more than it takes to enclose half of the blob."""
    best = np.zeros_like(blob)
    for bridge in range(1, LONGEST_BRIDGE_PX):
        disc = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * bridge + 1, 2 * bridge + 1))
        wall = cv2.morphologyEx(lines, cv2.MORPH_CLOSE, disc)
        mask = largest(cv2.morphologyEx(filled(wall), cv2.MORPH_OPEN, np.ones((5, 5), np.uint8)))
        if mask.sum() > best.sum():
            best = mask
        if best.sum() > 0.5 * blob.sum():
            break
    return best


def filled(lines: Mask) -> Mask:
    """What lines (> 0) enclose (1), themselves included."""
    outlines, _ = cv2.findContours(lines, cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_NONE)
    mask = np.zeros_like(lines)
    cv2.drawContours(mask, outlines, -1, 1, cv2.FILLED)
    return mask


def largest(mask: Mask) -> Mask:
    """The largest connected piece of a mask."""
    count, label, stats, _ = cv2.connectedComponentsWithStats(mask)
    if count < 2:
        return mask
    return np.asarray(label == 1 + int(np.argmax(stats[1:, cv2.CC_STAT_AREA])), dtype=np.uint8)


def _without_shadow(window: Grey, mask: Mask, lines: Mask, blob: Mask) -> Mask:
    """The mask less its shadow: outer regions darker than the belt, with a softer edge to the belt than to the part."""
    ratio = _ratio(window, cv2.dilate(blob, np.ones((7, 7), np.uint8)) == 0)
    size = np.hypot(*_slopes(window))
    clear = ((cv2.distanceTransform((lines == 0).astype(np.uint8), cv2.DIST_L2, 5) > 1.5) & (mask > 0)).astype(np.uint8)
    count, seeds = cv2.connectedComponents(clear, connectivity=4)
    seeds = np.where(clear > 0, seeds + 1, 0).astype(np.int32)
    seeds[cv2.dilate(mask, np.ones((3, 3), np.uint8)) == 0] = 1
    level = np.clip(size * (255.0 / max(float(size.max()), 1.0)), 0, 255).astype(np.uint8)
    region = np.asarray(cv2.watershed(cv2.cvtColor(level, cv2.COLOR_GRAY2BGR), seeds), dtype=np.int32)
    border = _borders(region, size, count + 1)
    outside, whole = {1}, int(mask.sum())
    left = whole
    changed = True
    while changed:
        changed = False
        for k in range(2, count + 1):
            own = region == k
            if k in outside or not own.any() or float(np.median(ratio[own])) > SHADOW_RATIO:
                continue
            to_belt = [pair for other, pair in border[k].items() if other in outside]
            to_part = [pair for other, pair in border[k].items() if other not in outside]
            if not to_belt or not to_part or not LEAST_SHADOW * whole < own.sum() < left - LEAST_LEFT * whole:
                continue
            if _mean(to_belt) < SOFTER * _mean(to_part):
                outside.add(k)
                left -= int(own.sum())
                changed = True
    kept: Mask = np.isin(region, [k for k in range(2, count + 1) if k not in outside]).astype(np.uint8)
    kept = cv2.morphologyEx(kept, cv2.MORPH_CLOSE, np.ones((3, 3), np.uint8))
    return largest(cv2.morphologyEx(filled(kept), cv2.MORPH_OPEN, np.ones((3, 3), np.uint8)))


def _mean(pairs: list[tuple[float, int]]) -> float:
    return sum(total for total, _ in pairs) / sum(number for _, number in pairs)


def _borders(region: NDArray[np.int32], size: FloatArray, count: int) -> list[dict[int, tuple[float, int]]]:
    """For each region the sum and number of slopes along its border with each neighbour."""
    border: list[dict[int, tuple[float, int]]] = [{} for _ in range(count + 1)]
    rows, columns = region.shape
    for j, i in zip(*np.nonzero(region[1 : rows - 1, 1 : columns - 1] == -1), strict=True):
        near = np.unique(region[j : j + 3, i : i + 3])
        near = near[near > 0]
        for a in near:
            for b in near:
                if a != b:
                    total, number = border[a].get(int(b), (0.0, 0))
                    border[a][int(b)] = (total + float(size[j + 1, i + 1]), number + 1)
    return border


def _ratio(window: Grey, belt: NDArray[np.bool_]) -> FloatArray:
    """Grey levels over the belt's, the latter a plane through what is surely belt."""
    smooth = cv2.GaussianBlur(window, (0, 0), 1.0).astype(np.float64)
    j, i = np.nonzero(belt)
    y, x = np.mgrid[: smooth.shape[0], : smooth.shape[1]].astype(np.float64)
    if len(i) < 16:
        return np.ones(smooth.shape)
    fit = np.linalg.lstsq(np.column_stack([np.ones(len(i)), i, j]), smooth[j, i], rcond=None)[0]
    return np.asarray((smooth + 4.0) / (np.maximum(fit[0] + fit[1] * x + fit[2] * y, 1.0) + 4.0))
