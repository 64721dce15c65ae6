"""A whole tray explained: files of a sensible size, an order that is a path of its graph, and a gap that holds."""

import csv
import json
from pathlib import Path

import networkx as nx
import numpy as np
import pytest
from some_streams import Laid, Stream, sanderling, tray
from test_tray_order import strewn

from pipeline.plots.decision import plot_decision
from pipeline.policy import MOST_LOOKED_AT
from pipeline.study import run
from pipeline.whole_tray import FOLLOWERS, OTHERS, START, WholeTray, told_tray, tray_graph, whole_tray


def explained(stream: Stream, order: str = "lookahead", by_travel: bool = False) -> WholeTray:
    setting = stream.setting()
    found = whole_tray(setting, by_travel, 200, run(setting, order, 200))
    assert found is not None
    return found


@pytest.fixture(scope="module")
def twenty() -> WholeTray:
    """Twenty parts, all picked."""
    return explained(strewn(20, 40.0))


def test_the_order_is_a_path_of_a_graph_that_stays_small(twenty: WholeTray) -> None:
    """From the start to every part, from each to a few, and along the order; no part follows itself."""
    graph = tray_graph(twenty)
    ranked = sorted((rank, name) for name, rank in graph.nodes(data="rank") if rank)
    path = [START, *(name for _, name in ranked)]
    assert [graph.nodes[name]["part_no"] for name in path[1:]] == [pick.part.number for pick in twenty.picks]
    assert graph.out_degree(START) == 20
    assert max(degree for name, degree in graph.out_degree() if name != START) <= FOLLOWERS + 1
    assert nx.number_of_selfloops(graph) == 0
    least = nx.path_weight(graph, path, "time_s")  # each leg at its own quickest
    ends = twenty.chosen.end_s - twenty.scene.choice.now_s
    assert 0.98 * ends <= least <= ends + 0.02


def test_the_gap_and_what_else_could_come_first(twenty: WholeTray) -> None:
    """Each other beginning costs time or, where the holds chosen for the real run differ, next to nothing."""
    assert 0 <= twenty.gap < 0.05
    assert twenty.gap_of == "time"
    assert len(twenty.others) == OTHERS
    firsts = [twenty.part_no(one.nodes[0]) for one in (twenty.chosen, *twenty.others)]
    assert len(set(firsts)) == OTHERS + 1
    for one in twenty.others:
        weight, time_s = twenty.costs(one)
        assert weight == 0
        assert -0.02 < time_s < 2.0
        assert sorted(map(twenty.part_no, one.nodes)) == list(range(1, 21))


@pytest.mark.parametrize(("order", "by_travel", "gap_of"), [
    ("arrival", False, "time"), ("nearest", False, "time"), ("lookahead", True, "travel"),
])
def test_every_order_says_how_far_it_may_be_from_the_best(order: str, by_travel: bool, gap_of: str) -> None:
    objective = "travel" if by_travel else "picks"
    found = explained(strewn(20, 40.0, order__objective=objective), order, by_travel)
    record = json.loads(json.dumps(told_tray(found), allow_nan=False))
    assert record["gap_of"] == gap_of
    assert 0 <= record["gap"] < (0.5 if order != "lookahead" else 0.1)
    value, bound = (("travel_s", "travel_bound_s") if by_travel else ("end_s", "end_bound_s"))
    assert record[bound] <= record[value] + 1e-6


def test_few_parts_and_belts_are_decisions_of_another_kind() -> None:
    setting = strewn(MOST_LOOKED_AT, 40.0).setting()
    assert whole_tray(setting, False, 200, run(setting, "lookahead", 200)) is None


def test_the_command_writes_the_same_files_twice(tmp_path: Path) -> None:
    """Graph, table and picture of a tray of thirty parts, as picks.csv has them."""
    folder = strewn(30, 34.0).written(tmp_path / "some")
    written = []
    for name in ("one", "two"):
        told = sanderling("plan", folder, "--frame", 0, "--cell", folder / "cell.toml", "--located",
                          folder / "located.csv", "--out", tmp_path / name)
        assert told.status == 0, told.err
        assert "gap in time" in told.out
        written.append([(tmp_path / name / f"order.{kind}").read_bytes() for kind in ("json", "graphml", "png")])
    assert written[0] == written[1]
    assert len(written[0][1]) < 100_000
    record = json.loads(written[0][0])
    with (tmp_path / "one" / "picks.csv").open() as file:
        picks = list(csv.DictReader(file))
    assert [step["part_no"] for step in record["order"]] == [int(pick["part_no"]) for pick in picks]
    assert record["order"][-1]["done_s"] == pytest.approx(float(picks[-1]["release_end_s"]), abs=1e-3)
    assert len(nx.read_graphml(tmp_path / "one" / "order.graphml")) == 31


def test_the_picture_of_many_parts_numbers_each_and_joins_none(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("pipeline.plots.decision.JOINED", 10)
    found = explained(strewn(20, 40.0), "arrival")
    ax = plot_decision(found)
    assert {str(n) for n in range(1, 21)} <= {text.get_text() for text in ax.texts}
    assert not [patch for patch in ax.patches if type(patch).__name__ == "FancyArrowPatch"]


def test_a_tray_where_most_parts_have_no_room_is_picked_all_the_same() -> None:
    """More parts in view than the exact look-ahead takes, fewer than that to be had: the others lie among parts upside
    down, which are never taken away."""
    free = strewn(24, 46.0)
    beside = [Laid(part.x_mm + 12 * np.cos(turn), part.y_mm + 12 * np.sin(turn), 0.0, "lever", "down")
              for part in free.laid[:14] for turn in np.radians(part.yaw_deg) + np.arange(4) * np.pi / 2]
    jaws = [[[9, -3], [13, -3], [13, 3], [9, 3]], [[-13, -3], [-9, -3], [-9, 3], [-13, 3]]]
    stream = tray([*free.laid, *beside], 1, **{**free.changes, "tool__footprint_mm": jaws})
    done = run(stream.setting(), "lookahead", 200)
    assert len(done.picks) == 10
    assert done.picks[0].looked_at > MOST_LOOKED_AT
    assert {fate.reason for fate in done.fates if fate} == {"wrong_side", "no_room"}
