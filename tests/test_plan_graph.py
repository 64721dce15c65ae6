"""A plan explains itself: the graph behind its first decision, what else could have come first, and its picture."""

import csv
import json
from pathlib import Path

import networkx as nx
import numpy as np
import pytest
from some_streams import Laid, belt, sanderling, scattered
from test_legs import ENDLESS

from pipeline.decision import Decision, first_decision, told
from pipeline.plan_graph import START, decision_graph, write_graph
from pipeline.plots.decision import plot_decision
from pipeline.policy import Arrival, Lookahead, Nearest
from pipeline.replay import replay
from pipeline.study import policy_of, run

CROWD = belt(scattered(13, 9, 25), 20, 110.0, places=ENDLESS)
PAIR = belt([Laid(280.0, -450.0, 0.0), Laid(303.0, -452.0, 90.0)], 12, 60.0)  # the second frees the first


def decision_of(stream, policy) -> Decision:
    setting = stream.setting()
    decision = first_decision(setting, policy, 8, replay(setting, policy, "some", 8))
    assert decision is not None
    return decision


@pytest.fixture(scope="module")
def crowd() -> Decision:
    """A decision among several parts: of the run that starts when most are known."""
    setting = CROWD.setting()

    class Late(Lookahead):
        def choose(self, choice):
            return super().choose(choice) if choice.now_s > 3.5 else None

    decision = first_decision(setting, Late(), 8, replay(setting, Late(), "late", 8))
    assert decision is not None
    assert len(decision.scene.choice.weights) >= 5
    return decision


def test_edges_cost_what_the_policy_saw(crowd: Decision, tmp_path: Path) -> None:
    """Read back from the file: an edge from the start for every grasp that can be next, with its time and travel."""
    write_graph(tmp_path / "order.graphml", decision_graph(crowd))
    graph = nx.read_graphml(tmp_path / "order.graphml")
    choice = crowd.scene.choice
    _, finish = choice.next_ones()
    assert graph.is_directed()
    assert len(graph) == len(choice.nodes) + 1
    for node in np.flatnonzero(np.isfinite(finish)):
        edge = graph.edges[START, f"grasp {node + 1}"]
        assert edge["time_s"] <= finish[node] - choice.now_s + 1e-6
        assert edge["travel_s"] == pytest.approx(choice.travel()[0, node], abs=1e-6)
    part = nx.get_node_attributes(graph, "part_no")
    assert all(part[a] != part[b] for a, b in graph.edges)


def test_the_order_is_a_path_of_the_graph(crowd: Decision) -> None:
    """Its ranks count on from the start, and its travel is the sum along it."""
    graph = decision_graph(crowd)
    ranked = sorted((rank, name) for name, rank in graph.nodes(data="rank") if rank)
    assert [rank for rank, _ in ranked] == list(range(1, len(crowd.chosen.nodes) + 1))
    path = [START, *(name for _, name in ranked)]
    assert nx.path_weight(graph, path, "travel_s") == pytest.approx(crowd.chosen.travel_s, abs=1e-5)


def test_what_must_go_first_is_marked_and_never_follows() -> None:
    decision = decision_of(PAIR, Lookahead())
    graph = decision_graph(decision)
    number = dict(graph.nodes(data="part_no"))
    freeing = [(number[a], number[b]) for a, b, frees in graph.edges(data="frees") if frees]
    assert len(set(freeing)) == 1
    blocker, blocked = freeing[0]
    for name in number:
        if number[name] == blocked:
            assert not graph.has_edge(START, name)
            assert all(number[after] != blocker for after in graph.successors(name))
    assert decision.part_no(decision.chosen.nodes[0]) == blocker


