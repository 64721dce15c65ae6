"""Where a part may lie: its taught edges turned in steps and slid over the coarse edge map of a patch.

A vote counts the taught edge points that meet an edge of their direction; a placement that can no longer reach the
threshold is given up (as in Barnea and Silverman, IEEE Trans. Computers C-21(2), 1972).
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

TURN_STEP_RAD = np.radians(6.0)
LEAST_MISSED = 0.3
MISSED_AT_FIRST = 2.5
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
    kept = np.empty((blocks.shape[0] * blocks.shape[1] * blocks.shape[2], 5))
    found = kept[: _peaks(blocks, kept)]
    return np.asarray(found[np.argsort(-found[:, 0], kind="stable")])


@njit("i8(f8[:,:,:,::1], f8[:,::1])", cache=True)
def _peaks(blocks, kept):  # type: ignore[no-untyped-def]
    rows, columns, bins, _ = blocks.shape
    count = 0
    for j in range(rows):
        for i in range(columns):
            for k in range(bins):
                score = blocks[j, i, k, 0]
                if score <= 0.0:
                    continue
                beaten = False
                for m in range(27):
                    dj, di, dk = m // 9 - 1, m // 3 % 3 - 1, m % 3 - 1
                    if m == 13 or not (0 <= j + dj < rows and 0 <= i + di < columns) or (dk != 0 and bins < 3):
                        continue
                    other = blocks[j + dj, i + di, (k + dk) % bins, 0]  # turns close on themselves
                    if other > score or (other == score and m < 13):
                        beaten = True
                        break
                if not beaten:
                    kept[count] = blocks[j, i, k]
                    count += 1
    return count


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


@njit("f8(u1[:,::1], u1[:,::1], i8[::1], i8[::1], u1[::1], i8, i8, b1)", cache=True, inline="always")
def _score(own, near, du, dv, mask, j, i, glance):  # type: ignore[no-untyped-def]
    """Score of one placement, 0 where too many points are missed; `glance` lets a few more go."""
    rows, columns = near.shape
    missed, exact, outside, n = 0, 0, 0, mask.shape[0]
    for k in range(n):
        r, c = j + dv[k], i + du[k]
        if r < 0 or c < 0 or r >= rows or c >= columns:
            outside += 1
        elif near[r, c] & mask[k] == 0:
            missed += 1
            if missed > LEAST_MISSED * k + MISSED_AT_FIRST:
                return 0.0
        elif own[r, c] & mask[k] != 0:
            exact += 1
    if missed > LEAST_MISSED * (n - outside) + (MISSED_AT_FIRST if glance else 0.0) or 2 * outside > n:
        return 0.0
    return 0.5 * (n - outside - missed + exact) / (n - outside)


@njit("b1(u1[::1], i8[::1], u1[::1], i8)", cache=True, inline="always")
def _worth_a_look(near, offset, mask, at):  # type: ignore[no-untyped-def]
    """As `_score` with `glance`, for a placement wholly inside the image: cells by one index."""
    missed = 0
    for k in range(mask.shape[0]):
        if near[at + offset[k]] & mask[k] == 0:
            missed += 1
            if missed > LEAST_MISSED * k + MISSED_AT_FIRST:
                return False
    return True


@njit("void(f8[::1], f8, i8, i8, f8, f8)", cache=True, inline="always")
def _noted(best, score, j, i, angle, step):  # type: ignore[no-untyped-def]
    """Take a placement for the best of its block, or, nearly as good, move the best to the middle of the plateau."""
    if score > best[0] - LEVEL and score <= best[0] + LEVEL and abs(angle - best[3]) < 1.5 * step + 1e-9:
        best[4] += 1.0
        best[0] = max(score, best[0])
        best[1] += (i - best[1]) / best[4]
        best[2] += (j - best[2]) / best[4]
        best[3] += (angle - best[3]) / best[4]
    elif score > best[0]:
        best[0], best[1], best[2], best[3], best[4] = score, i, j, angle, 1.0


@njit(
    "void(u1[:,::1], u1[:,::1], i4[:,::1], f4[:,::1], i8, f8[:,::1], f8[:,::1], f8[::1], f8, f8, i8, f8, i8[::1], "
    "f8[:,:,:,::1])",
    cache=True,
)
def placements(  # type: ignore[no-untyped-def]
    own, near, label, depth, patch, points, affine, anchor, deep, first, turns, step, box, blocks
):
    """Best placement in each block of cells over one patch, and in each bin of turns: blocks (rows, columns, bins, 5).

    Each: score (mean of the shares of points met within a cell and exactly; 0: none), column, row, turn in radians,
    and how many placements were nearly as good and were averaged.
    affine (2, 2): cells per millimetre.  anchor (2,): a point well inside the outline, which must lie on the patch, by
    its `depth` (cells to the nearest bare belt) at least `deep`.  box: first and last column and row of where a
    placement may reach; what lies outside the image counts neither way.  first, step: turns in radians.
    """
    rows, columns = near.shape
    n = points.shape[0]
    du, dv, mask, reach = np.empty(n, np.int64), np.empty(n, np.int64), np.empty(n, np.uint8), np.empty(4)
    offset, flat = np.empty(n, np.int64), near.reshape(rows * columns)
    blocks[:, :, :, 0] = 0.0
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
        for k in range(n):
            offset[k] = dv[k] * columns + du[k]
        for j in range(max(from_v, -av), min(to_v, rows - 1 - av) + 1, 2):
            for i in range(max(from_u, -au), min(to_u, columns - 1 - au) + 1, 2):
                if label[j + av, i + au] != patch or depth[j + av, i + au] < deep:
                    continue
                if -reach[0] < i - 1 and -reach[1] < j - 1 and i + reach[2] < columns - 2 and j + reach[3] < rows - 2:
                    if not _worth_a_look(flat, offset, mask, j * columns + i):
                        continue
                elif _score(own, near, du, dv, mask, j, i, True) == 0.0:
                    continue
                for dj in range(2):
                    for di in range(2):
                        score = _score(own, near, du, dv, mask, j + dj, i + di, False)
                        if score > 0.0:
                            bj = min(max((j + dj - box[1]) // BLOCK_CELLS + 8, 0), blocks.shape[0] - 1)
                            bi = min(max((i + di - box[0]) // BLOCK_CELLS + 8, 0), blocks.shape[1] - 1)
                            _noted(blocks[bj, bi, part], score, j + dj, i + di, angle, step)


def room_for(box: NDArray[np.int64], turns: int) -> FloatArray:
    """An array for the best placements over a patch's box: a part's grip point may lie some way outside it."""
    rows, columns = (int(box[3] - box[1]) // BLOCK_CELLS + 17, int(box[2] - box[0]) // BLOCK_CELLS + 17)
    return np.empty((rows, columns, min(turns, TURN_BINS), 5))
