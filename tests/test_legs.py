"""The planner's times for a leg are those of the motion that is carried out."""

import numpy as np
import pytest
from some_streams import Laid, Stream, belt, scattered, tray

from pipeline.permit import Permit
from pipeline.places import Filling
from pipeline.replay import Setting
from pipeline.scene import Scene, SceneBuilder
from pipeline.watch import Watch

ENDLESS = [{"name": "tray", "origin_mm": [-60.0, 260.0, -40.0], "columns": 3, "rows": 2, "pitch_mm": [40.0, 40.0],
            "endless": True}]  # fmt: skip


def scene_at(stream: Stream, now: float, start: np.ndarray | None = None) -> tuple[Setting, Scene]:
    """What may be chosen at a moment, for an arm at home unless told."""
    setting = stream.setting()
    watch = Watch(setting.cell, setting.recording, setting.belt, setting.parts)
    builder = SceneBuilder(setting.cell, watch, setting.grasping, setting.legs, setting.outlines, 0.5)
    begin = np.array(setting.mover.arm.home) if start is None else start
    scene = builder.scene(now, begin, Filling(tuple(setting.grasping.places.values())), 8, set())
    assert scene is not None
    return setting, scene


def late_ms(setting: Setting, scene: Scene, start: np.ndarray) -> tuple[list[float], int]:
    """By how much the carried out release ends after the planned one, leg by leg, and how many legs are not allowed."""
    permit, late, forbidden = Permit(setting.mover, setting.grasping), [], 0
    finish = scene.choice.legs(False).finish[0, :, 0]
    for node in np.flatnonzero(np.isfinite(finish)):
        _, hold, drop, _ = scene.grasp(int(node))
        from_mm = scene.met_from_mm(int(node))
        met = setting.mover.passes(hold, from_mm) if np.isfinite(from_mm) else -np.inf
        cycle = setting.mover.pick(start, scene.choice.now_s, hold, drop, met)
        if cycle is None or permit.refused(cycle) is not None:
            forbidden += 1
        else:
            late.append(1e3 * (cycle.release_end_s - float(finish[node])))
    return late, forbidden


@pytest.mark.parametrize("changes", [
    {}, {"arm__quill_lead_mm_per_rev": 10.0, "tool__offset_mm": [12.0, 5.0]},
    {"arm__j1__positive": "clockwise", "arm__j4__positive": "counterclockwise"},
])  # fmt: skip
def test_a_planned_leg_takes_as_long_as_the_executed_one(changes: dict[str, object]) -> None:
    """Within 1 ms on a steady belt.

    A lane is held at points 17 mm apart and straight between them in joints: a few legs on fast, bent lanes come out
    1 to 2 ms off. Where a joint limit ends a lane between two points the leg may not be allowed after all.
    """
    late, forbidden = [], 0
    for seed in range(2):
        for speed, now in ((40.0, 9.0), (110.0, 6.0), (150.0, 5.0)):
            stream = belt(scattered(seed, 14, 60), 15, speed, places=ENDLESS, **changes)
            more, barred = late_ms(*scene_at(stream, now), start=np.array(stream.setting().mover.arm.home))
            late, forbidden = late + more, forbidden + barred
    assert len(late) > 60
    assert np.abs(late).max() < 2.0
    assert np.mean(np.abs(late) < 1.0) > 0.95
    assert forbidden < 0.1 * len(late)


def test_legs_to_standing_parts_are_exact() -> None:
    """On a tray nothing is between points."""
    setting, scene = scene_at(tray([Laid(220.0 + 30 * k, 40.0 * k - 60, 40.0 * k) for k in range(4)], 1), 1.0)
    late, forbidden = late_ms(setting, scene, np.array(setting.mover.arm.home))
    assert len(late) >= 12
    assert np.abs(late).max() < 1.0
    assert forbidden == 0


def test_legs_from_a_slot_are_those_of_an_arm_that_stands_there() -> None:
    """Later rows of the table: begun where another grasp ends, at another time."""
    stream = belt(scattered(3, 14, 60), 15, 100.0, places=ENDLESS)
    setting, scene = scene_at(stream, 6.0)
    times = scene.choice.legs(True)
    b = int(np.flatnonzero(np.isfinite(times.finish[0, :, 0]))[0])
    slot, at = scene.choice.nodes.drop[b], 20
    planned = times.finish[times.start_of[b], :, at]
    assert times.finish.shape == (times.start_of.max() + 1, len(scene.choice.nodes), len(times.start_s))
    checked = 0
    for node in np.flatnonzero(np.isfinite(planned)):
        _, hold, drop, _ = scene.grasp(int(node))
        if np.isfinite(scene.met_from_mm(int(node))):
            continue
        cycle = setting.mover.pick(slot, float(times.start_s[at]), hold, drop)
        assert cycle is not None
        assert 1e3 * (cycle.release_end_s - float(planned[node])) == pytest.approx(0, abs=2.0)
        checked += 1
    assert checked >= 4


def test_beginning_later_never_ends_sooner_than_waiting_would() -> None:
    """First in, first out: what the look-ahead builds on."""
    _, scene = scene_at(belt(scattered(4, 14, 60), 15, 100.0, places=ENDLESS), 6.0)
    times = scene.choice.legs(True)
    finish = times.finish
    both = np.isfinite(finish[:, :, :-1]) & np.isfinite(finish[:, :, 1:])
    assert both.any()
    assert (finish[:, :, 1:][both] > finish[:, :, :-1][both] - 2e-3).all()
    assert (times.contact[np.isfinite(finish)] < finish[np.isfinite(finish)]).all()


def test_a_part_beyond_its_window_has_no_leg() -> None:
    """Neither one that has passed, nor one on a belt that stands still before the window."""
    lane = [Laid(280.0, -450.0)]
    _, scene = scene_at(belt(lane, 15, 100.0), 5.0)
    assert np.isfinite(scene.choice.legs(False).finish).any()
    _, stopped = scene_at(belt(lane, 15, lambda t: np.where(t < 2.0, 100.0, 0.0)), 5.0)
    assert np.isinf(stopped.choice.legs(False).finish).all()
    _, gone = scene_at(belt(lane, 15, 100.0), 5.98)
    assert np.isinf(gone.choice.legs(False).finish).all()
