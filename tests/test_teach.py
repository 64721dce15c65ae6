import contextlib
import json

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scenes import HOLE, PLATE, Laid, Pinhole, Scene, disc
from scipy.spatial import cKDTree

from cameras.chain import even, snapped
from cameras.faults import InputFault
from cameras.model import Model, load_model
from cameras.symmetry import turns_seen, voted_plan
from cameras.teach import Taught, teach

POSE = (12.0, -8.0, 0.7)
SQUARE = np.array([[-11.0, -11.0], [11.0, -11.0], [11.0, 11.0], [-11.0, 11.0]])


def taught(outline, turns=1, hole=None, level=170.0, belt=60.0, pose=POSE, height=5.0) -> Model:
    scene = Scene([Laid(outline, pose, height, level, hole)], belt)
    return teach(scene.image(), scene.camera, 0.0, Taught("part", height, turns, pose))


@pytest.fixture(scope="module")
def plate() -> Model:
    return taught(PLATE, hole=HOLE)


def apart(model: Model, outline) -> np.ndarray:
    """Distances in mm from the taught outline's points to the true one."""
    return cKDTree(even(outline, 0.05)).query(model.outline.points_mm)[0]


@pytest.mark.parametrize(("level", "belt"), [(170.0, 60.0), (45.0, 140.0), (95.0, 60.0)])
def test_outline_is_the_parts_own_whether_lighter_or_darker_than_the_belt(level, belt):
    missed = apart(taught(PLATE, level=level, belt=belt), PLATE)
    assert np.median(missed) < 0.15
    assert np.percentile(missed, 95) < 0.5


def test_grip_frame_is_where_the_tool_gripped(plate):
    """The taught hole lies where the drawn one does, seen from the tool pose."""
    rim = max(plate.inner, key=lambda one: len(one.steps)).points_mm
    assert np.linalg.norm(0.5 * (rim.min(axis=0) + rim.max(axis=0)) - HOLE[0]) < 0.2
    assert abs(float(np.mean(np.linalg.norm(rim - HOLE[0], axis=1))) - HOLE[1]) < 0.15


@pytest.mark.parametrize(("outline", "turns"), [(PLATE, 1), (SQUARE, 4), (disc(12.0), 0)])
def test_symmetry_is_proposed_from_the_outline(outline, turns):
    assert turns_seen(even(outline, 0.4)) == turns
    assert taught(outline, turns).proposed_turns == turns


def lobed(waves_mm: dict[int, float], shaded_deg: tuple[float, float] = (0.0, 0.0)) -> np.ndarray:
    """A circle of 14 mm with waves, so many a turn; between two angles its shadow is taken for it."""
    angle = np.linspace(0.0, 2.0 * np.pi, 720, endpoint=False)
    radius = 14.0 + sum(size * np.cos(count * angle + 0.3) for count, size in waves_mm.items())
    shaded = (angle > np.radians(shaded_deg[0])) & (angle < np.radians(shaded_deg[1]))
    radius = np.where(shaded, 17.5, radius)
    return radius[:, None] * np.column_stack([np.cos(angle), np.sin(angle)])


@pytest.mark.parametrize(
    ("outline", "turns"),
    [
        (lobed({6: 2.0}, (200.0, 260.0)), 6),  # spoilt on a sixth of it
        (lobed({5: 2.0}), 5),
        (lobed({2: 0.2, 3: 0.3, 5: 0.2}), 0),  # a rim that the light spoils
        (lobed({2: 1.5}), 2),  # an oval
        (SQUARE * np.array([1.0, 0.85]), 2),  # nearly a square
        (PLATE, 1),
        (np.array([[-20, -8], [20, -8], [20, 8], [8, 8], [8, 2], [-20, 2]], float), 1),
    ],
)
def test_symmetry_is_what_most_of_the_outline_shows(outline, turns):
    assert turns_seen(even(outline, 0.4)) == turns


def test_sides_are_told_by_outline_or_by_inner_edges_or_not_at_all(plate):
    assert plate.side_told
    assert not plate.mirrored_alike
    bare, holed = taught(disc(12.0), 0), taught(disc(12.0), 0, (np.zeros(2), 4.0))
    assert bare.mirrored_alike
    assert not bare.side_told
    assert holed.side_told


def test_a_shadow_is_no_part_of_a_symmetric_outline():
    pose = (0.0, 0.0, 0.0)
    scene = Scene([Laid(disc(14.0) * [0.8, 1.0], (7.0, 4.0, 0.3), 0.0, 30.0), Laid(disc(12.0), pose, 6.0)], 90.0)
    model = teach(scene.image(), scene.camera, 0.0, Taught("disc", 6.0, 0, pose))
    assert np.percentile(apart(model, disc(12.0)), 90) < 0.4


@pytest.mark.parametrize("pose", [(900.0, 0.0, 0.0), (-80.0, 40.0, 0.0), (-170.0, 0.0, 0.0)])
def test_a_pose_outside_or_over_bare_belt_or_at_a_cut_part_is_a_fault(pose):
    scene = Scene([Laid(PLATE, (40.0, 0.0, 0.3)), Laid(PLATE, (-170.0, 0.0, 0.0))])
    with pytest.raises(InputFault):
        teach(scene.image(), scene.camera, 0.0, Taught("part", 5.0, 1, pose))


