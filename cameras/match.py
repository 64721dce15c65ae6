"""The pose of one part: its taught edges laid on the image and moved until they lie on the image's own edges.

Gauss-Newton on the distances along the edges' normals (Harris and Stennett, "RAPID", BMVC 1990; Drummond and Cipolla,
IEEE PAMI 24(7), 2002), with heights of the edges as further unknowns that the taught heights hold back: a camera that
looks askew sees a wrong height as a shift.
"""

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from cameras.edges import MOST_SAMPLES, OUTSIDE, edge_along
from cameras.model import Model
from cameras.symmetry import turned
from cameras.view import project, slopes

FloatArray = NDArray[np.float64]

HIT_PX = 1.6
AGAINST = 0.6  # worth of an edge that is lighter on the other side than when taught
INNER_AT_FIRST, INNER_AT_LAST = 0.3, 2.0  # weight of inner edges: while the outline is still sought, and heights are
# held; and then, as light from a side shifts a chamfered outline more than edges inside
INNER_SHARE, INNER_MOST, INNER_WORTH = 0.55, 0.85, 0.6  # more of the inner edges than this speaks for the side up
PIXEL_SIGMA = 0.25
DOWN_LIGHTER, DOWN_DARKER, DOWN_SIGMA = 0.92, 0.75, 0.12  # of the height: of the outline of a part turned over
DROP_SIGMA = 0.2  # of the height: how far down a wall is seen where it faces the camera
OWN_SHARE = 0.5  # of what is not known of a height: that in which it differs from the part's other heights
STILL_MM, STILL_RAD = 3e-3, 1e-4  # a step this small ends the fit
LEAST_SCATTER_PX = 0.12
CORRELATED = 9.0  # neighbouring edge points err together


@dataclass(frozen=True)
class Template:
    """A model ready to be laid on images, for one side.

    points (n, 6): x, y, nx, ny in the grip frame (mirrored for the side down), grey step, group (0 outline, k inner).
    heights (g,): of the outline where it faces the camera and where away, then of each inner contour.  sigmas (g,): by
    how much each may differ from the others; the first of them is that of the difference between the first two.
    sigma_mm: by how much all of them may be higher than they say, of which one view tells nothing.
    shifted (2,): how far, in the cell frame, a part would lie from where it was taught, for each millimetre likewise.
    away (2,): how far the taught points would lie towards the camera's foot for each millimetre that they are higher
    than `heights` says; zero where what is seen is not what was taught. They would lie closer together as well: how
    large a part looks tells nothing of its height.  outline (k, 2): polygon.
    """

    points: FloatArray
    heights: FloatArray
    sigmas: FloatArray
    sigma_mm: float
    shifted: FloatArray
    away: FloatArray
    outline: FloatArray
    round: bool


def template_of(model: Model, down: bool) -> Template:
    """A model's edges for one side; a part turned over shows the mirror image of its outline, and no inner edges."""
    groups = [model.outline] if down else [model.outline, *model.inner]
    points = np.concatenate([np.column_stack([one.points_mm, one.normals, one.steps, np.full(len(one.steps), float(k))])
                             for k, one in enumerate(groups)])
    top = model.height_mm
    if down:
        lighter = float(np.median(model.outline.steps)) < 0.0
        heights, sigmas = [(DOWN_LIGHTER if lighter else DOWN_DARKER) * top] * 2, [DROP_SIGMA * top, DOWN_SIGMA * top]
        points = points * np.array([1.0, -1.0, 1.0, -1.0, 1.0, 1.0])
    else:
        heights = [model.facing_height_mm, model.outline.height_mm] + [one.height_mm for one in model.inner]
        drop = DROP_SIGMA * top if model.turns == 1 else model.facing_sigma_mm
        sigmas = [drop, model.outline.height_sigma_mm] + [one.height_sigma_mm for one in model.inner]
    outline = model.outline_mm[::-1] * np.array([1.0, -1.0]) if down else model.outline_mm.copy()
    centred = down or model.turns != 1  # a symmetric part's points were centred on its grip point, whatever the height
    away = np.zeros(2) if centred else model.away.copy()
    shifted = np.zeros(2) if down or model.turns == 1 else turned(model.away, model.yaw_rad)
    own = np.maximum(OWN_SHARE * np.array(sigmas), 0.02)
    return Template(np.ascontiguousarray(points), np.array(heights), own, sigmas[1], shifted, away,
                    np.ascontiguousarray(outline), model.turns == 0)  # fmt: skip


