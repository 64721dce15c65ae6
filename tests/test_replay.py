"""A replay: nothing known before its time, and one fate a part."""

from dataclasses import replace

import numpy as np
import pytest
from some_streams import Laid, belt, scattered, tray
from test_legs import ENDLESS

from pipeline.policy import Arrival, Lookahead, Nearest
from pipeline.replay import Pick, Run, replay

LATENCY = {"cameras": [{"name": "overhead", "latency_s": 0.25}]}


def fates(run: Run) -> dict[tuple[float, float], str]:
    """What became of each part, by where it lies."""
    return {(round(float(part.xy_mm[0])), round(float(part.xy_mm[1]))): fate.reason if fate else "picked"
            for part, fate in zip(run.parts, run.fates, strict=True)}


def told(pick: Pick) -> tuple[object, ...]:
    return (pick.part.number, pick.decided_s, pick.cycle.grasp_start_s, pick.cycle.release_end_s, pick.place, pick.slot)


@pytest.mark.parametrize("policy", [Arrival(), Nearest(), Lookahead()])
def test_nothing_is_decided_before_it_is_known(policy: object) -> None:
    """A part is known the latency after the first frame that shows it; until then the arm does not move for it."""
    stream = belt(scattered(5, 12, 80), 24, 110.0, places=ENDLESS, **LATENCY)
    run = stream.run(policy)  # type: ignore[arg-type]
    assert len(run.picks) >= 5
    for pick in run.picks:
        known = stream.times_s[pick.part.first_row] + 0.25
        assert pick.decided_s >= known - 1e-9
        assert pick.cycle.depart_s >= known - 1e-9


@pytest.mark.parametrize("policy", [Arrival(), Nearest(), Lookahead()])
def test_what_comes_later_changes_nothing_decided_before(policy: object) -> None:
    """The same belt with further parts: until the first of them is known every pick is the same."""
    few = scattered(7, 8, 80)
    more = [*few, *(replace(part, y_mm=part.y_mm - 700.0) for part in scattered(8, 4, 80))]
    short, long = (belt(laid, 24, 100.0, places=ENDLESS, **LATENCY) for laid in (few, more))
    one, other = short.run(policy), long.run(policy)  # type: ignore[arg-type]
    first = min(part.first_row for part in other.parts if part.xy_mm[1] < min(p.y_mm for p in few) - 1)
    news = long.times_s[first] + 0.25
    before = [[told(pick) for pick in run.picks if pick.decided_s < news] for run in (one, other)]
    assert len(before[0]) >= 3
    assert before[0] == before[1]


@pytest.mark.parametrize("policy", [Arrival(), Lookahead()])
def test_a_belt_that_stops_later_changes_no_decision_made_before(policy: object) -> None:
    """The choice and its moment are the same; only the motion follows the counts as they come."""
    laid = scattered(9, 8, 80)
    steady = belt(laid, 24, 100.0, places=ENDLESS).run(policy)  # type: ignore[arg-type]
    stopping = belt(laid, 24, lambda t: np.where((t > 9) & (t < 12), 0.0, 100.0), places=ENDLESS).run(policy)  # type: ignore[arg-type]
    before = [[(pick.part.number, pick.decided_s, pick.slot) for pick in run.picks if pick.decided_s < 8.9]
              for run in (steady, stopping)]
    assert len(before[0]) >= 3
    assert before[0] == before[1]


def test_picks_never_overlap_and_every_part_has_one_fate() -> None:
    run = belt(scattered(3, 20, 45), 26, 110.0).run(Lookahead())
    starts = [pick.cycle.depart_s for pick in run.picks]
    ends = [pick.cycle.release_end_s for pick in run.picks]
    assert all(start >= end - 1e-9 for start, end in zip(starts[1:], ends, strict=False))
    assert len(run.parts) == len(run.fates) == 20
    picked = [pick.part.number for pick in run.picks]
    assert sorted(picked) == [part.number for part, fate in zip(run.parts, run.fates, strict=True) if fate is None]
    assert len(set(picked)) == len(picked)
    for before, pick in zip(run.picks, run.picks[1:], strict=False):
        assert pick.cycle.start_joints == pytest.approx(before.cycle.end_joints)


