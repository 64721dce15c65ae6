"""Things that cannot both be there: one lies in the other, and no frame shows both."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

OVERLAP = 0.5  # this share of the smaller one's area in the other: more than touching parts and loose outlines make
_GRID = (np.arange(16) + 0.5) / 16


def mere_views(place_mm: FloatArray, outlines_mm: Sequence[FloatArray], rows: Sequence[IntArray],
               strength: FloatArray) -> NDArray[np.bool_]:
    """(n,) whether each thing is but another view of a stronger one: a part mistaken in some of its frames.

    place_mm (n, 2); outlines_mm: n polygons (k, 2) about the place, (0, 2) where unknown; rows: n sets of frames that
    show it; strength (n,): the weaker of two goes.
    """
    gone = np.zeros(len(place_mm), dtype=bool)
    reach = np.array([float(np.hypot(*polygon.T).max(initial=0.0)) for polygon in outlines_mm])
    shaped = np.flatnonzero(reach > 0)
    if len(shaped) < 2:
        return gone
    pairs = cKDTree(place_mm[shaped]).query_pairs(2 * float(reach.max()), output_type="ndarray")
    first, second = shaped[pairs].T
    close = np.hypot(*(place_mm[first] - place_mm[second]).T) < reach[first] + reach[second]
    for a, b in sorted(zip(first[close].tolist(), second[close].tolist(), strict=True)):
        if gone[a] or gone[b] or np.isin(rows[a], rows[b]).any():
            continue
        if overlap(outlines_mm[a] + place_mm[a], outlines_mm[b] + place_mm[b]) > OVERLAP:
            gone[a if (strength[a], -a) < (strength[b], -b) else b] = True
    return gone


def overlap(a: FloatArray, b: FloatArray) -> float:
    """Share of the smaller of two polygons (k, 2) that lies in the other, to a few per cent."""
    return max(_share(a, b), _share(b, a))


def _share(polygon: FloatArray, other: FloatArray) -> float:
    low, high = polygon.min(axis=0), polygon.max(axis=0)
    grid = np.stack(np.meshgrid(*(low + np.multiply.outer(_GRID, high - low)).T), axis=-1).reshape(-1, 2)
    mine = grid[inside(polygon, grid)]
    return float(inside(other, mine).mean()) if len(mine) else 0.0


def inside(polygon: FloatArray, points: FloatArray) -> NDArray[np.bool_]:
    """Which points (n, 2) lie in a polygon (k, 2): an odd number of its edges is crossed on the way out along +x."""
    (x, y), (ax, ay), (bx, by) = points.T[:, :, None], polygon.T, np.roll(polygon, -1, axis=0).T
    spans = (ay > y) != (by > y)
    with np.errstate(divide="ignore", invalid="ignore"):
        crossing = ax + (y - ay) / (by - ay) * (bx - ax)
    return np.asarray((spans & (x < crossing)).sum(axis=1) % 2 == 1)