_LAID = "u1[:,::1], f8[:,::1], f8[:,::1], f8[::1], f8[::1], f8[::1]"  # image, view, points, taught, pose, heights


@njit(f"f8({_LAID}, f8[::1], f8, f8, i8, f8, f8[:,::1], f8[:,::1])", cache=True)
def _step(  # type: ignore[no-untyped-def]
    image, view, points, taught, pose, heights, prior, reach, least, stride, inner, normal, out
):
    """Normal equations of one step. out (n, 4): residual px, step, hit, inside the image; returns the share hit."""
    size = 3 + heights.shape[0]
    normal[:, :] = 0.0
    cosine, sine = np.cos(pose[2]), np.sin(pose[2])
    profile = np.empty(MOST_SAMPLES)
    found = np.empty(2)
    local = np.empty((2, 3))
    row = np.zeros(size)
    slopes(view, pose[0], pose[1], 0.0, local)
    det = local[0, 0] * local[1, 1] - local[0, 1] * local[1, 0]
    away_x = (local[1, 1] * local[0, 2] - local[0, 1] * local[1, 2]) / det
    away_y = (-local[1, 0] * local[0, 2] + local[0, 0] * local[1, 2]) / det
    larger = 0.5 * (view[0, 11] * local[1, 1] + local[0, 0] * view[1, 12] - view[0, 12] * local[1, 0]
                    - local[0, 1] * view[1, 11]) / det  # fmt: skip
    usual = np.median(np.abs(points[:, 4])) + 1e-6
    hits, inside = 0, 0
    for k in range(0, points.shape[0], stride):
        nx, ny = cosine * points[k, 2] - sine * points[k, 3], sine * points[k, 2] + cosine * points[k, 3]
        group = int(points[k, 5])
        at = group + 1
        if group == 0:
            at = 1 if nx * away_x + ny * away_y > 0.0 else 0
        higher = heights[at] - prior[at]
        tx, ty = taught[0] + larger * points[k, 0], taught[1] + larger * points[k, 1]
        px, py = points[k, 0] - higher * tx, points[k, 1] - higher * ty
        rx, ry = cosine * px - sine * py, sine * px + cosine * py
        x, y, z = pose[0] + rx, pose[1] + ry, heights[at]
        u, v = project(view, x, y, z)
        slopes(view, x, y, z, local)
        tu, tv = -local[0, 0] * ny + local[0, 1] * nx, -local[1, 0] * ny + local[1, 1] * nx
        length = np.sqrt(tu * tu + tv * tv)
        nu, nv = tv / length, -tu / length
        if nu * (local[0, 0] * nx + local[0, 1] * ny) + nv * (local[1, 0] * nx + local[1, 1] * ny) < 0.0:
            nu, nv = -nu, -nv
        edge_along(image, u, v, nu, nv, reach, least, points[k, 4], AGAINST, stride == 1, profile, found)
        out[k, 0], out[k, 1] = found[0], found[1]
        out[k, 2], out[k, 3] = 0.0, 0.0 if found[0] == OUTSIDE else 1.0
        inside += int(out[k, 3])
        if found[1] == 0.0:
            continue
        r = found[0]
        scale = max(reach * 0.4, 0.6)
        w = (r / scale) ** 2
        w = 1.0 / ((1.0 + w) * (1.0 + w))
        w *= min(1.0, np.sqrt(abs(found[1] * points[k, 4])) / usual)
        if group > 0:
            w *= inner
        if abs(r) <= HIT_PX:
            out[k, 2] = 1.0
            hits += 1
        jx, jy = nu * local[0, 0] + nv * local[1, 0], nu * local[0, 1] + nv * local[1, 1]
        row[0], row[1], row[2] = jx, jy, -jx * ry + jy * rx
        jz = nu * local[0, 2] + nv * local[1, 2] - jx * (cosine * tx - sine * ty) - jy * (sine * tx + cosine * ty)
        for a in range(4):
            ia = a if a < 3 else 3 + at
            ja = row[a] if a < 3 else jz
            for b in range(4):
                ib = b if b < 3 else 3 + at
                jb = row[b] if b < 3 else jz
                normal[ia, ib] += w * ja * jb
            normal[ia, size] += w * ja * r
    return hits / inside if 2 * inside * stride > points.shape[0] else -1.0