def test_a_blocked_part_goes_after_its_blocker() -> None:
    """Downstream comes first by arrival, but its jaws would meet the one beside it."""
    pair = [Laid(280.0, -450.0, 0.0), Laid(303.0, -452.0, 90.0)]
    run = belt(pair, 14, 60.0).run(Arrival())
    assert [round(float(np.degrees(pick.part.yaw_rad))) for pick in run.picks] == [90, 0]
    apart = [replace(pair[0]), replace(pair[1], x_mm=330.0)]
    free = belt(apart, 14, 60.0).run(Arrival())
    assert [round(float(np.degrees(pick.part.yaw_rad))) for pick in free.picks] == [0, 90]


def test_parts_that_block_one_another_have_no_room() -> None:
    run = belt([Laid(280.0, -450.0, 0.0), Laid(303.0, -450.0, 0.0)], 14, 60.0).run(Arrival())
    assert set(fates(run).values()) == {"no_room"}
    (first, second) = [fate for fate in run.fates if fate]
    assert "part 2" in first.detail
    assert "part 1" in second.detail


def test_a_thing_not_recognised_stands_in_the_way_and_is_never_picked() -> None:
    run = belt([Laid(280.0, -450.0, 0.0), Laid(300.0, -450.0, 0.0, kind="")], 14, 60.0).run(Arrival())
    # without an outline it is a point, and the jaw comes down on it
    assert fates(run) == {(280, -450): "no_room", (300, -450): "unknown"}


def test_wrong_sides_low_scores_and_far_parts_have_their_reasons() -> None:
    laid = [Laid(280.0, -450.0), Laid(300.0, -550.0, side="down"), Laid(290.0, -650.0, score=0.2), Laid(800.0, -700.0)]
    run = belt(laid, 16, 80.0).run(Lookahead())
    assert list(fates(run).values()) == ["picked", "wrong_side", "low_score", "out_of_reach"]


def test_a_lower_score_may_be_asked_for() -> None:
    setting = belt([Laid(290.0, -450.0, score=0.2)], 14, 80.0).setting(least_score=0.1)
    assert len(replay(setting, Arrival(), "arrival", 4).picks) == 1


def test_a_full_place_stays_full_and_an_endless_one_is_exchanged() -> None:
    laid = [Laid(280.0, -450.0 - 100 * k) for k in range(5)]
    small = [{**ENDLESS[0], "columns": 2, "rows": 1, "endless": False}]
    full = belt(laid, 24, 70.0, places=small).run(Arrival())
    assert [pick.slot for pick in full.picks] == [0, 1]
    assert list(fates(full).values()).count("place_full") == 3
    exchanged = belt(laid, 24, 70.0, places=[{**small[0], "endless": True}]).run(Arrival())
    assert [pick.slot for pick in exchanged.picks] == [0, 1, 0, 1, 0]


def test_the_second_place_is_taken_when_the_first_is_full() -> None:
    places = [{"name": "tray", "origin_mm": [-60.0, 260.0, -40.0]}, {"name": "bin", "origin_mm": [-20.0, 280.0, -40.0],
                                                                   "any_yaw": True, "endless": True}]  # fmt: skip
    run = belt([Laid(280.0, -450.0 - 100 * k) for k in range(3)], 18, 70.0, places=places,
               parts__lever__places=["tray", "bin"]).run(Arrival())
    assert [pick.place for pick in run.picks] == ["tray", "bin", "bin"]


def test_a_place_out_of_reach_says_so() -> None:
    far = [{"name": "far", "origin_mm": [-60.0, 500.0, -40.0]}]
    (fate,) = belt([Laid(280.0, -450.0)], 12, 70.0, places=far, parts__lever__places=["far"]).run(Arrival()).fates
    assert fate is not None
    assert fate.reason == "out_of_reach"
    assert "far" in fate.detail


