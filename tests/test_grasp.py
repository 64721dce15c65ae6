"""Grasps: how many ways there are to be on a part, and why there may be none."""

import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from some_arms import changed

from pipeline.arm import Arm
from pipeline.cell import Cell
from pipeline.grasp import FREE_YAWS, Grasping, Holds, Refusal
from pipeline.places import Place

AT = np.array([290.0, 0.0])
STILL = {"belt": None, "tray": {"surface_mm": -50.0}}


def grasping(**changes: object) -> Grasping:
    cell: Cell = changed(**changes)
    return Grasping(cell, Arm(cell.arm, cell.tool), [Place.of(place) for place in cell.places])


def holds(at: np.ndarray = AT, yaw: float = 0.3, **changes: object) -> Holds:
    found = grasping(**changes).holds("lever", at, yaw)
    assert isinstance(found, Holds)
    return found


def refusal(at: np.ndarray = AT, yaw: float = 0.3, **changes: object) -> Refusal:
    found = grasping(**changes).holds("lever", at, yaw)
    assert isinstance(found, Refusal)
    return found


HALF = {"arm__j4__min": -182.0, "arm__j4__max": 182.0, "motion__limit_margin_deg": 1.5}


@pytest.mark.parametrize("symmetry", [1, 2, 3, 6])
def test_each_symmetric_turn_with_both_elbows_and_every_turn_of_j4(symmetry: int) -> None:
    """J4 of one turn, less margins: one way a yaw and elbow; of two turns: two."""
    assert len(holds(parts__lever__symmetry=symmetry, **STILL, **HALF).holds) == 2 * symmetry
    found = holds(parts__lever__symmetry=symmetry, **STILL)
    assert len(found.holds) == 2 * 2 * symmetry
    yaws = {round(float(np.degrees(hold.yaw) % 360), 6) for hold in found.holds}
    assert len(yaws) == symmetry
    assert {round((yaw - np.degrees(0.3)) % (360 / symmetry), 4) % round(360 / symmetry, 4) for yaw in yaws} == {0.0}
    assert sorted(np.bincount(found.elbow)) == [2 * symmetry, 2 * symmetry]


def test_a_round_part_is_tried_all_round() -> None:
    found = holds(parts__lever__symmetry="round", **STILL, **HALF)
    assert len(found.holds) == 2 * FREE_YAWS
    assert np.diff(np.unique(np.round([hold.yaw for hold in found.holds], 9))) == pytest.approx(2 * np.pi / FREE_YAWS)


def test_a_wider_j4_gives_a_third_turn() -> None:
    """Of +-540 degrees each yaw has three ways; each differs by a whole turn and holds the tool alike."""
    found = holds(arm__j4__min=-542.0, arm__j4__max=542.0, **STILL)
    assert len(found.holds) == 6
    arm = Arm(changed().arm, changed().tool)
    for elbow in (0, 1):
        j4 = np.sort(found.joints[found.elbow == elbow, 0, 3])
        assert np.diff(j4) == pytest.approx([2 * np.pi, 2 * np.pi])
    tips = arm.forward(found.joints[:, 0])
    assert tips[:, :3] == pytest.approx(np.tile([*AT, -47.0], (6, 1)), abs=1e-9)
    assert np.sin((tips[:, 3] - 0.3) / 2) == pytest.approx(0, abs=1e-9)


@settings(max_examples=40, deadline=None)
@given(st.floats(180, 380), st.floats(-np.pi, np.pi), st.sampled_from([0.0, 12.0]), st.sampled_from([1, 4, "round"]),
       st.booleans())
def test_what_is_usable_keeps_every_limit_and_holds_the_part(x: float, yaw: float, lead: float, symmetry: int | str,
                                                             aside: bool) -> None:
    changes = {"arm__quill_lead_mm_per_rev": lead, "parts__lever__symmetry": symmetry,
               "tool__offset_mm": [14.0, -6.0] if aside else [0.0, 0.0]}
    one = grasping(**changes)
    found = one.holds("lever", np.array([x, 30.0]), yaw)
    if isinstance(found, Refusal):
        return
    q = found.joints[found.usable]
    assert ((q >= one.lower) & (q <= one.upper)).all()
    bend = np.abs(q[:, 1])
    assert bend.min() >= np.radians(8.0)
    assert bend.max() <= np.radians(172.0)
    for hold, lane, usable in zip(found.holds, found.joints, found.usable, strict=True):
        tips = one.arm.forward(lane[usable])
        assert tips[:, 0] == pytest.approx(hold.at_mm[0], abs=1e-6)
        assert tips[:, 1] == pytest.approx(found.along_mm[usable] - 30.0 + hold.at_mm[1], abs=1e-6)
        assert tips[:, 2] == pytest.approx(-47.0, abs=1e-6)
        assert np.sin((tips[:, 3] - hold.yaw) / 2) == pytest.approx(0, abs=1e-9)
        both = usable[:-1] & usable[1:]
        assert np.abs(np.diff(lane, axis=0)[both]).max(initial=0) < 25, "a joint jumps on the lane"


