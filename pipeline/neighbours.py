"""The room that the jaws on one part have beside everything else that lies there."""

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from pipeline.follow import Part
from pipeline.grasp import Grasping, Holds
from pipeline.shapes import Shapes, gaps

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
ROOM_MM = 0.2  # kept between the jaws and what else lies there
NEAR_MM = 150.0


class Neighbours:
    """The parts of one run by their rows, with their outlines: of each kind, (k, 2) in the grip frame or a radius."""

    def __init__(self, parts: Sequence[Part], outlines: Mapping[str, FloatArray | float], grasping: Grasping) -> None:
        self.parts, self._grasping = parts, grasping
        self._shape_of, self._outlines = _outline_table(parts, outlines)

    def room(self, k: int, xy_mm: FloatArray, holds: Holds, others: IntArray,
             poses: FloatArray) -> tuple[FloatArray, IntArray]:
        """(h, p) mm between the jaws of each hold of part k at xy and each of the others, and the nearest jaw (h, p).

        others (p,): rows, at poses (p, 3) x, y mm, yaw rad. The room is inf far away and beside the part itself.
        """
        room = np.full((len(holds.holds), len(others)), np.inf)
        jaw = np.zeros(room.shape, np.int64)
        near = np.flatnonzero((np.hypot(*(poses[:, :2] - xy_mm).T) < NEAR_MM) & (others != k))
        if len(near):
            tips = holds.tips()
            for grip in np.unique(holds.grip):
                rows = np.flatnonzero(holds.grip == grip)
                jaws = self._grasping.footprint(self.parts[k].kind, int(grip))
                found = gaps(jaws, tips[rows], self._outlines, self._shape_of[others[near]], poses[near])
                room[np.ix_(rows, near)], jaw[np.ix_(rows, near)] = found
        return room, jaw


def _outline_table(parts: Sequence[Part], outlines: Mapping[str, FloatArray | float]) -> tuple[IntArray, Shapes]:
    """Shape number of each part, and the shapes: of each kind as it lies up and down, then things not recognised."""
    kinds = sorted(outlines)
    shapes: list[FloatArray | float] = []
    for kind in kinds:
        outline = outlines[kind]
        shapes += [outline, np.asarray(outline) * (1.0, -1.0) if np.ndim(outline) else outline]
    numbers = np.zeros(len(parts), np.int64)
    for k, part in enumerate(parts):
        if part.kind in outlines and not len(part.outline_mm):
            numbers[k] = 2 * kinds.index(part.kind) + (part.side == "down")
        else:  # an outline of its own lies along the cell's axes: turned back by the yaw it will be turned by
            c, s = np.cos(part.yaw_rad), np.sin(part.yaw_rad)
            numbers[k] = len(shapes)
            shapes.append(part.outline_mm @ np.array([[c, -s], [s, c]]) if len(part.outline_mm) else 0.0)
    return numbers, Shapes.of(shapes)
