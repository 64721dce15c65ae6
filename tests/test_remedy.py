"""Remedies: with exactly what the sentence names changed, and nothing else, the part is picked."""

import re
from dataclasses import replace

import pytest
from some_arms import PLAIN
from some_streams import Laid, Stream, belt, tray

from pipeline.grasp import Refusal
from pipeline.policy import Arrival
from pipeline.remedy import remedies, with_remedies
from pipeline.remedy.least import first, least, with_value
from pipeline.remedy.remedies import NOT_LOOKED_FOR

BIN = {**PLAIN["places"][0], "endless": True, "any_yaw": True}
AIM = {"places": [BIN]}
POST = {"name": "post", "polygon_mm": [[150, 90], [190, 90], [190, 110], [150, 110]], "top_mm": 300.0}


def remedy_of(stream: Stream, number: int = 1) -> str | None:
    return remedies(stream.setting(), stream.run(Arrival()))[number]


def number_in(sentence: str | None, pattern: str) -> float:
    found = re.search(pattern, sentence or "")
    assert found, sentence
    return float(found[1])


def missed(stream: Stream) -> list[int]:
    run = stream.run(Arrival())
    return [part.number for part, fate in zip(run.parts, run.fates, strict=True) if fate is not None]


def with_more(stream: Stream, **changes: object) -> Stream:
    return replace(stream, changes={**stream.changes, **changes})


def one(x_mm: float, yaw_deg: float = 0.0, seconds: float = 14.0, **changes: object) -> Stream:
    return belt([Laid(x_mm, -450.0, yaw_deg)], seconds, 70.0, **{**AIM, **changes})


@pytest.mark.parametrize(("joint", "end", "limits", "yaw_deg"), [
    ("j4", "max", {"arm__j4__min": -20.0, "arm__j4__max": 20.0}, -100.0),
    ("j4", "min", {"arm__j4__min": -20.0, "arm__j4__max": 20.0}, 120.0),
    ("j1", "max", {"arm__j1__max": 50.0, "arm__j2__max": 5.0, "arm__home": [0.0, -90.0, 20.0, 0.0],
                   "belt__window_mm": [100.0, 150.0], "places": [{**BIN, "origin_mm": [200.0, -200.0, -40.0]}]}, 0.0),
    ("j3", "max", {"arm__j3__max": 140.0}, 0.0),
])  # fmt: skip
def test_the_limit_that_would_do_does(joint: str, end: str, limits: dict[str, object], yaw_deg: float) -> None:
    """And one step short of it the part is missed."""
    stream = one(300.0, yaw_deg, **limits)
    assert missed(stream) == [1]
    told = remedy_of(stream)
    limit = number_in(told, rf"a {joint.upper()} range {'to' if end == 'max' else 'from'} (-?[\d.]+) (deg|mm) would do")
    assert missed(with_more(stream, **{f"arm__{joint}__{end}": limit})) == []
    short = limit - 0.1 if end == "max" else limit + 0.1
    assert missed(with_more(stream, **{f"arm__{joint}__{end}": short})) == [1]


def test_the_nearer_base_does() -> None:
    stream = one(470.0)
    by = number_in(remedy_of(stream), r"the base ([\d.]+) mm nearer to the belt would do")
    assert missed(with_more(stream, arm__base_mm=[by, 0.0, 0.0])) == []
    assert missed(with_more(stream, arm__base_mm=[by - 1.0, 0.0, 0.0])) == [1]


def test_the_nearer_base_does_at_a_tray() -> None:
    stream = tray([Laid(350.0, 350.0)], 1, **AIM)
    by = number_in(remedy_of(stream), r"the base ([\d.]+) mm nearer to the part would do")
    assert missed(with_more(stream, arm__base_mm=[by * 2**-0.5, by * 2**-0.5, 0.0])) == []


def test_the_window_that_begins_sooner_does() -> None:
    stream = one(425.0, belt__window_mm=[180.0, 240.0])
    edge = number_in(remedy_of(stream), r"a window that begins [\d.]+ mm sooner, at (-?[\d.]+) mm, would do")
    assert missed(with_more(stream, belt__window_mm=[edge, 240.0])) == []
    assert missed(with_more(stream, belt__window_mm=[edge + 1.0, 240.0])) == [1]


def test_the_window_that_ends_later_does_for_a_part_that_was_too_late() -> None:
    laid = [Laid(270.0, -450.0), Laid(330.0, -452.0)]
    stream = belt(laid, 14, 150.0, **AIM, belt__window_mm=[-100.0, 0.0])
    (lost,) = missed(stream)
    edge = number_in(remedy_of(stream, lost), r"a window that ends [\d.]+ mm later, at (-?[\d.]+) mm, would do")
    assert missed(with_more(stream, belt__window_mm=[-100.0, edge])) == []


def test_a_part_is_told_apart_that_another_order_would_have_saved() -> None:
    """Here one that was picked, in truth, and is said to have been missed."""
    laid = [Laid(280.0, -450.0), Laid(300.0, -480.0)]
    stream = belt(laid, 14, 100.0, **AIM)
    run = stream.run(Arrival())
    assert missed(stream) == []
    setting = stream.setting()
    lost = replace(run, picks=run.picks[:1], fates=(run.fates[0], Refusal("too_late", "left the window")))
    assert remedies(setting, lost)[2] == "another order would do: picked first, at no cost to the others"


