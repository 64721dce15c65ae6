"""Plane shapes and the room between them: points, segments and simple polygons, each with a rounding radius.

A disc is a point with a radius, a capsule a segment with one. The gap between two shapes is the distance between
their polygons less both radii; where the polygons overlap it is minus the depth of the boundary point of either that
lies deepest inside the other, less both radii: roughly how far they must move apart.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Number = TypeVar("Number", np.float64, np.int64)

DEPTH_STEP_MM = 0.05  # overlaps are found to this depth


# numba signatures of what a kernel only reads
POINTS = "Array(float64, 2, 'C', readonly=True)"
VALUES = "Array(float64, 1, 'C', readonly=True)"
INDICES = "Array(int64, 1, 'C', readonly=True)"


@dataclass(frozen=True, eq=False)
class Shapes:
    """k shapes in a frame of their own: jaws in the tool frame, outlines in the grip frame."""

    points: Floats  # (m, 2) mm: the corners of one after the other
    starts: Ints  # (k + 1,) where each one's corners start
    radius: Floats  # (k,) mm

    @classmethod
    def of(cls, outlines: Iterable[ArrayLike]) -> "Shapes":
        """From polygons (n, 2), and radii of discs about the frame's origin, mm."""
        corners, radius = [np.empty((0, 2))], []
        for outline in outlines:
            given = np.asarray(outline, np.float64)
            corners.append(given if given.ndim == 2 else np.zeros((1, 2)))
            radius.append(float(given) if given.ndim == 0 else 0.0)
        starts = np.cumsum([len(part) for part in corners])
        return cls(_fixed(np.concatenate(corners)), _fixed(starts.astype(np.int64)), _fixed(np.array(radius)))

    def __len__(self) -> int:
        return len(self.radius)

    @property
    def reach(self) -> Floats:
        """(k,) mm from the frame's origin to the farthest point of each."""
        far = np.hypot(self.points[:, 0], self.points[:, 1])
        return np.maximum.reduceat(far, self.starts[:-1]) + self.radius if len(self) else np.empty(0)

    def turned_over(self) -> "Shapes":
        """The same shapes turned over about the frame's x axis, as parts lie on their wrong side."""
        return Shapes(_fixed(self.points * (1.0, -1.0)), self.starts, self.radius)


def gaps(
    jaws: Shapes, tips: ArrayLike, outlines: Shapes, kinds: ArrayLike, poses: ArrayLike, near_mm: float = 10.0
) -> tuple[Floats, Ints]:
    """Room (g, p) in mm between the jaws of each grasp and each thing that lies there, and the nearest jaw (g, p).

    tips: (g, 3) x, y mm, yaw rad of the grasps; the thing at poses (p, 3) has outline number kinds (p,). Negative:
    they overlap by as much. Gaps above `near_mm` may be given too small, by the circles about the shapes. Without
    jaws the room is infinite. Raises IndexError for a kind without an outline.
    """
    of_kind = np.ascontiguousarray(kinds, np.int64).reshape(-1)
    if of_kind.size and not 0 <= of_kind.min() <= of_kind.max() < len(outlines):
        raise IndexError(f"kinds {of_kind.min()} to {of_kind.max()} for {len(outlines)} outlines")
    places = np.ascontiguousarray(poses, np.float64).reshape(-1, 3)
    grasps = np.ascontiguousarray(tips, np.float64).reshape(-1, 3)
    room, nearest = np.full((len(grasps), len(places)), np.inf), np.zeros((len(grasps), len(places)), np.int64)
    if len(jaws) and room.size:
        _gaps(
            jaws.points, jaws.starts, jaws.radius, grasps, outlines.points, outlines.starts, outlines.radius,
            outlines.reach, of_kind, places, float(jaws.reach.max()), near_mm, room, nearest,
        )  # fmt: skip
    return room, nearest


def _fixed(array: NDArray[Number]) -> NDArray[Number]:
    """The array, contiguous and read-only."""
    array = np.ascontiguousarray(array)
    array.flags.writeable = False
    return array


@njit(f"float64(float64, float64, {POINTS})", cache=True)
def depth_of(x: float, y: float, corners: Floats) -> float:
    """How deep a point lies inside a polygon; negative: how far outside it."""
    nearest, inside = np.inf, False
    ax, ay = corners[-1]
    for i in range(len(corners)):
        bx, by = corners[i]
        dx, dy = bx - ax, by - ay
        length2 = dx * dx + dy * dy
        along = ((x - ax) * dx + (y - ay) * dy) / length2 if length2 > 0 else 0.0
        along = min(max(along, 0.0), 1.0)
        ox, oy = x - ax - along * dx, y - ay - along * dy
        nearest = min(nearest, ox * ox + oy * oy)
        if (ay > y) != (by > y) and x < ax + (y - ay) * dx / dy:
            inside = not inside
        ax, ay = bx, by
    return float(np.sqrt(nearest) if inside else -np.sqrt(nearest))


