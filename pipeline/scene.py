"""A scene: of what is known at one moment, which grasps may be chosen, and which parts stand in whose way."""

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pipeline.candidate import Candidate
from pipeline.cell import MOST_ON_TRAY, Cell
from pipeline.grasp import Grasping, Holds, Refusal
from pipeline.legs import Legs, Nodes
from pipeline.motion.across import TURNING
from pipeline.motion.cycle import Hold
from pipeline.neighbours import ROOM_MM, Neighbours
from pipeline.places import Filling
from pipeline.policy import MOST_LOOKED_AT, Choice
from pipeline.trays import Trays
from pipeline.watch import Watch

FloatArray = NDArray[np.float64]
MOST_BITS = 62  # parts that others may wait for
MOST_GRASPS = 4  # of a part are handed to the policy
MOVED_MM, TURNED_RAD = 0.5, 0.02  # an estimate that has moved more has its grasps worked out anew
AWAY_S, NARROW_S = 0.02, 0.3  # what counts against a grasp: each radian of J4 from where it stands, a lane it can't use


@dataclass(frozen=True)
class Scene:
    """One moment. node_of (g, 2): candidate and row of its grasps for each node of the choice."""

    candidates: tuple[Candidate, ...]
    node_of: NDArray[np.int64]
    choice: Choice
    on_axis: bool = False

    def grasp(self, node: int) -> tuple[Candidate, Hold, FloatArray, FloatArray]:
        """Candidate, hold, joints (4,) and pose (4,) at the slot of a node."""
        k, row = self.node_of[node].tolist()
        one = self.candidates[k]
        return one, one.holds.holds[one.grasps.hold[row]], one.grasps.drop_joints[row], one.grasps.drop_pose[row]

    def alike(self, node: int) -> set[tuple[int, int]]:
        """(part row, grasp row) of the node, and, the tool on the quill axis, of those that move J1 and J2 alike."""
        k, row = self.node_of[node].tolist()
        one = self.candidates[k]
        if not self.on_axis:
            return {(one.row, row)}
        elbow, end = one.holds.elbow[one.grasps.hold], one.grasps.drop_joints[:, 1] > 0
        return {(one.row, int(r)) for r in np.flatnonzero((elbow == elbow[row]) & (end == end[row]))}

    def grip(self, node: int) -> int:
        """Which of its kind's grips a node uses."""
        k, row = self.node_of[node].tolist()
        one = self.candidates[k]
        return int(one.holds.grip[one.grasps.hold[row]])

    def met_from_mm(self, node: int) -> float:
        """How far along the part must be before it can be met with this grasp; -inf where anywhere will do."""
        k, row = self.node_of[node].tolist()
        one = self.candidates[k]
        return float(one.holds.met_from_mm(int(one.grasps.hold[row])))