def test_several_taught_grips_are_all_tried() -> None:
    """Each further grip is a pose of the tool in the taught grip frame, with a height and jaws of its own."""
    grips = [{"offset_mm": [10.0, 0.0], "yaw_deg": 90.0}, {"grasp_mm": 0.0, "footprint_mm": [[[5, 5], [6, 5], [6, 6]]]}]
    changes = {**STILL, **HALF, "parts__lever__grips": grips}
    found = holds(**changes)
    assert np.bincount(found.grip).tolist() == [2, 2, 2]
    tips = found.tips()
    turned = [AT[0] + 10 * np.cos(0.3), AT[1] + 10 * np.sin(0.3), 0.3 + np.pi / 2]
    assert tips[found.grip == 1] == pytest.approx(np.tile(turned, (2, 1)))
    assert {hold.z_mm for hold, grip in zip(found.holds, found.grip, strict=True) if grip == 2} == {-50.0}
    one = grasping(**changes)
    assert len(one.footprint("lever", 2)) == 1
    assert len(one.footprint("lever", 1)) == 2
    pairs = one.pairs("lever", found, "tray", 0)
    height = pairs.drop_pose[:, 2]
    assert set(np.round(height[found.grip[pairs.hold] == 2], 9)) == {-43.0}, "set down as much lower as it was gripped"
    assert set(np.round(height[found.grip[pairs.hold] != 2], 9)) == {-40.0}


def test_the_same_part_stands_in_its_slot_whichever_grip_held_it() -> None:
    """Taking the grip's pose off the tool's at the slot gives the slot."""
    one = grasping(**STILL, parts__lever__grips=[{"offset_mm": [10.0, 4.0], "yaw_deg": 70.0}])
    found = one.holds("lever", AT, 0.3)
    assert isinstance(found, Holds)
    pairs = one.pairs("lever", found, "tray", 4)
    slot = one.places["tray"].slots_mm[4]
    for row, pose in zip(pairs.hold, pairs.drop_pose, strict=True):
        offset, yaw = ([10.0, 4.0], np.radians(70.0)) if found.grip[row] else ([0.0, 0.0], 0.0)
        part = pose[3] - yaw
        c, s = np.cos(part), np.sin(part)
        assert pose[:2] - [c * offset[0] - s * offset[1], s * offset[0] + c * offset[1]] == pytest.approx(slot[:2])
        assert np.sin(part / 2) == pytest.approx(0, abs=1e-9)
    assert one.arm.forward(pairs.drop_joints)[:, :3] == pytest.approx(pairs.drop_pose[:, :3], abs=1e-6)


def test_both_elbows_are_offered_at_the_slot() -> None:
    one = grasping(**STILL, places=[{"name": "tray", "origin_mm": [200.0, 200.0, -40.0]}])
    found = one.holds("lever", AT, 0.3)
    assert isinstance(found, Holds)
    pairs = one.pairs("lever", found, "tray", 0)
    assert set(one.arm.elbow_of(pairs.drop_joints)) == {0, 1}
    inside = (pairs.drop_joints >= one.lower) & (pairs.drop_joints <= one.upper)
    assert inside.all()


@pytest.mark.parametrize(("any_yaw", "symmetry", "yaws"), [(False, 1, 1), (False, 3, 3), (True, 1, FREE_YAWS),
                                                          (False, "round", FREE_YAWS)])
def test_how_a_part_may_stand_in_its_slot(any_yaw: bool, symmetry: int | str, yaws: int) -> None:
    place = {"name": "tray", "origin_mm": [-60.0, 260.0, -40.0], "any_yaw": any_yaw, "yaw_deg": 20.0,
             "slot_yaw_deg": 10.0}
    one = grasping(**STILL, places=[place], parts__lever__symmetry=symmetry)
    poses = one.drops("lever", 0, "tray", 0).poses
    found = np.unique(np.round(np.degrees(poses[:, 3]) % 360, 6))
    assert len(found) == yaws
    assert 30.0 in found