@njit("void(f8[:,::1], f8[::1], f8[::1], f8[::1], f8, b1, f8[::1], f8[:,::1])", cache=True)
def _solve(normal, prior, sigmas, heights, unit, is_round, moved, cov):  # type: ignore[no-untyped-def]
    """Solve the normal equations with the heights held to their priors; `moved` is the step, `cov` the inverse."""
    size = 3 + heights.shape[0]
    matrix = normal[:, :size].copy()
    right = normal[:, size].copy()
    # of the first two heights the second is held, and how far the first lies below it
    top = unit / (sigmas[1] * sigmas[1])
    drop = unit / (sigmas[0] * sigmas[0])
    off_drop = (prior[1] - prior[0]) - (heights[1] - heights[0])
    right[3] -= drop * off_drop
    right[4] += drop * off_drop + top * (prior[1] - heights[1])
    matrix[3, 3] += drop
    matrix[4, 4] += drop + top
    matrix[3, 4] -= drop
    matrix[4, 3] -= drop
    for k in range(2, heights.shape[0]):
        hold = unit / (sigmas[k] * sigmas[k])
        matrix[3 + k, 3 + k] += hold
        right[3 + k] += hold * (prior[k] - heights[k])
    for k in range(3):
        matrix[k, k] += 1e-3
    if is_round:
        matrix[2, :] = 0.0
        matrix[:, 2] = 0.0
        matrix[2, 2] = 1.0
        right[2] = 0.0
    cov[:, :] = np.linalg.inv(matrix)
    moved[:] = cov @ right


@njit(f"f8({_LAID}, f8[::1], f8[::1], f8, f8, f8, i8, i8, f8, f8, b1, f8[:,::1], f8[:,::1])", cache=True)
def settle(  # type: ignore[no-untyped-def]
    image, view, points, taught, pose, heights, prior, sigmas, reach, last_reach, least, stride, steps, inner, unit,
    is_round, cov, out
):
    """Gauss-Newton steps in place on `pose` (x, y from the place, yaw) and `heights`; the share of points met last.

    The reach shrinks evenly from `reach` to `last_reach`. cov: inverse of the last normal equations.
    """
    size = 3 + heights.shape[0]
    normal = np.empty((size, size + 1))
    moved = np.empty(size)
    for k in range(steps):
        now = reach + (last_reach - reach) * k / max(steps - 1, 1)
        _step(image, view, points, taught, pose, heights, prior, now, least, stride, inner, normal, out)
        _solve(normal, prior, sigmas, heights, unit, is_round, moved, cov)
        far = np.hypot(moved[0], moved[1])
        if not far < 4.0 or not abs(moved[2]) < 0.5:
            return -1.0
        pose += moved[:3]
        if reach < 5.0:
            heights += moved[3:]
        if k > 0 and far < STILL_MM and abs(moved[2]) < STILL_RAD:
            break
    return _step(image, view, points, taught, pose, heights, prior, last_reach, least, stride, inner, normal, out)


