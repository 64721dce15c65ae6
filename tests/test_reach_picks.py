"""A run on the reach map: picks where they were gripped, misses where they left, on ground the arm can reach."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.collections import PathCollection
from some_pages import Made, plain
from some_streams import scattered, tray

from pipeline.page.reach import Sheet, reach
from pipeline.plots.reach import plot_reach_picks
from pipeline.policy import Arrival
from pipeline.reach import Reacher
from pipeline.reach_picks import PicksOnReach, picks_on_reach


@pytest.fixture(scope="module")
def one(tmp_path_factory: pytest.TempPathFactory) -> Made:
    return plain(tmp_path_factory.mktemp("reach"))


@pytest.fixture(scope="module")
def over(one: Made) -> PicksOnReach:
    return picks_on_reach(one.setting, one.run)


def test_each_pick_stands_where_the_tip_was(one: Made, over: PicksOnReach) -> None:
    """Against the arm's forward kinematics at the joints of the grip."""
    joints = [one.run.mover.joints(pick.cycle, np.array([pick.cycle.grasp_start_s]))[0] for pick in one.run.picks]
    tips = one.run.mover.arm.forward(np.array(joints))
    assert over.picks_mm == pytest.approx(tips[:, :2], abs=0.05)
    bent = one.run.mover.arm.sense[1] * np.array(joints)[:, 1]
    assert over.elbows.tolist() == np.where(bent > 0, 0, 1).tolist()


def test_picks_stand_on_ground_that_can_be_gripped(over: PicksOnReach) -> None:
    """The nearest point of the map says so, for the elbow that was used."""
    apart = np.linalg.norm(over.picks_mm[:, None] - over.spots.tip_mm[:, :2], axis=-1)
    assert (apart.min(axis=1) < 15.0).all()
    assert (over.spots.share[apart.argmin(axis=1), over.elbows] > 0).all()


def test_misses_stand_at_the_end_of_the_window_in_their_lanes(one: Made, over: PicksOnReach) -> None:
    reacher = Reacher(one.setting.cell)
    belt = one.setting.cell.belt
    assert belt
    assert belt.window_mm
    assert len(over.missed) == sum(fate is not None for fate in one.run.fates) > 0
    assert over.missed_mm @ reacher.along == pytest.approx(belt.window_mm[1])
    lanes = np.array([one.run.parts[k].xy_mm @ reacher.across for k in over.missed])
    assert over.missed_mm @ reacher.across == pytest.approx(lanes)


def test_on_a_tray_what_was_missed_stands_where_it_lay() -> None:
    stream = tray([*scattered(3, 5, 40.0)], 2)
    setting = stream.setting(least_score=1.0)
    over = picks_on_reach(setting, stream.run(Arrival()))
    assert len(over.picks_mm) + len(over.missed) == len(setting.parts)
    for k, at in zip(over.missed, over.missed_mm, strict=True):
        assert at.tolist() == setting.parts[k].xy_mm.tolist()


def test_a_run_of_nothing_has_a_map(one: Made) -> None:
    setting = replace(one.setting, parts=())
    over = picks_on_reach(setting, replace(one.run, parts=(), picks=(), fates=()))
    assert len(over.spots) > 100
    assert len(over.picks_mm) == len(over.missed) == 0


def test_the_plot_shows_every_pick_and_every_miss(one: Made, over: PicksOnReach) -> None:
    ax = plot_reach_picks(over, one.setting)
    drawn = [c for c in ax.collections if isinstance(c, PathCollection) and "ed, " in str(c.get_label())]
    assert sum(len(c.get_offsets()) for c in drawn) == len(over.picks_mm) + len(over.missed)


def test_the_page_shows_every_pick_and_every_miss(one: Made, over: PicksOnReach) -> None:
    told = reach(one.subject)
    assert told.count("<title>pick ") == len(over.picks_mm)
    assert told.count("<title>part ") == len(over.missed)
    assert len(told) < 60_000


@settings(max_examples=20, deadline=None)
@given(turn=st.floats(-180, 180))
def test_tiles_cover_the_map_whichever_way_the_belt_runs(one: Made, over: PicksOnReach, turn: float) -> None:
    """The area drawn is that of the map, to the rounding of its corners."""
    angle = np.radians(turn)
    rotation = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])
    spots = replace(over.spots, tip_mm=np.column_stack([over.spots.tip_mm[:, :2] @ rotation, over.spots.tip_mm[:, 2]]))
    sheet = Sheet(one.subject, replace(over, spots=spots))
    paths = [part for text in sheet.tiles().split(' d="')[1:] for part in text.split('"')[0].split("Z") if part]
    area = 0.0
    for path in paths:
        x, y = np.array([[float(v) for v in corner.split()] for corner in path[1:].split("L")]).T
        area += abs(float(np.sum(x * np.roll(y, -1) - y * np.roll(x, -1)))) / 2
    points, columns = over.spots.tip_mm[:, :2], len(over.spots) // over.rows
    tile = np.linalg.norm(points[1] - points[0]) * np.linalg.norm(points[columns] - points[0]) * sheet.scale**2
    assert area == pytest.approx(tile * len(over.spots), rel=0.02)
