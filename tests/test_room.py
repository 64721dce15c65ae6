"""Room between shapes against shapely, who blocks whom, and keep-outs."""

import networkx as nx
import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from some_arms import changed

from pipeline.arm import Arm
from pipeline.room import JAW, LINK_1, LINK_2, TIP, Keepouts, rings, who_blocks_whom
from pipeline.shapes import DEPTH_STEP_MM, Shapes, gaps

SEEDS = st.integers(0, 100_000)
JAWS = [[[18, -6], [24, -6], [24, 6], [18, 6]], [[-24, -6], [-18, -6], [-18, 6], [-24, 6]]]


def star(rng: np.random.Generator, corners: int, radius: float) -> np.ndarray:
    """A simple polygon, mostly not convex, with the origin inside or near."""
    angle = np.sort(rng.uniform(0, 2 * np.pi, corners))
    return radius * rng.uniform(0.3, 1, corners)[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1)


def lying(points: np.ndarray, pose: np.ndarray) -> shapely.Polygon:
    c, s = np.cos(pose[2]), np.sin(pose[2])
    return shapely.Polygon(np.asarray(points) @ np.array([[c, s], [-s, c]]) + pose[:2])


@settings(max_examples=60)
@given(SEEDS)
def test_gaps_agree_with_shapely(seed: int) -> None:
    """Distances apart are exact, an overlap is one to both, and is as deep as the deepest point of either outline."""
    rng = np.random.default_rng(seed)
    jaws, outline = [star(rng, 7, 15), star(rng, 4, 10)], star(rng, 12, 20)
    tips, poses = (np.column_stack([rng.uniform(-25, 25, (4, 2)), rng.uniform(-9, 9, 4)]) for _ in range(2))
    room, nearest = gaps(Shapes.of(jaws), tips, Shapes.of([outline]), np.zeros(4, int), poses, near_mm=1e3)
    for g, k in np.ndindex(room.shape):
        there = lying(outline, poses[k])
        feet = [lying(jaw, tips[g]) for jaw in jaws]
        if room[g, k] > 0:
            assert room[g, k] == pytest.approx(min(foot.distance(there) for foot in feet), abs=1e-9)
        else:
            depths = [deepest(foot, there) for foot in feet]
            assert max(depths) >= 0
            assert -room[g, k] == pytest.approx(max(depths), abs=0.1 + DEPTH_STEP_MM)  # shapely's sampled every 0.1 mm
            assert depths[nearest[g, k]] == pytest.approx(max(depths), abs=0.1 + DEPTH_STEP_MM)


def deepest(first: shapely.Polygon, second: shapely.Polygon) -> float:
    """Depth of the deepest boundary point of either inside the other, sampled; -1: they do not meet."""
    if not first.intersects(second):
        return -1.0
    depth = 0.0
    for edge, area in ((first.exterior, second), (second.exterior, first)):
        points = shapely.points(shapely.get_coordinates(edge.segmentize(0.2)))
        inside = points[shapely.contains_properly(area, points)]
        depth = max(depth, float(shapely.distance(inside, area.exterior).max(initial=0.0)))
    return depth


@given(SEEDS)
def test_the_gap_to_a_disc_is_the_distance_to_its_centre_less_the_radius(seed: int) -> None:
    rng = np.random.default_rng(seed)
    jaw = star(rng, 6, 12)
    pose = np.array([[*rng.uniform(-30, 30, 2), 0.0]])
    room, _ = gaps(Shapes.of([jaw]), np.zeros((1, 3)), Shapes.of([9.0]), [0], pose, near_mm=1e3)
    foot, centre = shapely.Polygon(jaw), shapely.Point(pose[0, :2])
    signed = -foot.exterior.distance(centre) if foot.contains(centre) else foot.distance(centre)
    assert room[0, 0] == pytest.approx(signed - 9.0, abs=1e-9)


@given(SEEDS, st.floats(-np.pi, np.pi), st.floats(-500, 500))
def test_the_gap_stays_when_everything_is_moved_and_turned(seed: int, turn: float, shift: float) -> None:
    rng = np.random.default_rng(seed)
    jaws, outlines = Shapes.of([star(rng, 5, 10)]), Shapes.of([star(rng, 9, 15)])
    tip, pose = rng.uniform(-12, 12, (2, 1, 3))
    c, s = np.cos(turn), np.sin(turn)

    def moved(at: np.ndarray) -> np.ndarray:
        return np.column_stack([at[:, :2] @ np.array([[c, s], [-s, c]]) + shift, at[:, 2] + turn])

    before, after = (gaps(jaws, a, outlines, [0], b)[0][0, 0] for a, b in ((tip, pose), (moved(tip), moved(pose))))
    assert after == pytest.approx(before, abs=1e-6 if before > 0 else DEPTH_STEP_MM)