def test_a_slot_one_kind_cannot_reach_may_be_filled_by_another() -> None:
    """The first slot asks a turn of J4 that only the kind alike after half a turn can give; then the second serves."""
    changes = {
        "arm__j4__min": -95.0, "arm__j4__max": 95.0,
        "parts": {"one": {"grasp_mm": 3.0, "places": ["tray"]},
                  "two": {"grasp_mm": 3.0, "places": ["tray"], "symmetry": 2}},
        "places": [{"name": "tray", "origin_mm": [200.0, 230.0, -40.0], "slot_yaw_deg": -130.0, "columns": 2,
                    "pitch_mm": [-260.0, 0.0]}],
    }  # fmt: skip
    one, two = Laid(300.0, 60.0, -60.0, kind="one"), Laid(300.0, -60.0, -60.0, kind="two")
    assert [fate.reason for fate in tray([one], 1, **changes).run(Arrival()).fates if fate] == ["out_of_reach"]
    both = tray([one, two], 1, **changes).run(Arrival())
    assert [(pick.part.kind, pick.slot) for pick in both.picks] == [("two", 0), ("one", 1)]


@pytest.mark.parametrize("policy", [Arrival(), Lookahead()])
def test_trays_are_emptied_while_they_lie_there(policy: object) -> None:
    """Nothing of the second is known before its image, and what is left of the first goes with it."""
    laid = [Laid(220.0 + 50 * k, -60.0 + 60 * f, 30.0 * k, first=f) for f in range(2) for k in range(3)]
    stream = tray(laid, 2, every_s=3.2, places=ENDLESS, **LATENCY)
    run = stream.run(policy)  # type: ignore[arg-type]
    frame = {part.number: part.first_row for part in run.parts}
    assert len(run.picks) == 5
    for pick in run.picks:
        shown = stream.times_s[frame[pick.part.number]]
        assert pick.decided_s >= shown + 0.25 - 1e-9
        if frame[pick.part.number] == 0:
            assert pick.cycle.grasp_end_s <= 3.2
    missed = [part.first_row for part, fate in zip(run.parts, run.fates, strict=True) if fate]
    assert missed == [0]
    assert [fate.reason for fate in run.fates if fate] == ["too_late"]


def test_a_counter_that_rolls_over_changes_nothing() -> None:
    laid = scattered(5, 8, 80)
    plain = belt(laid, 18, 100.0, start_counts=3000, places=ENDLESS).run(Lookahead())
    rolled = belt(laid, 18, 100.0, start_counts=3000, places=ENDLESS, belt__counts_modulus=8192).run(Lookahead())
    assert [told(pick) for pick in plain.picks] == [told(pick) for pick in rolled.picks]
    assert len(plain.picks) >= 4


def test_nothing_on_the_belt_is_a_run_too() -> None:
    run = belt([], 5).run(Lookahead())
    assert (run.picks, run.parts, run.home) == ((), (), None)
    assert run.end_s > run.start_s


def test_while_the_belt_stands_parts_in_the_window_are_still_picked() -> None:
    laid = [Laid(240.0, -430.0), Laid(290.0, -440.0), Laid(340.0, -450.0)]
    run = belt(laid, 30, lambda t: np.where((t > 3.9) & (t < 20), 0.0, 100.0)).run(Lookahead())
    during = [pick for pick in run.picks if 4.2 < pick.cycle.grasp_start_s < 20]
    assert len(during) >= 2
    assert len(run.picks) == 3


def test_a_turned_cell_picks_the_same() -> None:
    """Everything turned by a right angle: the same parts at the same times."""
    laid = scattered(22, 6, 90)
    turned = [replace(part, x_mm=-part.y_mm, y_mm=part.x_mm, yaw_deg=part.yaw_deg + 90) for part in laid]
    place = {**ENDLESS[0], "origin_mm": [-260.0, -60.0, -40.0], "yaw_deg": 90.0}
    one = belt(laid, 16, 100.0, places=ENDLESS).run(Arrival())
    other = belt(turned, 16, 100.0, belt__heading_deg=180.0, arm__base_yaw_deg=90.0, places=[place]).run(Arrival())
    assert len(one.picks) >= 3
    assert [pick.part.number for pick in one.picks] == [pick.part.number for pick in other.picks]
    ends = [[pick.cycle.release_end_s for pick in run.picks] for run in (one, other)]
    assert ends[0] == pytest.approx(ends[1], abs=1e-5)