@njit(f"boolean({POINTS}, {POINTS})", cache=True)
def _cross(first: Floats, second: Floats) -> bool:
    """Whether an edge of one crosses an edge of the other."""
    for i in range(len(first)):
        a, b = first[i - 1], first[i]
        for k in range(len(second)):
            c, d = second[k - 1], second[k]
            c_side = (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])
            d_side = (b[0] - a[0]) * (d[1] - a[1]) - (b[1] - a[1]) * (d[0] - a[0])
            a_side = (d[0] - c[0]) * (a[1] - c[1]) - (d[1] - c[1]) * (a[0] - c[0])
            b_side = (d[0] - c[0]) * (b[1] - c[1]) - (d[1] - c[1]) * (b[0] - c[0])
            if c_side * d_side < 0 and a_side * b_side < 0:
                return True
    return False


@njit(f"float64({POINTS}, {POINTS}, float64)", cache=True)
def _deepest(edge: Floats, corners: Floats, best: float) -> float:
    """Depth of the deepest point of one outline inside another polygon, or `best` if that is more.

    The depth grows by at most 1 mm a mm of way, which says how far on the next point worth a look can be.
    """
    if len(corners) < 3:
        return best
    for i in range(len(edge)):
        ax, ay = edge[i - 1]
        dx, dy = edge[i, 0] - ax, edge[i, 1] - ay
        length, way = np.hypot(dx, dy), 0.0
        while way <= length:
            share = way / length if length > 0 else 0.0
            depth = depth_of(ax + share * dx, ay + share * dy, corners)
            best = max(best, depth)
            way += best + DEPTH_STEP_MM - depth
    return best


@njit(f"float64({POINTS}, {POINTS})", cache=True)
def gap(first: Floats, second: Floats) -> float:
    """Distance between two outlines; negative: the depth of their overlap."""
    nearest, inside = np.inf, 0.0
    for i in range(len(first)):
        depth = depth_of(first[i, 0], first[i, 1], second)
        nearest, inside = min(nearest, abs(depth)), max(inside, depth)
    for i in range(len(second)):
        depth = depth_of(second[i, 0], second[i, 1], first)
        nearest, inside = min(nearest, abs(depth)), max(inside, depth)
    if inside == 0 and not _cross(first, second):
        return nearest
    return -_deepest(first, second, _deepest(second, first, inside))


@njit(f"void({POINTS}, {VALUES}, float64[:, ::1])", cache=True)
def place(points: Floats, pose: Floats, out: Floats) -> None:
    """Points (m, 2) of a frame that stands at a pose (3,) x, y, yaw."""
    c, s = np.cos(pose[2]), np.sin(pose[2])
    for i in range(len(points)):
        out[i, 0] = pose[0] + c * points[i, 0] - s * points[i, 1]
        out[i, 1] = pose[1] + s * points[i, 0] + c * points[i, 1]


@njit(
    f"void({POINTS}, {INDICES}, {VALUES}, {POINTS}, {POINTS}, {INDICES}, {VALUES}, {VALUES}, {INDICES}, "
    f"{POINTS}, float64, float64, float64[:, ::1], int64[:, ::1])",
    cache=True,
    nogil=True,
)
def _gaps(
    jaws: Floats, jaw_starts: Ints, jaw_radius: Floats, tips: Floats, corners: Floats, starts: Ints, radius: Floats,
    reach: Floats, kinds: Ints, poses: Floats, jaw_reach: float, near: float, room: Floats, nearest: Ints,
) -> None:  # fmt: skip
    """Fill room and nearest jaw, (g, p), as `gaps` says."""
    placed_jaws, placed = np.empty_like(jaws), np.empty_like(corners)
    for k in range(len(poses)):
        low, high = starts[kinds[k]], starts[kinds[k] + 1]
        place(corners[low:high], poses[k], placed[low:high])
        for g in range(len(tips)):
            far = np.hypot(tips[g, 0] - poses[k, 0], tips[g, 1] - poses[k, 1]) - reach[kinds[k]] - jaw_reach
            if far > near:
                room[g, k] = far
                continue
            place(jaws, tips[g], placed_jaws)
            for jaw in range(len(jaw_radius)):
                between = gap(placed_jaws[jaw_starts[jaw]:jaw_starts[jaw + 1]], placed[low:high])
                between -= jaw_radius[jaw] + radius[kinds[k]]
                if between < room[g, k]:
                    room[g, k], nearest[g, k] = between, jaw
