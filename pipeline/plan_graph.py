"""The graph of a decision: who may follow whom, and what it costs; written as GraphML, an open format for graphs."""

from pathlib import Path

import networkx as nx
import numpy as np
from numpy.typing import NDArray

from pipeline.decision import Decision

START = "start"
ELBOWS = ("right", "left")


def decision_graph(decision: Decision) -> "nx.DiGraph[str]":
    """Nodes: `start` and the grasps to choose from; edges: which may follow which.

    A node has part_no, kind, elbow, turn (whole turns of J4), place, slot (from 1), x_mm, y_mm (of the part now; of the
    tool tip at the start) and rank (from 1 in the order chosen, 0 outside it). An edge has time_s (from leaving to
    being free again, begun now), travel_s (joint travel, each joint's at its full speed) and frees: whether the part it
    comes from must go before the one it leads to. No edge leads from the start to a part that is blocked, nor from a
    part to one that must go before it.
    """
    choice, scene = decision.scene.choice, decision.scene
    rank = {node: n for n, node in enumerate(decision.chosen.nodes, 1)}
    graph: nx.DiGraph[str] = nx.DiGraph(now_s=_plain(choice.now_s))
    graph.add_node(START, part_no=0, kind="", elbow="", turn=0, place="", slot=0, rank=0, **_at(decision.start_mm))
    for node in range(len(choice.nodes)):
        one, hold, _, _ = scene.grasp(node)
        graph.add_node(_name(node), part_no=one.part.number, kind=one.part.kind, elbow=ELBOWS[hold.elbow],
                       turn=int(hold.turn), place=one.place, slot=one.slot + 1, rank=rank.get(node, 0),
                       **_at(decision.at_mm(node)))
    _join(graph, decision)
    return graph


def write_graph(path: Path, graph: "nx.DiGraph[str]") -> None:
    """A graph as a GraphML file."""
    nx.write_graphml(graph, path, encoding="utf-8", named_key_ids=True)


def _join(graph: "nx.DiGraph[str]", decision: Decision) -> None:
    choice = decision.scene.choice
    times, travel = choice.legs(True), choice.travel()
    takes = times.finish[np.concatenate([[0], times.start_of])].min(axis=2) - choice.now_s  # waiting is allowed
    for before in range(-1, len(choice.nodes)):
        for node in range(len(choice.nodes)):
            if np.isfinite(takes[before + 1, node]) and _may_follow(choice.nodes.part, choice.blocked_by, before, node):
                graph.add_edge(START if before < 0 else _name(before), _name(node),
                               time_s=_plain(takes[before + 1, node]), travel_s=_plain(travel[before + 1, node]),
                               frees=before >= 0 and _blocks(choice.nodes.part, choice.blocked_by, before, node))


def _may_follow(part: NDArray[np.int64], blocked_by: NDArray[np.int64], before: int, node: int) -> bool:
    if before < 0:
        return not blocked_by[part[node]]
    return bool(part[before] != part[node]) and not _blocks(part, blocked_by, node, before)


def _blocks(part: NDArray[np.int64], blocked_by: NDArray[np.int64], one: int, other: int) -> bool:
    """Whether the part of a grasp must go before that of another."""
    return bool(int(blocked_by[part[other]]) >> int(part[one]) & 1)


def _name(node: int) -> str:
    return f"grasp {node + 1}"


def _at(xy_mm: NDArray[np.float64]) -> dict[str, float]:
    return {"x_mm": _plain(xy_mm[0]), "y_mm": _plain(xy_mm[1])}


def _plain(value: float) -> float:
    """A number as Python's own, to a millionth."""
    return round(float(value), 6)
