"""Where on the belt something lies: patches of edges, told from the belt's own texture by their strongest gradient.

Edges rather than grey levels, so that uneven light, slow shadows and parts as bright as the belt do not matter.
"""

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.edges import EdgeMap

SEED_FACTOR = 2.5  # a thing's strongest gradient, in thresholds
LEAST_CELLS = 6


@dataclass(frozen=True)
class Blobs:
    """Patches of an image that are not plain belt, in cells of 4 x 4 pixels.

    label (h, w) int32: number of the patch, holes filled, 0 for belt.  box (n, 4): first column, first row, last
    column, last row of patch k + 1.  cells (n,): its size.  cut (n,): whether it reaches the border of the image.
    """

    label: NDArray[np.int32]
    depth: NDArray[np.float32]
    box: NDArray[np.int64]
    cells: NDArray[np.int64]
    cut: NDArray[np.bool_]


def blobs_of(edges: EdgeMap, close_cells: int = 2) -> Blobs:
    """The patches of an edge map; gaps of up to `close_cells` are bridged, scratches a cell wide are dropped."""
    marked = (edges.strength > edges.least).astype(np.uint8)
    crowd = cv2.boxFilter(marked, cv2.CV_16S, (3, 3), normalize=False)
    marked &= (crowd >= 4).astype(np.uint8)
    size = 2 * close_cells + 1
    closed = cv2.morphologyEx(marked, cv2.MORPH_CLOSE, cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (size, size)))
    outlines, _ = cv2.findContours(closed, cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_SIMPLE)
    rows, columns = closed.shape
    label = np.zeros(closed.shape, np.int32)
    box, cells, cut = [], [], []
    for outline in outlines:
        if len(outline) < 3:
            continue
        x, y, w, h = cv2.boundingRect(outline)
        inside = np.zeros((h, w), np.uint8)
        cv2.drawContours(inside, [outline], 0, 1, cv2.FILLED, offset=(-x, -y))
        seen = edges.strength[y : y + h, x : x + w][inside > 0]
        if len(seen) < LEAST_CELLS or seen.max() < SEED_FACTOR * edges.least:
            continue
        box.append((x, y, x + w - 1, y + h - 1))
        cells.append(len(seen))
        cut.append(x <= 1 or y <= 1 or x + w >= columns - 1 or y + h >= rows - 1)
        label[y : y + h, x : x + w][inside > 0] = len(box)
    depth = np.asarray(cv2.distanceTransform((label > 0).astype(np.uint8), cv2.DIST_L2, 3), dtype=np.float32)
    boxes = np.array(box, np.int64).reshape(-1, 4)
    return Blobs(label, depth, boxes, np.array(cells, np.int64), np.array(cut, np.bool_))
