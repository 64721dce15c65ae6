"""Room to work in: which parts stand in the way of which, and what of the arm comes too near a keep-out.

Who blocks whom is a precedence graph (an edge: this one must go first). A part is blocked while every grasp it has
meets something; it is free once the things that one of its grasps meets are gone. Parts that wait for one another in
a ring never get free.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import networkx as nx
import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from pipeline.arm import Arm
from pipeline.cell import KeepoutCell
from pipeline.shapes import INDICES, POINTS, VALUES, Floats, Ints, Shapes, depth_of, gap, place

LINK_1, LINK_2, TIP, JAW = 0, 1, 2, 3  # JAW + n: jaw n
BODIES = ("link 1", "link 2", "the tool tip")


def who_blocks_whom(
    room: ArrayLike, nearest: ArrayLike, owner: Sequence[int], lying: Sequence[int], least_mm: float = 0.0
) -> "nx.DiGraph[int]":
    """The precedence graph of g grasps among p things that lie there.

    room, nearest: (g, p) from `shapes.gaps`; owner (g,): the number of the part each grasp is of; lying (p,): the
    numbers of the things. A grasp has room where its gap is at least `least_mm`; a part does not block itself.

    Every number is a node; `free` says whether it can be gripped now. An edge runs from what must go first to the
    part that waits for it, with `overlap_mm`, `jaw` and `grasp` (its row). Of a waiting part's grasps the edges
    show the one that gets free soonest, by the fewest others, then by the least overlap. A thing without grasps
    (not recognised, out of reach) never goes.
    """
    gaps_mm, jaws = np.asarray(room, np.float64), np.asarray(nearest)
    owners, things = np.asarray(owner, np.int64), np.asarray(lying, np.int64)
    met = (gaps_mm < least_mm) & (owners[:, None] != things[None, :])
    rows = {int(part): np.flatnonzero(owners == part) for part in np.unique(owners)}
    chosen = _soonest(met, np.where(met, least_mm - gaps_mm, 0.0).max(axis=1, initial=0.0), rows, things)
    graph: nx.DiGraph[int] = nx.DiGraph()
    graph.add_nodes_from(sorted({int(n) for n in things} | set(rows)), free=False)
    for part, row in chosen.items():
        graph.nodes[part]["free"] = not met[row].any()
        for k in np.flatnonzero(met[row]):
            overlap = float(least_mm - gaps_mm[row, k])
            graph.add_edge(int(things[k]), part, overlap_mm=overlap, jaw=int(jaws[row, k]), grasp=int(row))
    return graph


def _soonest(met: NDArray[np.bool_], worst: Floats, rows: dict[int, Ints], things: Ints) -> dict[int, int]:
    """For each part the grasp that gets free in the earliest round, if parts go as they get free."""
    chosen: dict[int, int] = {}
    gone = np.zeros(len(things), bool)
    while True:
        left = met & ~gone
        now = {part: own[~left[own].any(axis=1)] for part, own in rows.items() if part not in chosen}
        now = {part: own for part, own in now.items() if len(own)}
        if not now:
            break
        chosen |= {part: _easiest(own, met, worst) for part, own in now.items()}
        gone |= np.isin(things, list(now))
    return chosen | {part: _easiest(own, left, worst) for part, own in rows.items() if part not in chosen}


def _easiest(own: Ints, met: NDArray[np.bool_], worst: Floats) -> int:
    """Of these grasps the one that meets the fewest things, then the least deeply, then the first."""
    return int(own[np.lexsort((own, worst[own], met[own].sum(axis=1)))[0]])


def rings(graph: "nx.DiGraph[int]") -> list[tuple[int, ...]]:
    """Parts that wait for one another: each ring once, from its least number on, in the order they wait."""
    found = []
    for group in nx.strongly_connected_components(graph):
        if len(group) > 1:
            ring = [tail for tail, _ in nx.find_cycle(graph.subgraph(sorted(group)))]
            start = ring.index(min(ring))
            found.append(tuple(ring[start:] + ring[:start]))
    return sorted(found)


@dataclass(frozen=True, eq=False)
class Near:
    """What of the arm is nearest to which keep-out in each of n postures."""

    gap_mm: Floats  # (n,) negative: inside by as much; inf: above all of them; NaN: no posture
    keepout: Ints  # (n,) number of the keep-out, -1 for none
    body: Ints  # (n,) LINK_1, LINK_2, TIP or JAW + number of the jaw

    def __len__(self) -> int:
        return len(self.gap_mm)


class Keepouts:
    """The keep-outs of a cell: links as capsules at flange height, the tool by its tip and jaws.

    A body counts where it is not above the keep-out's top. Links are not looked at where their radius is 0.
    """

    def __init__(self, keepouts: Iterable[KeepoutCell], arm: Arm, jaws: Shapes) -> None:
        kept = tuple(keepouts)
        self.names = tuple(keepout.name for keepout in kept)
        self._arm, self._jaws = arm, jaws
        self._areas = Shapes.of([keepout.polygon_mm for keepout in kept])
        self._tops = np.array([keepout.top_mm for keepout in kept], np.float64)

    def near(self, joints: ArrayLike) -> Near:
        """The nearest keep-out for joints (n, 4)."""
        q = np.asarray(joints, np.float64).reshape(-1, 4)
        answer = Near(np.full(len(q), np.inf), np.full(len(q), -1), np.zeros(len(q), np.int64))
        if self.names:
            shoulder, elbow, quill = self._arm.pivots(q)
            _near(
                np.ascontiguousarray(np.concatenate([shoulder, elbow, quill], axis=1)), self._arm.forward(q),
                self._arm.link_radius_mm, self._arm.flange_z_mm, self._jaws.points,
                self._jaws.starts, self._jaws.radius, self._areas.points, self._areas.starts, self._tops,
                answer.gap_mm, answer.keepout, answer.body,
            )  # fmt: skip
        answer.gap_mm[~np.isfinite(q).all(axis=1)] = np.nan
        return answer

    def clearance(self, joints: ArrayLike) -> Floats:
        """mm (n,) between the arm and the nearest keep-out for joints (n, 4); negative: inside."""
        return self.near(joints).gap_mm


@njit(
    f"void({POINTS}, {POINTS}, float64, float64, {POINTS}, {INDICES}, {VALUES}, {POINTS}, {INDICES}, {VALUES}, "
    "float64[::1], int64[::1], int64[::1])",
    cache=True,
    nogil=True,
)
def _near(
    pivots: Floats, tips: Floats, link_radius: float, flange_z: float, jaws: Floats, jaw_starts: Ints,
    jaw_radius: Floats, areas: Floats, area_starts: Ints, tops: Floats, least: Floats, keepout: Ints, body: Ints,
) -> None:  # fmt: skip
    """Fill the gap, keep-out and body (n,) of `Near` for pivots (n, 6: shoulder, elbow, quill) and tips (n, 4)."""
    placed, links, pose = np.empty_like(jaws), np.empty((3, 2)), np.empty(3)
    for i in range(len(tips)):
        pose[0], pose[1], pose[2] = tips[i, 0], tips[i, 1], tips[i, 3]
        place(jaws, pose, placed)
        for k in range(3):
            links[k, 0], links[k, 1] = pivots[i, 2 * k], pivots[i, 2 * k + 1]
        for k in range(len(tops)):
            area = areas[area_starts[k]:area_starts[k + 1]]
            low, high = 0 if link_radius > 0 and flange_z <= tops[k] else TIP, TIP
            if tips[i, 2] < tops[k]:
                high = JAW + len(jaw_radius)
            for part in range(low, high):
                if part < TIP:
                    between = gap(links[part:part + 2], area) - link_radius
                elif part == TIP:
                    between = -depth_of(tips[i, 0], tips[i, 1], area)
                else:
                    jaw = part - JAW
                    between = gap(placed[jaw_starts[jaw]:jaw_starts[jaw + 1]], area) - jaw_radius[jaw]
                if between < least[i]:
                    least[i], keepout[i], body[i] = between, k, part
