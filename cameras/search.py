"""Where a part may lie: its taught edges turned in steps and slid over the coarse edge map of a patch.

A vote counts the taught edge points that meet an edge of their direction; a placement that can no longer reach the
threshold is given up (as in Barnea and Silverman, IEEE Trans. Computers C-21(2), 1972).
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

TURN_STEP_RAD = np.radians(6.0)
LEAST_MISSED = 0.35
GLANCE = 14  # points looked at first
GLANCE_LEAST = 7
LEVEL = 0.03  # scores this close make a plateau
BLOCK_CELLS = 3
TURN_BINS = 6


def coarse_points(points: FloatArray, spacing_mm: float = 2.0) -> FloatArray:
    """Every few millimetres one of a template's points (n, 6), in a fixed scattered order: x, y, nx, ny."""
    kept: list[int] = []
    xy = points[:, :2]
    for k in range(len(points)):
        if not kept or np.min(np.linalg.norm(xy[kept] - xy[k], axis=1)) >= spacing_mm:
            kept.append(k)
    chosen = np.array(kept)
    order = np.argsort((np.arange(len(chosen)) * 0.6180339887) % 1.0, kind="stable")
    return np.ascontiguousarray(points[chosen[order]][:, :4])


def peaks(blocks: FloatArray) -> FloatArray:
    """Of the best placements (rows, columns, bins, 5) of blocks those no neighbour beats: (n, 5), best first."""
    score = blocks[..., 0]
    wide = np.pad(score, 1, constant_values=-1.0)
    if score.shape[2] > 2:
        wide[..., 0], wide[..., -1] = wide[..., -2], wide[..., 1]  # turns close on themselves
    best = np.full_like(score, -1.0)
    for j in range(3):
        for i in range(3):
            for k in range(3):
                if (j, i, k) != (1, 1, 1):
                    part = wide[j : j + score.shape[0], i : i + score.shape[1], k : k + score.shape[2]]
                    earlier = (j, i, k) < (1, 1, 1)
                    np.maximum(best, part if earlier else part - 1e-9, out=best)
    found = blocks[(score > 0.0) & (score > best)]
    return np.asarray(found[np.argsort(-found[:, 0], kind="stable")])


@njit("void(f8[:,::1], f8[:,::1], f8, i8[::1], i8[::1], u1[::1], f8[::1])", cache=True)
def _turned(points, affine, angle, du, dv, mask, reach):  # type: ignore[no-untyped-def]
    """Offsets in cells and direction masks of points turned by an angle; reach: least and greatest offsets."""
    cosine, sine = np.cos(angle), np.sin(angle)
    reach[0], reach[1], reach[2], reach[3] = 1e9, 1e9, -1e9, -1e9
    for k in range(points.shape[0]):
        x, y = cosine * points[k, 0] - sine * points[k, 1], sine * points[k, 0] + cosine * points[k, 1]
        nx, ny = cosine * points[k, 2] - sine * points[k, 3], sine * points[k, 2] + cosine * points[k, 3]
        u, v = affine[0, 0] * x + affine[0, 1] * y, affine[1, 0] * x + affine[1, 1] * y
        du[k], dv[k] = int(np.round(u)), int(np.round(v))
        tu, tv = -affine[0, 0] * ny + affine[0, 1] * nx, -affine[1, 0] * ny + affine[1, 1] * nx
        sector = np.arctan2(-tu, tv) / (np.pi / 8)
        first = int(np.floor(sector))
        other = first + 1 if sector - first > 0.5 else first - 1
        mask[k] = np.uint8((1 << (first & 7)) | (1 << (other & 7)))
        reach[0], reach[1] = min(reach[0], u), min(reach[1], v)
        reach[2], reach[3] = max(reach[2], u), max(reach[3], v)