def test_a_part_that_only_wants_time_is_told_nothing_of_reach() -> None:
    """An arm with nothing else to do would have had it: no window or base is to blame, whatever reason is given."""
    stream = belt([Laid(280.0, -450.0), Laid(320.0, -452.0), Laid(240.0, -452.0)], 14, 300.0, **AIM,
                  belt__window_mm=[-100.0, 20.0])
    run = stream.run(Arrival())
    late = [part.number for part, fate in zip(run.parts, run.fates, strict=True) if fate is not None]
    assert late
    for reason in ("too_late", "out_of_reach"):
        fates = tuple(fate and Refusal(reason, "") for fate in run.fates)
        told = remedies(stream.setting(), replace(run, fates=fates))
        assert [told[number] for number in late] == [None] * len(late)


def test_the_keep_out_that_is_lower_or_moved_does() -> None:
    stream = tray([Laid(170.0, 100.0)], 1, **AIM, keepouts=[POST], arm__link_radius_mm=0.0)
    told = remedy_of(stream)
    found = re.search(r"post ([\d.]+) mm further to ([+-])([xy]) would do", told or "")
    assert found, told
    by = float(found[1]) * (1 if found[2] == "+" else -1)
    moved = [[x + by * (found[3] == "x"), y + by * (found[3] == "y")] for x, y in POST["polygon_mm"]]
    assert missed(with_more(stream, keepouts=[{**POST, "polygon_mm": moved}])) == []
    low = with_more(stream, keepouts=[{**POST, "top_mm": -40.0}])
    top = number_in(remedy_of(low), r"post no higher than (-?[\d.]+) mm would do")
    assert missed(with_more(low, keepouts=[{**POST, "top_mm": top}])) == []


def test_the_part_that_would_have_to_be_gone_is_named() -> None:
    """One that can never go, since it lies on its wrong side."""
    laid = [Laid(300.0, -450.0), Laid(322.0, -450.0, side="down")]
    stream = belt(laid, 14, 70.0, **AIM, parts__lever__outline_radius_mm=12.0)
    run = stream.run(Arrival())
    number = next(part.number for part, fate in zip(run.parts, run.fates, strict=True)
                  if fate and fate.reason == "no_room")
    gone = number_in(remedies(stream.setting(), run)[number], r"with part (\d+) gone it could be gripped")
    assert run.parts[int(gone) - 1].side == "down"
    assert missed(replace(stream, laid=stream.laid[:1])) == []


def test_a_ring_of_parts_is_named() -> None:
    """Each has its jaws' room taken by the other, either way round."""
    laid = [Laid(300.0, -450.0), Laid(321.0, -450.0, 180.0)]
    stream = belt(laid, 14, 70.0, **AIM, parts__lever__outline_radius_mm=12.0)
    told = remedies(stream.setting(), stream.run(Arrival()))
    assert set(told) == {1, 2}
    for number, other in ((1, 2), (2, 1)):
        assert told[number] == f"parts 1 and 2 block one another; with part {other} gone it could be gripped"


def test_the_row_of_slots_that_would_do_does() -> None:
    laid = [Laid(280.0, -450.0 - 100 * k) for k in range(4)]
    place = {"name": "tray", "origin_mm": [-60.0, 260.0, -40.0], "columns": 1, "rows": 3, "pitch_mm": [40.0, 40.0]}
    stream = belt(laid, 18, 70.0, places=[place])
    (lost,) = missed(stream)
    assert remedy_of(stream, lost) == "1 more row of slots in tray would do"
    assert missed(with_more(stream, places=[{**place, "rows": 4}])) == []


def test_nothing_is_told_where_one_number_would_not_do() -> None:
    stream = belt([Laid(280.0, -450.0, side="down"), Laid(280.0, -550.0, kind="")], 14, 70.0)
    assert set(remedies(stream.setting(), stream.run(Arrival())).values()) == {None}


def test_what_was_not_looked_for_says_so() -> None:
    """The bound is one of work, not of time: the same run is told the same."""
    stream = belt([Laid(470.0, -450.0 - 100 * k) for k in range(3)], 16, 70.0)
    setting, run = stream.setting(), stream.run(Arrival())
    assert list(remedies(setting, run, most_parts=2).values()).count(NOT_LOOKED_FOR) == 1
    assert list(remedies(setting, run, most_cycles=0).values()).count(NOT_LOOKED_FOR) == 3
    assert remedies(setting, run) == remedies(setting, run)


def test_the_remedy_stands_beside_the_reason() -> None:
    stream = one(470.0)
    (fate,) = with_remedies(stream.setting(), stream.run(Arrival())).fates
    assert fate is not None
    assert fate.told == f"{fate.detail}; {fate.remedy}"
    assert "nearer to the belt" in fate.told


def test_the_least_change_is_found() -> None:
    assert least(lambda by: by >= 13.05, 60.0, 0.1) == pytest.approx(13.1)
    assert least(lambda by: by >= 61.0, 60.0, 1.0) is None
    assert first(lambda by: 13.5 <= by <= 40.0, 256.0, 1.0) == 14.0
    assert first(lambda by: False, 256.0, 1.0) is None


def test_one_value_is_changed_and_no_other() -> None:
    cell = one(300.0, keepouts=[POST, POST]).cell
    changed = with_value(cell, ("keepouts", 1, "top_mm"), 7.0)
    assert (changed.keepouts[0], changed.keepouts[1].top_mm) == (cell.keepouts[0], 7.0)
    assert with_value(changed, ("keepouts", 1, "top_mm"), 300.0) == cell
