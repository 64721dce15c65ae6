"""A whole tray explained: the order its parts were picked in, what else could have come first, how far from the best.

A tray of more parts than the exact look-ahead takes is one decision; which slot a part goes to follows from its turn.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import networkx as nx
import numpy as np
from numpy.typing import NDArray

from pipeline.decision import Decision, Sequence, builder_of
from pipeline.places import Filling
from pipeline.policy import MOST_LOOKED_AT, Picked
from pipeline.replay import Run, Setting
from pipeline.tray_order import Tray, TrayOrder, followed
from pipeline.trip import Pick

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
START = "start"
ELBOWS = ("right", "left")
TRIED, OTHERS = 24, 12  # parts tried as the first, those quickest set down; of these told
FOLLOWERS = 6  # of each part in the graph, the quickest


@dataclass(frozen=True)
class WholeTray(Decision):
    """The order of a whole tray, as it was carried out.

    tray: what was ordered. picks: in turn. order: the same judged on the tray, with its bounds. others: sequences that
    begin with another part and go on as chosen, so that what they cost is an upper bound.
    """

    tray: Tray
    picks: tuple[Pick, ...]
    order: TrayOrder

    @property
    def whole(self) -> bool:
        """Whether every part of the tray was picked."""
        return len(self.picks) == len(self.tray.numbers)

    @property
    def gap(self) -> float:
        """Share of the time (of the joint travel, where that is the objective; of the weight, where parts were left)
        by which a better order might be better, at most."""
        if not self.whole:
            return 1.0 - self.chosen.weight / self.picked.weight_bound
        if self.order.travel_bound_s:
            return self.order.gap
        now = self.scene.choice.now_s
        return max(0.0, 1.0 - self.order.bound_s / (self.chosen.end_s - now))

    @property
    def gap_of(self) -> str:
        """What the gap is a share of."""
        return ("travel" if self.order.travel_bound_s else "time") if self.whole else "weight"


def whole_tray(setting: Setting, by_travel: bool, horizon: int, run: Run) -> WholeTray | None:
    """How the tray of a run's first pick was ordered; None where nothing was picked, few parts lay there, or several
    were picked a trip."""
    if setting.cell.belt is not None or not run.picks or run.picks[0].looked_at <= MOST_LOOKED_AT:
        return None
    if any(pick.set_down for pick in run.picks):
        return None
    first = run.picks[0]
    scene = builder_of(setting).scene(first.decided_s, first.cycle.start_joints,
                                      Filling(tuple(setting.grasping.places.values())), horizon, set())
    found = scene.choice.tray() if scene is not None else None
    if scene is None or found is None:
        return None
    tray, row_of = found[0], {int(number): k for k, number in enumerate(found[0].numbers)}
    picks = tuple(pick for pick in run.picks if pick.part.number in row_of)
    rows = [row_of[pick.part.number] for pick in picks]
    turns = np.array([*rows, *(k for k in range(len(row_of)) if k not in rows)], np.int64)
    order = followed(tray, turns, 0.0 if by_travel and np.isinf(tray.left_s) else 1.0)
    number_of = [scene.grasp(node)[0].part.number for node in range(len(scene.choice.nodes))]
    node_of = np.array([number_of.index(int(number)) for number in tray.numbers])
    chosen = Sequence(tuple(node_of[rows].tolist()), float(tray.weights[rows].sum()),
                      tuple(pick.release_end_s for pick in picks), order.travel_s)
    others = sorted(_others(tray, order, node_of, scene.choice.now_s), key=lambda one: (-one.weight, one.end_s))
    picked = Picked(chosen.nodes[0], chosen.nodes, chosen.weight, chosen.end_s, float(tray.weights.sum()),
                    scene.choice.now_s + order.bound_s if order.bound_s else -np.inf, first.picked.states)
    return WholeTray(setting, scene, setting.mover.arm.forward(first.cycle.start_joints)[:2], picked, chosen,
                     tuple(others[:OTHERS]), tray, picks, order)  # fmt: skip


def _others(tray: Tray, order: TrayOrder, node_of: IntArray, now: float) -> Iterator[Sequence]:
    """The order with another part moved to its front, for the parts quickest set down."""
    turns = np.array(order.order, np.int64)
    takes = _takes(tray, len(tray.out) - 1, np.zeros(len(tray.slots), np.int64))[0]
    able = np.isfinite(takes) & ~tray.after.any(axis=1) & (np.arange(len(takes)) != turns[0])
    for part in np.argsort(np.where(able, takes, np.inf), kind="stable")[: min(TRIED, able.sum())]:
        moved = followed(tray, np.concatenate([[part], turns[turns != part]]), order.time_share, bounded=False)
        if moved.picked:
            yield Sequence(tuple(node_of[list(moved.order[: moved.picked])].tolist()), moved.weight,
                           (now + moved.finish_s,), moved.travel_s)


def _takes(tray: Tray, at: int, used: IntArray) -> tuple[FloatArray, FloatArray]:
    """(n,) s from a way to stand until each part is set down at its queue's next slot, and joint travel on the way."""
    takes, travel = (np.full(len(tray.queue), np.inf) for _ in range(2))
    for part, q in enumerate(tray.queue):
        to = slice(*tray.slots[q, used[q] : used[q] + 2]) if used[q] + 1 < tray.slots.shape[1] else slice(0, 0)
        hold = slice(tray.begins[part], tray.begins[part + 1])
        total = tray.out[at, hold, None] + tray.carry[hold, to]
        if total.size:
            takes[part] = total.min()
            moved = tray.out_travel[at, hold, None] + tray.carry_travel[hold, to]
            travel[part] = moved.ravel()[total.argmin()]
    return takes, travel