@njit("void(u1[:,::1], u1[:,::1], i4[:,::1], i8, f8[:,::1], f8[:,::1], f8[::1], f8, i8, f8, i8[::1], f8[:,:,:,::1])", cache=True)
def placements(own, near, label, patch, points, affine, anchor, first, turns, step, box, blocks):  # type: ignore[no-untyped-def]
    """Best placement in each block of cells over one patch, and in each bin of turns: blocks (rows, columns, bins, 5).

    Each: score (mean of the shares of points met within a cell and exactly; 0: none), column, row, turn in radians,
    and how many placements were nearly as good and were averaged.
    affine (2, 2): cells per millimetre.  anchor (2,): a point well inside the outline, which must lie on the patch.
    box: first and last column and row of where a placement may reach; what lies outside the image counts neither way.
    first, step: turns in radians.
    """
    rows, columns = near.shape
    n = points.shape[0]
    du, dv, mask, reach = np.empty(n, np.int64), np.empty(n, np.int64), np.empty(n, np.uint8), np.empty(4)
    blocks[:, :, :, 0] = 0.0
    allowed = int(n * LEAST_MISSED)
    for turn in range(turns):
        angle = first + turn * step
        _turned(points, affine, angle, du, dv, mask, reach)
        cosine, sine = np.cos(angle), np.sin(angle)
        ax, ay = cosine * anchor[0] - sine * anchor[1], sine * anchor[0] + cosine * anchor[1]
        au = int(np.round(affine[0, 0] * ax + affine[0, 1] * ay))
        av = int(np.round(affine[1, 0] * ax + affine[1, 1] * ay))
        from_u, from_v = int(np.ceil(box[0] - reach[0])), int(np.ceil(box[1] - reach[1]))
        to_u, to_v = int(np.floor(box[2] - reach[2])), int(np.floor(box[3] - reach[3]))
        part = int(turn * blocks.shape[2] / turns)
        for j in range(max(from_v, -av), min(to_v, rows - 1 - av) + 1):
            for i in range(max(from_u, -au), min(to_u, columns - 1 - au) + 1):
                if label[j + av, i + au] != patch:
                    continue
                missed, exact, outside = 0, 0, 0
                for k in range(n):
                    r, c = j + dv[k], i + du[k]
                    if r < 0 or c < 0 or r >= rows or c >= columns:
                        outside += 1
                    elif near[r, c] & mask[k] == 0:
                        missed += 1
                        if missed > allowed or (k < GLANCE and missed > GLANCE - GLANCE_LEAST):
                            missed = n
                            break
                    elif own[r, c] & mask[k] != 0:
                        exact += 1
                if missed > LEAST_MISSED * (n - outside) or 2 * outside > n:
                    continue
                score = 0.5 * (n - outside - missed + exact) / (n - outside)
                bj = min(max((j - box[1]) // BLOCK_CELLS + 8, 0), blocks.shape[0] - 1)
                bi = min(max((i - box[0]) // BLOCK_CELLS + 8, 0), blocks.shape[1] - 1)
                best = blocks[bj, bi, part]
                if score > best[0] + LEVEL:
                    best[0], best[1], best[2], best[3], best[4] = score, i, j, angle, 1.0
                elif score > best[0] - LEVEL and abs(angle - best[3]) < 1.5 * step + 1e-9:
                    # nearly as good: the placement moves to the middle of the plateau
                    best[4] += 1.0
                    best[0] = max(score, best[0])
                    best[1] += (i - best[1]) / best[4]
                    best[2] += (j - best[2]) / best[4]
                    best[3] += (angle - best[3]) / best[4]
                elif score > best[0]:
                    best[0], best[1], best[2], best[3], best[4] = score, i, j, angle, 1.0


def room_for(box: NDArray[np.int64], turns: int) -> FloatArray:
    """An array for the best placements over a patch's box: a part's grip point may lie some way outside it."""
    rows, columns = (int(box[3] - box[1]) // BLOCK_CELLS + 17, int(box[2] - box[0]) // BLOCK_CELLS + 17)
    return np.empty((rows, columns, min(turns, TURN_BINS), 5))