@njit("void(f8[:,::1], f8[:,::1], f8[::1], f8, f8[:,::1])", cache=True)
def outline_pixels(view, outline, pose, height, out):  # type: ignore[no-untyped-def]
    """Pixels (k, 2) of an outline at a pose and height."""
    cosine, sine = np.cos(pose[2]), np.sin(pose[2])
    for k in range(outline.shape[0]):
        x, y = outline[k, 0], outline[k, 1]
        u, v = project(view, pose[0] + cosine * x - sine * y, pose[1] + sine * x + cosine * y, height)
        out[k, 0], out[k, 1] = u, v


@dataclass(frozen=True)
class Fit:
    """A template laid on an image. pose (3,): x, y mm from the place, yaw rad.

    lean_mm (2,): how far x, y would move, were the part's edges one standard deviation higher than its template says.
    share: of the points, or of the outline's alone, how many met an edge.  inner_share: of those inside; 1 without any.
    worth: by which rivals are ranked.  polygon_px (k, 2): the outline in the image.
    """

    pose: FloatArray
    heights: FloatArray
    sigma_mm: float
    sigma_rad: float
    lean_mm: FloatArray
    share: float
    inner_share: float
    worth: float
    polygon_px: FloatArray


def fit_pose(image: NDArray[np.uint8], view: FloatArray, template: Template, start: tuple[float, float, float],
             least: float, promising: float) -> Fit | None:  # fmt: skip
    """The pose of a template from a start some pixels off; None where it runs away or does not soon look promising."""
    pose, heights = np.array(start, dtype=np.float64), template.heights.copy()
    size = 3 + len(heights)
    cov, out = np.empty((size, size)), np.zeros((len(template.points), 4))
    unit = CORRELATED * PIXEL_SIGMA**2

    def settled(reach: float, last: float, stride: int, steps: int, inner: float) -> float:
        return float(settle(image, view, template.points, template.away, pose, heights, template.heights,
                            template.sigmas, reach, last, least, stride, steps, inner, unit, template.round, cov, out))

    if settled(9.0, 4.0, 3, 6, INNER_AT_FIRST) < promising:
        return None
    settled(3.5, 2.5, 1, 2, INNER_AT_LAST)
    unit = CORRELATED * _scatter(out) ** 2
    if settled(2.5, 2.5, 1, 3, INNER_AT_LAST) < 0.0 or np.hypot(pose[0] - start[0], pose[1] - start[1]) > 6.0:
        return None
    outline = template.points[:, 5] == 0.0
    seen = out[:, 3] > 0.0
    outline_share = float(np.sum(out[outline, 2]) / max(np.sum(seen & outline), 1))
    inner_share = float(np.mean(out[seen & ~outline, 2])) if np.any(seen & ~outline) else 1.0
    share = max(outline_share, float(np.mean(out[seen, 2])))
    worth = outline_share + (0.0 if outline.all() else INNER_WORTH * (min(inner_share, INNER_MOST) - INNER_SHARE))
    polygon = np.empty_like(template.outline)
    outline_pixels(view, template.outline, pose, 0.5 * (heights[0] + heights[1]), polygon)
    lean = template.sigma_mm * (cov[:2, 4:] @ (unit / template.sigmas[1:] ** 2) + template.shifted)
    sigma_mm = np.sqrt(0.5 * (unit * np.trace(cov[:2, :2]) + lean @ lean))
    sigma_rad = np.sqrt(unit * cov[2, 2])
    turn_sigma = np.pi if template.round else float(min(sigma_rad, np.pi))
    return Fit(pose, heights, float(sigma_mm), turn_sigma, lean, share, inner_share, worth, polygon)


def _scatter(out: FloatArray) -> float:
    """Standard deviation, px, of the distances between taught and met edges, outliers apart."""
    met = np.abs(out[out[:, 1] != 0.0, 0])
    return float(np.clip(1.4826 * np.median(met), LEAST_SCATTER_PX, 1.5)) if len(met) else 1.5