def tray_graph(decision: WholeTray) -> "nx.DiGraph[str]":
    """Nodes: `start` and the parts; edges: from the start to every part that can be first, from each to the one that
    comes next and to the FOLLOWERS that could come next soonest.

    A node has part_no, kind, elbow, turn, place, slot (from 1; the last four as picked), x_mm, y_mm and rank (from 1, 0
    where it was left). An edge has time_s (from leaving to being free again), travel_s and frees, as for a belt.
    """
    tray, picks = decision.tray, decision.picks
    graph: nx.DiGraph[str] = nx.DiGraph(now_s=_plain(decision.scene.choice.now_s))
    graph.add_node(START, part_no=0, kind="", elbow="", turn=0, place="", slot=0, rank=0, **_at(decision.start_mm))
    rank_of = {pick.part.number: rank for rank, pick in enumerate(picks, 1)}
    candidates = {one.part.number: one for one in decision.scene.candidates}
    for number in tray.numbers.tolist():
        rank, one = rank_of.get(number, 0), candidates[number]
        hold = picks[rank - 1].cycle.hold if rank else None
        graph.add_node(_name(number), part_no=number, kind=one.part.kind, elbow=ELBOWS[hold.elbow] if hold else "",
                       turn=int(hold.turn) if hold else 0, place=picks[rank - 1].place if rank else "",
                       slot=picks[rank - 1].slot + 1 if rank else 0, rank=rank, **_at(one.xy_mm))
    _join(graph, decision)
    return graph


def _join(graph: "nx.DiGraph[str]", decision: WholeTray) -> None:
    tray, used = decision.tray, np.zeros(len(decision.tray.slots), np.int64)
    at, left = len(tray.out) - 1, np.ones(len(tray.numbers), bool)
    names = [START, *(_name(pick.part.number) for pick in decision.picks)]
    rows = [int(np.flatnonzero(tray.numbers == pick.part.number)[0]) for pick in decision.picks]
    for turn, (name, row) in enumerate(zip(names, [-1, *rows], strict=True)):
        if row >= 0:  # where the arm stands when it has been set down
            used[tray.queue[row]] += 1
            ways = np.arange(*tray.slots[tray.queue[row], used[tray.queue[row]] - 1 : used[tray.queue[row]] + 1])
            end = decision.picks[turn - 1].place_joints
            at, left[row] = int(ways[np.abs(tray.rests[ways] - end).sum(axis=1).argmin()]), False
        takes, travel = _takes(tray, at, used)
        able = np.isfinite(takes) & ~(tray.after.any(axis=1) if row < 0 else tray.after[row])
        able[row] &= row < 0
        quick = np.argsort(np.where(able, takes, np.inf), kind="stable")[: able.sum() if row < 0 else FOLLOWERS]
        chosen = rows[turn : turn + 1]
        for part in sorted({*quick[able[quick]].tolist(), *(k for k in chosen if np.isfinite(takes[k]))}):
            graph.add_edge(name, _name(tray.numbers[part]), time_s=_plain(takes[part]), travel_s=_plain(travel[part]),
                           frees=row >= 0 and bool(tray.after[part, row]))


def told_tray(decision: WholeTray) -> dict[str, Any]:
    """The order in plain values, as `decision.told` has them; and what the gap is a share of."""
    chosen, now = decision.chosen, decision.scene.choice.now_s
    order = [{"pick": n, "part_no": pick.part.number, "part": pick.part.kind, "elbow": ELBOWS[pick.cycle.hold.elbow],
              "place": pick.place, "slot": pick.slot + 1, "done_s": _plain(pick.release_end_s)}
             for n, pick in enumerate(decision.picks, 1)]  # fmt: skip
    others = []
    for one in decision.others:
        weight, time_s = decision.costs(one)
        others.append({"part_no": decision.part_no(one.nodes[0]), "weight": _plain(one.weight),
                       "end_s": _plain(one.end_s), "weight_lost": _plain(weight), "time_lost_s": _plain(time_s),
                       "travel_s": _plain(one.travel_s), "order": [decision.part_no(node) for node in one.nodes]})
    bound = decision.picked.finish_bound_s
    return {
        "now_s": _plain(now), "parts": len(decision.tray.numbers), "grasps": int(decision.tray.begins[-1]),
        "states": decision.picked.states, "weight": _plain(chosen.weight), "end_s": _plain(chosen.end_s),
        "travel_s": _plain(chosen.travel_s), "weight_bound": _plain(decision.picked.weight_bound),
        "end_bound_s": _plain(bound) if np.isfinite(bound) else None,
        "travel_bound_s": _plain(decision.order.travel_bound_s) or None,
        "gap": _plain(decision.gap), "gap_of": decision.gap_of, "order": order, "next": others,
    }  # fmt: skip


def _name(number: int) -> str:
    return f"part {number}"


def _at(xy_mm: FloatArray) -> dict[str, float]:
    return {"x_mm": _plain(xy_mm[0]), "y_mm": _plain(xy_mm[1])}


def _plain(value: float) -> float:
    """A number as Python's own, to a millionth."""
    return round(float(value), 6)