def test_a_far_gap_is_never_given_too_large() -> None:
    rng = np.random.default_rng(0)
    jaws, outlines = Shapes.of(JAWS), Shapes.of([star(rng, 12, 20), 12.0])
    poses = np.column_stack([rng.uniform(-100, 100, (40, 2)), rng.uniform(-3, 3, 40)])
    quick, exact = (gaps(jaws, poses, outlines, np.arange(40) % 2, poses, near_mm=near)[0] for near in (2.0, 1e4))
    assert (quick <= exact + 1e-9).all()
    assert quick[exact < 2] == pytest.approx(exact[exact < 2])


def test_a_part_on_its_wrong_side_is_turned_over_about_its_x_axis() -> None:
    outline = Shapes.of([[[0, 0], [30, 0], [30, 10]]])
    tip = [[25.0, 9.0, 0.0]]
    jaw = Shapes.of([[[-1, -1], [1, -1], [1, 1], [-1, 1]]])
    assert gaps(jaw, tip, outline, [0], np.zeros((1, 3)))[0] < 2
    assert gaps(jaw, tip, outline.turned_over(), [0], np.zeros((1, 3)))[0] == pytest.approx(8.0)


def test_without_jaws_there_is_room_everywhere() -> None:
    room, _ = gaps(Shapes.of([]), np.zeros((2, 3)), Shapes.of([5.0]), [0], np.zeros((1, 3)))
    assert np.isinf(room).all()


def test_a_kind_without_an_outline_is_refused() -> None:
    with pytest.raises(IndexError):
        gaps(Shapes.of(JAWS), np.zeros((1, 3)), Shapes.of([5.0]), [1], np.zeros((1, 3)))


def blocking(parts: dict[int, tuple[float, float, float]], turns: tuple[float, ...] = (0.0,)) -> "nx.DiGraph[int]":
    """Who blocks whom among discs of 12 mm at poses, each gripped at every turn."""
    numbers, poses = list(parts), np.array(list(parts.values()), dtype=float)
    tips = np.repeat(poses, len(turns), axis=0)
    tips[:, 2] += np.tile(turns, len(poses))
    room, nearest = gaps(Shapes.of(JAWS), tips, Shapes.of([12.0]), np.zeros(len(poses), int), poses)
    return who_blocks_whom(room, nearest, list(np.repeat(numbers, len(turns))), numbers)


def test_two_parts_side_by_side_wait_for_each_other() -> None:
    graph = blocking({7: (0, 0, 0), 4: (30, 0, 0), 9: (0, 100, 0)})
    assert sorted(graph.edges) == [(4, 7), (7, 4)]
    assert graph.edges[4, 7] == {"overlap_mm": pytest.approx(12 - (30 - 24)), "jaw": 0, "grasp": 0}
    assert rings(graph) == [(4, 7)]
    assert graph.nodes[9]["free"]


def test_another_turn_of_the_jaws_frees_them() -> None:
    graph = blocking({7: (0, 0, 0), 4: (30, 0, 0)}, turns=(0.0, np.pi / 2))
    assert not graph.edges
    assert rings(graph) == []


def test_a_part_is_free_once_its_neighbour_is_gone() -> None:
    """4 stands across the row, so it can go first; then 7 can."""
    graph = blocking({7: (0, 0, 0), 4: (30, 0, np.pi / 2)})
    assert list(graph.edges) == [(4, 7)]
    assert graph.nodes[4]["free"]
    assert not graph.nodes[7]["free"]
    assert blocking({7: (0, 0, 0)}).nodes[7]["free"]


def test_three_in_a_ring_are_named_in_order() -> None:
    """Each one's jaws reach the next: 1 waits for 2, 2 for 3, 3 for 1."""
    room = np.array([[9, -1, 9], [9, 9, -2], [-3, 9, 9.0]])
    graph = who_blocks_whom(room, np.zeros((3, 3), int), [1, 2, 3], [1, 2, 3])
    assert sorted(graph.edges) == [(1, 3), (2, 1), (3, 2)]
    assert rings(graph) == [(1, 3, 2)]


