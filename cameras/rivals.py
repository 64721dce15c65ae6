"""Rivals: of all placements in an image, which are the parts that lie there."""

from collections.abc import Sequence
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.blobs import Blobs
from cameras.edges import CELL_PX

FloatArray = NDArray[np.float64]

OVERLAP = 0.2  # of a placement's cells may be another's
NEARLY_AS_GOOD = 0.2  # worth less
MORE, INSIDE, ON_PATCH = 1.1, 0.8, 0.9  # shares of cells, for a rival that explains more


@dataclass(frozen=True)
class _Cover:
    """Cells that a placement covers: own (rows, columns) of those at `at`."""

    at: tuple[slice, slice]
    own: NDArray[np.bool_]
    cells: int

    def free(self, taken: NDArray[np.int16]) -> bool:
        """Whether few enough of them are taken."""
        return int(np.count_nonzero(taken[self.at][self.own])) <= OVERLAP * self.cells


def best(blobs: Blobs, placed: Sequence[tuple[float, FloatArray]]) -> list[int]:
    """Which placements, each with its worth and its outline in pixels (k, 2), are kept: those of most worth.

    Left out are those that overlap a better one; nor is one kept that leaves some of its patch unexplained, where a
    rival nearly as good explains it and fits in.
    """
    order = sorted(range(len(placed)), key=lambda k: -placed[k][0])
    worth = [placed[k][0] for k in order]
    covers = [_cover(placed[k][1], blobs.label.shape) for k in order]
    taken, kept = np.zeros(blobs.label.shape, np.int16), list[int]()
    for k, cover in enumerate(covers):
        if cover.free(taken):
            taken[cover.at] += cover.own
            kept.append(k)
    for place, k in enumerate(kept):
        taken[covers[k].at] -= covers[k].own
        kept[place] = next((rival for rival in range(k + 1, len(order))
                            if worth[rival] >= worth[k] - NEARLY_AS_GOOD
                            and _explains_more(covers[rival], covers[k], blobs) and covers[rival].free(taken)), k)
        taken[covers[kept[place]].at] += covers[kept[place]].own
    return [order[k] for k in kept]


def _cover(polygon_px: FloatArray, shape: tuple[int, int]) -> _Cover:
    polygon = np.round((polygon_px - 1.5) / CELL_PX).astype(np.int32)
    low = np.clip(polygon.min(axis=0), 0, [shape[1] - 1, shape[0] - 1])
    high = np.clip(polygon.max(axis=0), low, [shape[1] - 1, shape[0] - 1]) + 1
    own = np.zeros((int(high[1] - low[1]), int(high[0] - low[0])), np.uint8)
    cv2.fillPoly(own, [polygon - low.astype(np.int32)], 1)
    return _Cover((slice(low[1], high[1]), slice(low[0], high[0])), own > 0, int(own.sum()))


def _explains_more(rival: _Cover, one: _Cover, blobs: Blobs) -> bool:
    """Whether a rival holds nearly all that a placement does, and more of the patch, and hardly any bare belt."""
    rows, columns = (slice(max(a.start, b.start), min(a.stop, b.stop)) for a, b in zip(rival.at, one.at, strict=True))
    if rows.start >= rows.stop or columns.start >= columns.stop:
        return False
    shared = np.logical_and(*(cover.own[rows.start - cover.at[0].start : rows.stop - cover.at[0].start,
                                        columns.start - cover.at[1].start : columns.stop - cover.at[1].start]
                              for cover in (rival, one)))  # fmt: skip
    on_patch = int(np.count_nonzero(blobs.label[rival.at][rival.own]))
    return bool(np.count_nonzero(shared) > INSIDE * one.cells and on_patch > MORE * one.cells
                and on_patch > ON_PATCH * rival.cells)  # fmt: skip