@pytest.mark.parametrize("image", [np.zeros((800, 1024), np.uint8), np.full((800, 1024), 255, np.uint8),
                                   np.random.default_rng(1).integers(0, 256, (800, 1024), dtype=np.uint8)])  # fmt: skip
def test_images_of_nothing_are_faults_or_models_but_never_crashes(image):
    for turns in (0, 1, 3):
        with contextlib.suppress(InputFault):
            teach(image, Pinhole(), 0.0, Taught("part", 5.0, turns, (0.0, 0.0, 0.0)))


def test_a_model_is_read_back_as_it_was_written_and_is_small(plate, tmp_path):
    file = tmp_path / "plate.json"
    file.write_text(plate.as_json())
    again = load_model(file)
    assert (again.part, again.turns, len(again.inner)) == (plate.part, plate.turns, len(plate.inner))
    assert file.stat().st_size < 40_000
    assert np.allclose(again.outline.points_mm, plate.outline.points_mm, atol=1e-3)
    with pytest.raises(ValueError, match="read-only"):
        again.outline_mm[0] = 0.0


@pytest.mark.parametrize(("key", "value"), [
    ("format", 2), ("format", None), ("part", ""), ("height_mm", "5"), ("height_mm", -1), ("turns", True),
    ("outline_mm", [[0, 0]]), ("outline_mm", [[0, 0, 0]] * 9), ("outline_mm", [[1e9, 0]] * 9), ("inner", [{}]),
    ("outline", None), ("side_told", 1), ("away", [0.0]), ("yaw_rad", None),
])  # fmt: skip
def test_a_model_with_a_wrong_value_is_refused_in_one_line(plate, tmp_path, key, value):
    file = tmp_path / "plate.json"
    file.write_text(json.dumps({**json.loads(plate.as_json()), key: value}))
    with pytest.raises(InputFault) as caught:
        load_model(file)
    assert str(file) in caught.value.line


@pytest.mark.parametrize("text", ["", "{", "[]", "null", '{"format": NaN}', "[" * 100_000, '{"format":1}'])
def test_what_is_no_model_is_refused(tmp_path, text):
    file = tmp_path / "model.json"
    file.write_text(text)
    with pytest.raises(InputFault):
        load_model(file)


@settings(max_examples=60, deadline=None)
@given(st.binary(max_size=200), st.integers(0, 10_000), st.integers(1, 40))
def test_a_damaged_model_is_refused_or_sound(plate, tmp_path_factory, junk, at, cut):
    """Bytes of a good model replaced by others: InputFault, or a model whose arrays are finite."""
    whole = plate.as_json().encode()
    file = tmp_path_factory.mktemp("models") / "model.json"
    file.write_bytes(whole[:at] + junk + whole[at + cut :])
    try:
        model = load_model(file)
    except InputFault:
        return
    assert np.all(np.isfinite(model.outline_mm))
    assert np.allclose(np.linalg.norm(model.outline.normals, axis=1), 1.0)


def test_an_outline_keeps_to_one_of_two_edges_side_by_side():
    """A bright face, a dark chamfer about it that on one side is hardly darker than the belt."""
    y, x = np.mgrid[:160, :160].astype(float) - 80.0
    radius, belt = np.hypot(x, y), 90.0
    chamfer = np.where(x > 0.0, 30.0, 80.0)
    grey = np.where(radius < 40.0, 200.0, np.where(radius < 44.5, chamfer, belt))
    grey = np.round(cv2.GaussianBlur(grey, (0, 0), 0.8)).astype(np.uint8)
    angle = np.linspace(0.0, 2 * np.pi, 260, endpoint=False)
    around = np.column_stack([np.cos(angle), np.sin(angle)])
    chain = 80.0 + (43.0 + 1.5 * np.sin(3 * angle))[:, None] * around
    pixels, steps = snapped(grey, chain, symmetric=True)
    assert np.abs(np.linalg.norm(pixels - 80.0, axis=1) - 40.0).max() < 1.0
    assert (steps < 0.0).all()


class Above:
    """A frame seen from straight above at 0.5 mm a pixel."""

    def from_pixels(self, pixels, height_mm):
        return (np.asarray(pixels) - 100.0) * 0.5

    def to_pixels(self, points_mm, height_mm):
        return np.asarray(points_mm) / 0.5 + 100.0

    def away(self):
        return np.zeros(2)


def test_a_shadow_beside_a_round_part_is_no_outline():
    """Lines: the part's edge, its hole's, and a shadow's along nearly half of it."""
    lines = np.zeros((200, 200), np.uint8)
    for radius in (40, 12):
        cv2.circle(lines, (100, 100), radius, 255, 1)
    cv2.ellipse(lines, (90, 100), (44, 44), 0.0, 95.0, 265.0, 255, 1)
    plan, _ = voted_plan(lines, np.zeros(2), Above(), 5.0, 0, least_px=0.5 * np.pi * 40**2)
    assert np.abs(np.linalg.norm(plan, axis=1) - 20.0).max() < 1.2
