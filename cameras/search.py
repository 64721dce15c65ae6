"""Where a part may lie: its taught edges turned in steps and slid over the coarse edge map of a patch.

A vote counts the taught edge points that meet an edge of their direction; a placement that can no longer reach the
threshold is given up (as in Barnea and Silverman, IEEE Trans. Computers C-21(2), 1972).
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

TURN_STEP_RAD = np.radians(6.0)
MOST_HITS = 4096


def coarse_points(points: FloatArray, spacing_mm: float = 2.0) -> FloatArray:
    """Every few millimetres one of a template's points (n, 6), outline first, in a fixed scattered order."""
    kept: list[int] = []
    xy = points[:, :2]
    for k in range(len(points)):
        if not kept or np.min(np.linalg.norm(xy[kept] - xy[k], axis=1)) >= spacing_mm:
            kept.append(k)
    chosen = np.array(kept)
    order = np.argsort((np.arange(len(chosen)) * 0.6180339887) % 1.0, kind="stable")
    return np.ascontiguousarray(points[chosen[order]][:, :4])


@njit("i8(u1[:,::1], u1[:,::1], i4[:,::1], i8, f8[:,::1], f8[:,::1], f8[::1], i8, f8, i8[::1], f8, f8[:,::1])", cache=True)
def placements(own, near, label, patch, points, affine, anchor, turns, step, box, least, out):  # type: ignore[no-untyped-def]
    """Placements on one patch whose share of met points is `least` or more; out rows: score, column, row, turn rad.

    The score is the mean of the shares met within a cell and exactly.

    affine (2, 2): cells per millimetre.  anchor (2,): a point well inside the outline, which must lie on the patch.
    box: the patch's; a placement must keep within it, three cells of slack.  turns: how many steps of `step` radians.
    """
    rows, columns = near.shape
    n = points.shape[0]
    du, dv = np.empty(n, np.int64), np.empty(n, np.int64)
    mask = np.empty(n, np.uint8)
    allowed = int(n * (1.0 - least))
    count = 0
    slack = 3
    for turn in range(turns):
        cosine, sine = np.cos(turn * step), np.sin(turn * step)
        low_u, low_v, high_u, high_v = 1e9, 1e9, -1e9, -1e9
        for k in range(n):
            x, y = cosine * points[k, 0] - sine * points[k, 1], sine * points[k, 0] + cosine * points[k, 1]
            nx, ny = cosine * points[k, 2] - sine * points[k, 3], sine * points[k, 2] + cosine * points[k, 3]
            u, v = affine[0, 0] * x + affine[0, 1] * y, affine[1, 0] * x + affine[1, 1] * y
            du[k], dv[k] = int(np.round(u)), int(np.round(v))
            tu, tv = -affine[0, 0] * ny + affine[0, 1] * nx, -affine[1, 0] * ny + affine[1, 1] * nx
            sector = np.arctan2(-tu, tv) / (np.pi / 8)
            first = int(np.floor(sector))
            other = first + 1 if sector - first > 0.5 else first - 1
            mask[k] = np.uint8((1 << (first & 7)) | (1 << (other & 7)))
            low_u, high_u = min(low_u, u), max(high_u, u)
            low_v, high_v = min(low_v, v), max(high_v, v)
        au = int(np.round(affine[0, 0] * (cosine * anchor[0] - sine * anchor[1]) + affine[0, 1] * (sine * anchor[0] + cosine * anchor[1])))
        av = int(np.round(affine[1, 0] * (cosine * anchor[0] - sine * anchor[1]) + affine[1, 1] * (sine * anchor[0] + cosine * anchor[1])))
        from_u = max(int(np.ceil(box[0] - slack - low_u)), int(np.ceil(-low_u)))
        to_u = min(int(np.floor(box[2] + slack - high_u)), int(np.floor(columns - 1 - high_u)))
        from_v = max(int(np.ceil(box[1] - slack - low_v)), int(np.ceil(-low_v)))
        to_v = min(int(np.floor(box[3] + slack - high_v)), int(np.floor(rows - 1 - high_v)))
        for j in range(from_v, to_v + 1):
            for i in range(from_u, to_u + 1):
                aj, ai = j + av, i + au
                if aj < 0 or ai < 0 or aj >= rows or ai >= columns or label[aj, ai] != patch:
                    continue
                missed = 0
                exact = 0
                for k in range(n):
                    r, c = j + dv[k], i + du[k]
                    if r < 0 or c < 0 or r >= rows or c >= columns or near[r, c] & mask[k] == 0:
                        missed += 1
                        if missed > allowed:
                            break
                    elif own[r, c] & mask[k] != 0:
                        exact += 1
                if missed <= allowed and count < out.shape[0]:
                    out[count, 0] = 0.5 * (n - missed + exact) / n
                    out[count, 1], out[count, 2], out[count, 3] = i, j, turn * step
                    count += 1
    return count