class SceneBuilder:
    """Builds scenes for one replay. Parts that can't be had at all are kept in `refusals`, by row."""

    def __init__(self, cell: Cell, watch: Watch, grasping: Grasping, legs: Legs,
                 outlines: Mapping[str, FloatArray | float], least_score: float) -> None:
        self.cell, self.watch, self.grasping, self.legs = cell, watch, grasping, legs
        self.belt, self.least_score = legs.mover.belt, least_score
        self.refusals: dict[int, Refusal] = {}
        self.crowded: dict[int, Refusal] = {}  # parts that had no room, or no slot, when last looked at
        self._holds: dict[int, tuple[FloatArray, float, Holds]] = {}
        self._trays = Trays(grasping, legs, watch.until_s)
        self._neighbours = Neighbours(watch.parts, outlines, grasping)

    def scene(self, now: float, start: FloatArray, filling: Filling, horizon: int,
              banned: set[tuple[int, int]], only: Collection[int] = ()) -> Scene | None:
        """The scene for an arm at rest at start (4,); None where nothing may be picked.

        banned: (part row, grasp row) that have been tried at this moment and can't be carried out. only: numbers of the
        parts in question; empty: all.
        """
        state = self.belt.known_at(now)
        frame = self.watch.look(now, state.travel_mm)
        self._holds = {k: self._holds[k] for k in self.watch.lying if k in self._holds}
        candidates: list[Candidate] = []
        for k in self.watch.waiting():
            out = k in self.refusals or (only and self.watch.parts[k].number not in only)
            one = None if out else self._candidate(k, frame, filling)
            if one is not None:
                candidates.append(one)
            if len(candidates) == min(horizon, MOST_LOOKED_AT if self.cell.belt else MOST_ON_TRAY):
                break
        node_of, blocked = self._nodes(candidates, frame, float(start[3]), banned)
        if not len(node_of):
            return None
        nodes = self._as_nodes(candidates, node_of, state.travel_mm)
        weights = np.array([self.cell.parts[one.part.kind].weight for one in candidates])
        along = np.array([one.xy_mm @ self.belt.heading + state.travel_mm for one in candidates])
        choice = Choice(now, nodes, weights, along, blocked,
                        lambda later: self.legs.times(start, now, nodes, state, later),
                        lambda: self._travel(start, nodes), np.array([one.part.number for one in candidates]), start,
                        lambda: self._trays.tray(candidates, node_of, blocked, weights, start, now, filling))
        return Scene(tuple(candidates), node_of, choice, not self.grasping.arm.offset_mm.any())

    def _candidate(self, k: int, frame: int, filling: Filling) -> Candidate | None:
        """The part as it is known, or None where it may not be picked (with the refusal kept where it never may)."""
        part = self.watch.parts[k]
        at = max(part.known.by(frame), 0)
        kind, side = str(part.known.kind[at]), str(part.known.side[at])
        if not kind or "down" in (side, part.side) or kind != part.kind or part.known.score[at] < self.least_score:
            return None
        xy = part.known.xy_mm[at]
        holds = self._holds_of(k, kind, xy, float(part.known.yaw_rad[at]))
        if isinstance(holds, Refusal):
            self.refusals[k] = holds
            return None
        free = [(place, filling.next_slot(place)) for place in self.cell.parts[kind].places]
        for place, slot in free:
            if slot is not None:
                grasps = self.grasping.pairs(kind, holds, place, slot)
                if len(grasps.hold):
                    return Candidate(k, part, xy, holds, place, slot, grasps)
        places = ", ".join(self.cell.parts[kind].places)
        if all(slot is None for _, slot in free):
            self.refusals[k] = Refusal("place_full", f"no slot is left in {places}")
        else:  # another kind may fill the slot
            self.crowded[k] = Refusal("out_of_reach", f"no slot to be filled next can be reached in {places}")
        return None

    def _holds_of(self, k: int, kind: str, xy: FloatArray, yaw: float) -> Holds | Refusal:
        """Holds of a part at its latest estimate; a small move shifts those worked out before."""
        if k in self._holds:
            at, turn, holds = self._holds[k]
            moved, more = xy - at, yaw - turn
            if not moved.any() and more == 0:
                return holds
            if np.hypot(*moved) < MOVED_MM and abs(more) < TURNED_RAD:
                return replace(holds, holds=tuple(replace(h, at_mm=h.at_mm + moved, yaw=h.yaw + more)
                                                  for h in holds.holds))
        found = self.grasping.holds(kind, xy, yaw)
        if not isinstance(found, Refusal):
            self._holds[k] = (xy, yaw, found)
        return found

    def _nodes(self, candidates: Sequence[Candidate], frame: int, j4: float,
               banned: set[tuple[int, int]]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Candidate and grasp row of each node (g, 2), and what blocks each candidate (n,)."""
        things = np.array(self.watch.lying, np.int64)
        poses = np.empty((len(things), 3))
        for i, k in enumerate(things):
            known = self.watch.parts[k].known
            at = max(known.by(frame), 0)
            poses[i] = (*known.xy_mm[at], known.yaw_rad[at])
        bit = {one.row: 1 << i for i, one in enumerate(candidates[:MOST_BITS])}
        blocked = np.zeros(len(candidates), np.int64)
        chosen: list[tuple[int, int]] = []
        for i, one in enumerate(candidates):
            room = self._neighbours.room(one.row, one.xy_mm, one.holds, things, poses)[0][one.grasps.hold]
            met = room < ROOM_MM
            rows = np.flatnonzero(~met.any(axis=1))
            self.crowded.pop(one.row, None)
            if not len(rows):
                self.crowded[one.row] = self._no_room(room, things)
                rows, blocked[i] = _behind(met, [bit.get(int(k), 0) for k in things])
            rows = np.array([r for r in rows if (one.row, int(r)) not in banned], np.int64)
            chosen += [(i, r) for r in self._best(one, rows, j4)]
        return np.array(chosen, np.int64).reshape(-1, 2), blocked

    def _no_room(self, room: FloatArray, things: NDArray[np.int64]) -> Refusal:
        """What the least obstructed grasp of room (g, things) would meet."""
        least = int(room.min(axis=1).argmax())
        thing = int(room[least].argmin())
        return Refusal("no_room", f"the jaws would meet part {self.watch.parts[things[thing]].number} "
                                  f"by {ROOM_MM - room[least, thing]:.1f} mm")

    def _best(self, one: Candidate, rows: NDArray[np.int64], j4: float) -> list[int]:
        """A few of a part's grasps: for each pair of elbows the quickest, then others that turn J4 elsewhere."""
        if len(rows) <= MOST_GRASPS:
            return [int(r) for r in rows]
        hold = one.grasps.hold[rows]
        pair = 2 * one.holds.elbow[hold] + self.grasping.arm.elbow_of(one.grasps.drop_joints[rows])
        turn = one.holds.joints[hold, one.holds.joints.shape[1] // 2, 3]
        narrow = 1.0 - one.holds.usable[hold].mean(axis=1)
        cost = one.grasps.carry_s[rows] + AWAY_S * np.abs(np.nan_to_num(turn) - j4) + NARROW_S * narrow
        order = np.lexsort((rows, cost))
        firsts = [int(order[np.flatnonzero(pair[order] == p)[0]]) for p in np.unique(pair)]
        rest = [int(r) for r in order if r not in firsts]
        return [int(rows[r]) for r in (firsts + rest)[:MOST_GRASPS]]

    def _as_nodes(self, candidates: Sequence[Candidate], node_of: NDArray[np.int64], travel_mm: float) -> Nodes:
        picked = [(candidates[k], int(r)) for k, r in node_of.tolist()]
        hold = [int(one.grasps.hold[r]) for one, r in picked]
        along = np.array([one.xy_mm @ self.belt.heading for one, _ in picked]) + travel_mm
        window = (self.cell.belt.window_mm if self.cell.belt else None) or (-np.inf, np.inf)
        return Nodes(
            node_of[:, 0].copy(),
            np.stack([one.holds.joints[h] for (one, _), h in zip(picked, hold, strict=True)]),
            np.stack([one.holds.usable[h] for (one, _), h in zip(picked, hold, strict=True)]),
            np.stack([one.holds.along_mm for one, _ in picked]) - along[:, None],
            np.stack([one.grasps.drop_joints[r] for one, r in picked]),
            np.array([one.holds.holds[h].z_mm for (one, _), h in zip(picked, hold, strict=True)]),
            np.array([one.grasps.drop_pose[r, 2] for one, r in picked]),
            window[0] - along, window[1] - along, np.array([self.watch.until_s[one.row] for one, _ in picked]))

    def _travel(self, start: FloatArray, nodes: Nodes) -> FloatArray:
        """(g + 1, g): joint travel to the part and on to its slot, each joint's in s at its full speed."""
        middle = nodes.lane[:, nodes.lane.shape[1] // 2][:, TURNING]
        ends = np.concatenate([start[None], nodes.drop])[:, TURNING]
        speed = self.grasping.arm.limits.speed[TURNING]
        carry = (np.abs(nodes.drop[:, TURNING] - middle) / speed).sum(axis=1)
        travel = (np.abs(middle[None] - ends[:, None]) / speed).sum(axis=2) + carry
        return np.asarray(np.nan_to_num(travel, nan=1e3))


def _behind(met: NDArray[np.bool_], bits: Sequence[int]) -> tuple[NDArray[np.int64], int]:
    """Rows of met (g, things) whose blockers may themselves be picked, the fewest; and their bits."""
    bit = np.array(bits, np.int64)
    able = ~(met & (bit == 0)).any(axis=1)
    if not able.any():
        return np.zeros(0, np.int64), 0
    masks = np.where(met, bit, 0).sum(axis=1)
    count = np.where(able, met.sum(axis=1), met.shape[1] + 1)
    mask = int(masks[count.argmin()])
    return np.flatnonzero(able & (masks & ~mask == 0)), mask
