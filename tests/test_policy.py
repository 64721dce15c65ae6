"""Policies: each takes what its rule says, from what may be chosen now."""

import numpy as np
import pytest
from some_streams import Laid, Stream, belt, scattered, tray
from test_legs import ENDLESS, scene_at

from pipeline.policy import POLICIES, Arrival, Choice, Lookahead, Nearest, Picked, policy_named
from pipeline.replay import Run
from pipeline.study import run


def choices(stream: Stream, policy: object) -> tuple[Run, list[tuple[Choice, Picked]]]:
    """A run, and everything it was asked and answered."""
    asked = []

    class Listening:
        def choose(self, choice: Choice) -> Picked | None:
            picked = policy.choose(choice)  # type: ignore[attr-defined]
            if picked is not None:
                asked.append((choice, picked))
            return picked

    return stream.run(Listening()), asked


@pytest.fixture(scope="module")
def busy() -> Stream:
    return belt(scattered(13, 24, 45), 32, 110.0, places=ENDLESS)


def test_arrival_takes_the_farthest_downstream_that_can_be_had(busy: Stream) -> None:
    _, asked = choices(busy, Arrival())
    assert len(asked) >= 8
    for choice, picked in asked:
        _, finish = choice.next_ones()
        able = np.isfinite(finish)
        assert able[picked.node]
        part = choice.nodes.part
        assert choice.along_mm[part[picked.node]] == choice.along_mm[part[able]].max()
        assert finish[picked.node] == finish[part == part[picked.node]].min()


def test_nearest_takes_the_grip_that_is_made_soonest(busy: Stream) -> None:
    _, asked = choices(busy, Nearest())
    assert len(asked) >= 8
    for choice, picked in asked:
        contact, _ = choice.next_ones()
        assert contact[picked.node] == contact.min()


def test_the_three_rules_give_three_orders(busy: Stream) -> None:
    orders = [[pick.part.number for pick in busy.run(policy).picks] for policy in (Arrival(), Nearest(), Lookahead())]
    assert orders[0] != orders[1]
    assert orders[0] != orders[2]
    assert orders[1] != orders[2]


@pytest.mark.parametrize("policy", [Arrival(), Nearest(), Lookahead()])
def test_a_blocked_part_is_never_next(policy: object) -> None:
    """The part upstream frees the one it stands beside."""
    pair = [Laid(280.0, -450.0, 0.0), Laid(303.0, -452.0, 90.0)]
    done, asked = choices(belt(pair, 12, 60.0), policy)
    assert any((choice.blocked_by > 0).any() for choice, _ in asked)
    assert all(choice.blocked_by[choice.nodes.part[picked.node]] == 0 for choice, picked in asked)
    assert [pick.part.yaw_rad for pick in done.picks] == pytest.approx([np.pi / 2, 0.0], abs=1e-6)


def test_looking_ahead_wins_where_the_order_matters() -> None:
    """Weight decides where only one of two can be had: they leave the window together."""
    pair = [Laid(240.0, -450.0, 0.0, kind="lever"), Laid(330.0, -449.0, 0.0, kind="gem")]
    kinds = {"gem": {"grasp_mm": 3.0, "height_mm": 6.0, "places": ["tray"], "weight": 5.0}}
    stream = belt(pair, 9, 230.0, parts={**kinds, "lever": {"grasp_mm": 3.0, "height_mm": 6.0, "places": ["tray"]}},
                  belt__window_mm=[-60.0, 90.0])
    done, asked = choices(stream, Lookahead())
    assert [pick.part.kind for pick in done.picks][:1] == ["gem"]
    assert all(picked.weight <= picked.weight_bound + 1e-9 for _, picked in asked)


@pytest.mark.parametrize("seed", range(3))
def test_lookahead_never_ends_with_fewer_picks_than_arrival(seed: int) -> None:
    setting = belt(scattered(seed, 22, 40 + 10 * seed), 26, 100.0 + 20 * seed, places=ENDLESS).setting()
    ahead, plain = run(setting, "lookahead", 8), run(setting, "arrival", 8)
    assert len(ahead.picks) >= len(plain.picks) > 5
    assert ahead.order == "lookahead"


def test_where_it_falls_back_to_arrival_the_run_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    """A look-ahead that never picks loses to arrival; the run is then arrival's, and a note tells."""
    monkeypatch.setattr(Lookahead, "choose", lambda self, choice: None)
    setting = belt(scattered(1, 4, 60), 12, 100.0).setting()
    ahead, plain = run(setting, "lookahead", 8), run(setting, "arrival", 8)
    assert [pick.part.number for pick in ahead.picks] == [pick.part.number for pick in plain.picks]
    assert "arrival" in ahead.notes[0]


def test_looking_ahead_for_travel_moves_no_more() -> None:
    laid = [Laid(220.0 + 60 * (k % 3), -80.0 + 120 * (k // 3), 50.0 * k) for k in range(6)]
    moved = []
    for objective in ("picks", "travel"):
        done = tray(laid, 1).run(Lookahead(objective), 6)
        assert len(done.picks) == 6
        ends = np.array([done.mover.arm.home, *(q for pick in done.picks for q in (
            done.mover.joints(pick.cycle, np.array([pick.cycle.grasp_start_s]))[0], pick.cycle.end_joints))])
        moved.append(float((np.abs(np.diff(ends, axis=0)) / done.mover.arm.limits.speed)[:, [0, 1, 3]].sum()))
    assert moved[1] <= moved[0] * 1.02


def test_a_policy_of_ones_own() -> None:
    """Any object that chooses; it may also wait for more to be known."""

    class LastComesFirst:
        waited = 0

        def choose(self, choice: Choice) -> Picked | None:
            if choice.now_s < 5.0:
                self.waited += 1
                return None
            _, finish = choice.next_ones()
            able = np.flatnonzero(np.isfinite(finish))
            if not len(able):
                return None
            return Picked(int(able[np.argmin(choice.along_mm[choice.nodes.part[able]])]))

    own = LastComesFirst()
    done = belt([Laid(280.0, -450.0 - 70 * k) for k in range(3)], 14, 60.0).run(own)
    assert own.waited > 0
    assert min(pick.decided_s for pick in done.picks) >= 5.0
    assert done.picks[0].part.number != 1


def test_a_policy_that_only_waits_picks_nothing() -> None:
    class Idle:
        def choose(self, choice: Choice) -> Picked | None:
            return None

    done = belt([Laid(280.0, -450.0)], 10).run(Idle())
    assert done.picks == ()
    assert [fate.reason for fate in done.fates if fate] == ["too_late"]


def test_names() -> None:
    assert all(hasattr(policy_named(name), "choose") for name in POLICIES)
    with pytest.raises(KeyError):
        policy_named("fastest")


def test_a_choice_tells_what_a_policy_may_know() -> None:
    """Shapes fit together, and travel is that of all grasps from here and from one another."""
    _, scene = scene_at(belt(scattered(2, 10, 60), 14, 100.0), 6.0)
    choice = scene.choice
    grasps, parts = len(choice.nodes), len(choice.weights)
    assert choice.travel().shape == (grasps + 1, grasps)
    assert choice.nodes.part.max() < parts == len(choice.along_mm) == len(choice.blocked_by)
    assert (np.diff(choice.along_mm) <= 0).all(), "farthest downstream first"
    assert all(times.shape == (grasps,) for times in choice.next_ones())