# ---- reasons


def amount(text: str, unit: str) -> list[float]:
    return [float(number) for number in re.findall(rf"(-?\d+\.\d) {unit}", text)]


def test_out_of_reach_says_by_how_much() -> None:
    """The distance of the nearest pose on the lane from what both links reach."""
    lane_x = 700.0
    found = refusal(np.array([lane_x, -300.0]))
    assert found.reason == "out_of_reach"
    nearest = np.hypot(lane_x, np.abs(np.linspace(-190, 190, 24)).min()) - 450.0
    assert amount(found.detail, "mm")[0] == pytest.approx(nearest, abs=0.06)


def test_a_tray_out_of_reach() -> None:
    found = refusal(np.array([30.0, 0.0]), **STILL)
    assert found.reason == "out_of_reach"
    assert amount(found.detail, "mm")[0] == pytest.approx(50.0 - 30.0, abs=0.06)


@pytest.mark.parametrize(
    ("change", "joint"),
    [({"arm__j1__max": -50.0, "arm__home": [-80.0, 90.0, 20.0, 0.0]}, "J1"),
     ({"arm__j2__max": 95.0, "arm__j2__min": -95.0}, "J2"),
     ({"arm__j3__max": 140.0}, "J3"), ({"arm__j4__min": -20.0, "arm__j4__max": 20.0}, "J4")],
)  # fmt: skip
def test_a_joint_limit_says_which_and_its_numbers_are_true(change: dict[str, object], joint: str) -> None:
    """What the sentence says it needs is a posture that grips the part, and the limit is the file's less its margin."""
    at = np.array([240.0, 0.0]) if joint in ("J1", "J2") else AT
    found = refusal(at, yaw=2.2 if joint == "J4" else 0.3, **STILL, **change)
    assert found.reason == "joint_limit"
    assert found.detail.startswith(f"{joint} would need")
    unit = "mm" if joint == "J3" else "deg"
    needed, limit = (float(x) for x in re.findall(r"(-?\d+\.\d)", found.detail))
    one = grasping(**STILL, **change)
    j = int(joint[1]) - 1
    scale = 1.0 if j == 2 else 180 / np.pi
    assert min(abs(limit - one.upper[j] * scale), abs(limit - one.lower[j] * scale)) < 0.051
    assert needed > limit if abs(limit - one.upper[j] * scale) < 0.051 else needed < limit
    solved = one.arm.inverse([*at, -47.0, 2.2 if joint == "J4" else 0.3])
    ways = np.concatenate([solved + np.array([0, 0, 0, 2 * np.pi * k]) for k in (-1, 0, 1)])
    assert np.abs(ways[:, j] * scale - needed).min() < 0.051, unit


def test_a_part_at_the_stretched_arm_is_too_near_the_singularity() -> None:
    found = refusal(np.array([449.0, 0.0]), **STILL)
    assert found.reason == "joint_limit"
    assert "J2" in found.detail


def test_a_keepout_over_the_part_is_named() -> None:
    over = [{"name": "post", "polygon_mm": [[250, -250], [330, -250], [330, 250], [250, 250]], "top_mm": 400.0}]
    found = refusal(keepouts=over)
    assert found.reason == "keepout"
    assert refusal(keepouts=over, **STILL).reason == "keepout"
    assert len(holds(keepouts=[{**over[0], "top_mm": -60.0}], **STILL).holds) == 4


@pytest.mark.parametrize(
    "change",
    [{"motion__limit_margin_deg": 40.0}, {"motion__singularity_deg": 85.0}, {"arm__j1__min": -20.0},
     {"arm__j2__min": 0.0, "arm__j2__max": 145.0}, {"arm__j4__max": 90.0},
     {"keepouts": [{"polygon_mm": [[60, 160], [200, 160], [200, 300], [60, 300]], "top_mm": 300.0}]}],
)  # fmt: skip
def test_each_limit_takes_some_way_away(change: dict[str, object]) -> None:
    """Fewer usable points of lanes than without it."""
    assert sum(lane.sum() for lane in holds(**change).usable) < sum(lane.sum() for lane in holds().usable)