def test_no_other_beginning_is_better(crowd: Decision) -> None:
    """Less weight, or the same in as much time (joint travel, which the order counts in a little, aside)."""
    assert len(crowd.others) >= 3
    assert len({crowd.part_no(other.nodes[0]) for other in (crowd.chosen, *crowd.others)}) == len(crowd.others) + 1
    for other in crowd.others:
        weight, time_s = crowd.costs(other)
        assert weight > 1e-9 or (weight > -1e-9 and time_s > -0.06 * (crowd.chosen.travel_s + other.travel_s))
    assert crowd.gap == 0.0
    assert crowd.picked.weight_bound == crowd.chosen.weight


@pytest.mark.parametrize("policy", [Arrival(), Nearest(), Lookahead()])
def test_its_first_pick_is_the_one_carried_out(policy) -> None:
    """Part, elbow and time of the run, within 2 ms; also for orders that bound nothing."""
    setting = CROWD.setting()
    run = replay(setting, policy, "some", 8)
    decision = first_decision(setting, policy, 8, run)
    assert decision is not None
    assert decision.part_no(decision.chosen.nodes[0]) == run.picks[0].part.number
    assert decision.chosen.finish_s[0] == pytest.approx(run.picks[0].cycle.release_end_s, abs=0.002)
    record = json.loads(json.dumps(told(decision), allow_nan=False))
    assert record["order"][0]["part_no"] == run.picks[0].part.number


def test_nothing_picked_is_no_decision() -> None:
    setting = belt([Laid(280.0, -450.0, side="down")], 10).setting()
    assert first_decision(setting, Arrival(), 8, replay(setting, Arrival(), "arrival", 8)) is None


def test_the_picture_shows_every_part_and_the_way_between(crowd: Decision) -> None:
    ax = plot_decision(crowd)
    texts = {text.get_text() for text in ax.texts}
    assert {str(n + 1) for n in range(len(crowd.chosen.nodes))} <= texts
    assert len(ax.patches) >= len(crowd.chosen.nodes) + len(set(crowd.scene.choice.nodes.part.tolist()))


def test_the_command_writes_the_same_files_twice(tmp_path: Path) -> None:
    folder = CROWD.written(tmp_path / "some")
    written = []
    for name in ("one", "two"):
        told_ = sanderling("plan", folder, "--frame", 40, "--cell", folder / "cell.toml", "--located",
                           folder / "located.csv", "--out", tmp_path / name)
        assert told_.status == 0, told_.err
        assert "What could come first" in told_.out
        written.append([(tmp_path / name / f"order.{kind}").read_bytes() for kind in ("json", "graphml", "png")])
    assert written[0] == written[1]
    first = next(csv.DictReader((tmp_path / "one" / "picks.csv").open()))
    assert json.loads(written[0][0])["order"][0]["part_no"] == int(first["part_no"])


def test_a_small_budget_gives_the_best_so_far_and_says_how_good_it_is(crowd: Decision) -> None:
    """Never better than the best, within its own bound, and the same each time."""
    setting = CROWD.setting()
    choice, whole = crowd.scene.choice, crowd.chosen
    hasty = [policy_of(setting, "lookahead", 0.02).choose(choice) for _ in range(2)]
    assert hasty[0] == hasty[1]
    assert hasty[0] is not None
    assert hasty[0].states < crowd.picked.states
    assert hasty[0].weight <= whole.weight <= hasty[0].weight_bound + 1e-9
    assert policy_of(setting, "lookahead").choose(choice) == crowd.picked


def test_a_budget_bounds_how_many_parts_are_looked_at() -> None:
    """Grasps and legs take time too: within 4 ms there is none for more than two parts, whatever the machine."""
    setting = CROWD.setting()
    hasty, whole = (run(setting, "lookahead", 8, budget_ms=budget) for budget in (4.0, 0.0))
    assert max(pick.looked_at for pick in hasty.picks) == 2
    assert max(pick.looked_at for pick in whole.picks) > 2
    again = run(setting, "lookahead", 8, budget_ms=4.0)
    assert [pick.picked for pick in again.picks] == [pick.picked for pick in hasty.picks]