def test_a_thing_nobody_recognised_never_goes() -> None:
    """Part 1 has a grasp that meets part 2, which can go, and one that meets the unknown thing 9: it waits for 2."""
    room = np.array([[5, -4, 5], [5, 5, -1], [5, 5, 5.0]])
    graph = who_blocks_whom(room, np.zeros((3, 3), int), [1, 1, 2], [1, 2, 9])
    assert list(graph.edges) == [(2, 1)]
    assert not graph.nodes[9]["free"]


def test_the_margin_asked_for_counts() -> None:
    room, jaw = np.array([[5.0, 0.4]]), np.zeros((1, 2), int)
    assert not who_blocks_whom(room, jaw, [1], [1, 2]).edges
    graph = who_blocks_whom(room, jaw, [1], [1, 2], least_mm=1.0)
    assert graph.edges[2, 1]["overlap_mm"] == pytest.approx(0.6)


POST = {"name": "post", "polygon_mm": [[300, 100], [340, 100], [340, 140], [300, 140]], "top_mm": 400.0}


def keepouts(**values: object) -> tuple[Arm, Keepouts]:
    cell = changed(**{"keepouts": [POST]} | values)
    arm = Arm(cell.arm, cell.tool)
    return arm, Keepouts(cell.keepouts, arm, Shapes.of(cell.tool.footprint_mm))


@settings(max_examples=40)
@given(SEEDS)
def test_keepouts_agree_with_shapely(seed: int) -> None:
    """Links as capsules, the tool by its tip and jaws, each where it is not above the top."""
    rng = np.random.default_rng(seed)
    top = float(rng.uniform(-60, 250))
    arm, kept = keepouts(keepouts=[POST | {"polygon_mm": (star(rng, 6, 60) + rng.uniform(-300, 300, 2)).tolist(),
                                            "top_mm": top}])  # fmt: skip
    area = shapely.Polygon(kept._areas.points)
    joints = rng.uniform(arm.limits.lower, arm.limits.upper, (20, 4))
    near = kept.near(joints)
    for k, q in enumerate(joints):
        shoulder, elbow, quill = arm.pivots(q)
        tip = arm.forward(q)
        bodies = {}
        if top >= 160:
            bodies = {LINK_1: shapely.LineString([shoulder, elbow]).distance(area) - 40,
                      LINK_2: shapely.LineString([elbow, quill]).distance(area) - 40}
        if tip[2] < top:
            bodies[TIP] = shapely.Point(tip[:2]).distance(area)
            bodies |= {JAW + n: lying(jaw, tip[[0, 1, 3]]).distance(area) for n, jaw in enumerate(JAWS)}
        least = min(bodies.values(), default=np.inf)
        if least > 0:
            assert near.gap_mm[k] == pytest.approx(least, abs=1e-9)
            assert near.keepout[k] == (0 if bodies else -1)
            if bodies:
                assert bodies[near.body[k]] == pytest.approx(least)
        else:
            assert near.gap_mm[k] <= least + 1e-9


def over_the_post(arm: Arm, z: float) -> np.ndarray:
    return arm.inverse([320.0, 120.0, z, 0.0])


def test_the_height_of_a_keepout_matters() -> None:
    """Below it nothing may stand there; above its top the tool may, and above flange height the links too."""
    arm, kept = keepouts()
    assert (kept.clearance(over_the_post(arm, 0.0)) < -40).all()
    arm, low = keepouts(keepouts=[POST | {"top_mm": 100.0}])
    assert (low.clearance(over_the_post(arm, 0.0)) < 0).all()
    arm, lower = keepouts(keepouts=[POST | {"top_mm": -10.0}])
    assert np.isinf(lower.clearance(over_the_post(arm, 0.0))).all()


def test_the_width_of_the_links_matters() -> None:
    """A radius of 0 leaves them unchecked."""
    arm, kept = keepouts()
    beside = arm.inverse([380.0, 220.0, 0.0, 0.0])
    wide, unchecked = keepouts(arm__link_radius_mm=80.0)[1], keepouts(arm__link_radius_mm=0.0)[1]
    assert (wide.clearance(beside) < kept.clearance(beside)).any()
    assert (unchecked.near(beside).body >= TIP).all()


def test_no_posture_is_never_clear() -> None:
    arm, kept = keepouts()
    assert not (kept.clearance(arm.inverse([900.0, 0.0, 0.0, 0.0])) >= 0).any()


def test_without_keepouts_everything_is_clear() -> None:
    arm, kept = keepouts(keepouts=[])
    assert np.isinf(kept.clearance(np.tile(arm.home, (3, 1)))).all()
