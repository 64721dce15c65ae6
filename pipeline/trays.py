"""Whole trays to be ordered: what lies there, the slots to come, and the legs between them."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pipeline.candidate import Candidate
from pipeline.grasp import Grasping
from pipeline.legs import Legs
from pipeline.motion.across import TURNING
from pipeline.places import Filling
from pipeline.policy import MOST_LOOKED_AT
from pipeline.tray_order import Tray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
WAYS = 8  # to stand at one slot, those that most holds would choose


class Trays:
    """Works out a tray once, and gives it again as long as nothing else can be picked."""

    def __init__(self, grasping: Grasping, legs: Legs, until_s: FloatArray) -> None:
        self.grasping, self.legs, self.until_s = grasping, legs, until_s
        self._tray: Tray | None = None
        self._places: tuple[str, ...] = ()
        self._filled = np.zeros(0, np.int64)

    def tray(self, candidates: Sequence[Candidate], node_of: IntArray, blocked: IntArray, weights: FloatArray,
             start: FloatArray, now: float, filling: Filling) -> tuple[Tray, IntArray] | None:
        """The tray, and how many slots of each queue have been filled since; None on a belt, or for few parts."""
        if self.grasping.cell.belt is not None:
            return None
        able = np.unique(node_of[:, 0])
        numbers = np.array([candidates[k].part.number for k in able])
        if self._tray is None or not np.isin(numbers, self._tray.numbers).all():
            self._tray = None
            if len(candidates) <= MOST_LOOKED_AT:
                return None
            self._places = tuple(sorted({candidates[k].place for k in able}))
            self._filled = np.array([filling.filled(place) for place in self._places])
            self._tray = self._made(candidates, able, node_of, blocked, weights, start, now, filling)
        return self._tray, np.array([filling.filled(place) for place in self._places]) - self._filled

    def _made(self, candidates: Sequence[Candidate], able: IntArray, node_of: IntArray, blocked: IntArray,
              weights: FloatArray, start: FloatArray, now: float, filling: Filling) -> Tray:
        holds = sorted({(int(k), int(candidates[k].grasps.hold[row])) for k, row in node_of})
        owner = np.array([k for k, _ in holds])
        joints = np.array([candidates[k].holds.joints[h, 0] for k, h in holds])
        heights = np.array([candidates[k].holds.holds[h].z_mm for k, h in holds])
        rests, slots, suits = self._rests(candidates, holds, joints, filling, len(able))
        ends = np.concatenate([rests, start[None]])
        out, carry = self.legs.still(ends, joints, heights)
        travel = self._travel(ends, joints)
        behind = np.array([[int(blocked[k]) >> min(int(other), 63) & 1 for other in able] for k in able], bool)
        return Tray(
            np.array([candidates[k].part.number for k in able]),
            np.searchsorted(owner, np.append(able, len(candidates))),
            np.array([self._places.index(candidates[k].place) for k in able]), slots, out,
            np.ascontiguousarray(np.where(suits, carry[:, :-1], np.inf)), weights[able], behind,
            float(self.until_s[candidates[able[0]].row] - now), self.legs.mover.motion.grasp_s, rests,
            travel, np.ascontiguousarray(travel[:-1].T))  # fmt: skip

    def _travel(self, ends: FloatArray, joints: FloatArray) -> FloatArray:
        """(r + 1, h) joint travel between ways to stand and holds, each joint's in s at its full speed."""
        turned = np.abs(ends[:, None, TURNING] - joints[None][:, :, TURNING]) / self.grasping.arm.limits.speed[TURNING]
        return np.ascontiguousarray(turned.sum(axis=2))

    def _rests(self, candidates: Sequence[Candidate], holds: Sequence[tuple[int, int]], joints: FloatArray,
               filling: Filling, number: int) -> tuple[FloatArray, IntArray, NDArray[np.bool_]]:
        """Ways to stand (r, 4), the first of each slot of each queue (q, k), which holds may end so (h, r)."""
        kinds = [(candidates[k].place, candidates[k].part.kind, int(candidates[k].holds.grip[h])) for k, h in holds]
        rests, suits, slots = list[FloatArray](), list[NDArray[np.bool_]](), []
        for place in self._places:
            line = [sum(len(rest) for rest in rests)]
            for slot in filling.coming(place, number):
                for kind in sorted({kind for kind in kinds if kind[0] == place}):
                    mine = np.array([one == kind for one in kinds])
                    ways = self.grasping.drops(kind[1], kind[2], place, slot).joints
                    suited = self._suited(joints[:, 3], ways)
                    kept = np.argsort(-suited[mine].sum(axis=0), kind="stable")[:WAYS]
                    suits.append(self._suited(joints[:, 3], ways[kept]) & mine[:, None])
                    rests.append(ways[kept])
                line.append(sum(len(rest) for rest in rests))
            slots.append(line)
        longest = max(len(line) for line in slots)
        padded = [line + [line[-1]] * (longest - len(line)) for line in slots]
        return np.concatenate(rests), np.array(padded, np.int64), np.concatenate(suits, axis=1)

    def _suited(self, j4: FloatArray, ways: FloatArray) -> NDArray[np.bool_]:
        """(h, w) for each hold's J4 and each elbow at the slot: the way that turns J4 least."""
        suited = np.zeros((len(j4), len(ways)), bool)
        right = self.grasping.arm.elbow_of(ways) == 0 if len(ways) else np.zeros(0, bool)
        for side in (right, ~right):
            if side.any():
                turn = np.where(side, np.abs(j4[:, None] - ways[:, 3]), np.inf)
                suited[np.arange(len(j4)), turn.argmin(axis=1)] = True
        return suited
