"""Following: each part once, however often and badly seen."""

from dataclasses import replace
from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial import cKDTree
from scipy.stats import circmean
from some_sightings import CELL, HEADING, SQUARE, TRAY, recorded, scene, sightings, stop_and_go

from cameras.columns import read_columns
from cameras.locate import read_located
from cameras.recording import read_recording
from cameras.sightings import Sightings
from pipeline.cell import load_cell
from pipeline.follow import follow
from pipeline.follow.associate import Pair, best_pairs
from pipeline.follow.overlap import inside, overlap


def places(followed):
    return np.array([part.xy_mm for part in followed.parts]).reshape(-1, 2)


def yaw_error(found, true, turns):
    period = 2 * np.pi / turns
    return abs((found - true + period / 2) % period - period / 2)


@pytest.mark.parametrize("seed", range(3))
def test_each_part_is_found_once_through_jitter_dropped_frames_and_stops(seed):
    recording = stop_and_go(seed)
    at, kinds, yaws, seen = scene(recording, seed=seed)
    followed = follow(seen, recording, CELL)
    distance, who = cKDTree(at).query(places(followed))
    assert sorted(who) == list(range(len(at)))
    assert distance.max() < 0.3
    for part, one in zip(followed.parts, who, strict=True):
        assert part.kind == kinds[one]
        if part.kind != "dome":
            turns = CELL.parts[part.kind].turns
            assert yaw_error(part.yaw_rad, yaws[one], turns) < 5 * part.sigma_rad
    assert followed.drift is not None
    assert followed.drift.findings == ()


def test_recorded_streams_hold_each_part_once(recordings_folder):
    for folder in sorted(path for path in (recordings_folder / "streams").iterdir() if path.is_dir()):
        cell = load_cell(folder / "cell.toml")
        recording = read_recording(folder, cell.belt.counts_modulus, images=False)
        followed = follow(read_located(folder / "located.csv", recording, list(cell.parts)), recording, cell)
        columns = {"part": str, "side": str, "x_mm": float, "y_mm": float}
        truth = read_columns(folder / "truth.csv", columns)
        distance, who = cKDTree(np.stack([truth["x_mm"], truth["y_mm"]], axis=1)).query(places(followed))
        assert sorted(who) == list(range(len(truth["part"]))), folder.name
        assert np.quantile(distance, 0.95) < 0.25, folder.name
        assert [(p.kind, p.side) for p in followed.parts] == [(truth["part"][k], truth["side"][k]) for k in who]
        assert followed.drift.findings == (), folder.name


def test_touching_parts_of_one_kind_stay_apart():
    recording = recorded(np.arange(30) * 200)
    row = np.repeat(np.arange(5, 25), 4)
    offsets = np.array([[0, 0], [7, 0], [0, 7], [7, 7]])
    rng = np.random.default_rng(0)
    xy = np.tile(offsets, (20, 1)) + row[:, None] * 10 * HEADING + rng.normal(0, 0.1, (80, 2))
    keep = rng.random(80) > 0.3
    followed = follow(sightings(row[keep], ["plate"] * keep.sum(), xy[keep]), recording, CELL)
    assert len(followed.parts) == 4
    assert np.allclose(sorted(places(followed).round().tolist()), sorted(offsets.tolist()))


def test_a_part_listed_twice_in_a_frame_is_one():
    followed = follow(sightings([3, 3], ["lever", "plate"], [[10, 10], [11, 10]], score=[0.6, 0.9]),
                      recorded(np.zeros(5)), CELL)
    assert [part.kind for part in followed.parts] == ["plate"]
    assert followed.part_of.tolist() == [-1, 0]


def test_trays_are_fresh_in_every_frame():
    seen = sightings([0, 1, 1], ["plate"] * 3, [[10, 10], [10, 10], [10, 11]])
    followed = follow(seen, recorded(np.zeros(2)), TRAY)
    assert [(part.first_row, part.frames_seen) for part in followed.parts] == [(0, 1), (1, 1)]
    assert followed.drift is None


def test_no_sightings_are_no_parts():
    followed = follow(Sightings.joined([]), recorded([0, 10]), CELL)
    assert followed.parts == ()
    assert followed.part_of.shape == (0,)


def test_parts_are_numbered_by_first_sighting_then_from_downstream():
    recording = recorded([0, 0, 0])
    seen = sightings([1, 1, 0, 2], ["lever"] * 4, [0 * HEADING, 50 * HEADING, -90 * HEADING, 99 * HEADING])
    followed = follow(seen, recording, CELL)
    assert [part.number for part in followed.parts] == [1, 2, 3, 4]
    assert np.allclose(places(followed) @ HEADING, [-90, 50, 0, 99])
    assert followed.part_of.tolist() == [2, 1, 0, 3]


@settings(max_examples=20, deadline=None)
@given(st.randoms(use_true_random=False))
def test_the_order_of_sightings_does_not_matter(random):
    recording = stop_and_go(frames=60)
    seen = scene(recording, parts=8)[3]
    order = list(range(len(seen)))
    random.shuffle(order)
    shuffled = Sightings.joined(seen.where(np.arange(len(seen)) == k) for k in order)
    one, other = follow(seen, recording, CELL), follow(shuffled, recording, CELL)
    assert np.array_equal(places(one), places(other))
    assert [part.yaw_rad for part in one.parts] == [part.yaw_rad for part in other.parts]


def test_outliers_are_left_out():
    row = np.arange(8)
    xy = np.tile([20.0, 30.0], (8, 1))
    xy[5] += [2.4, 0.0]
    yaw = np.zeros(8)
    yaw[2] = np.pi  # taken the wrong way round once
    part = follow(sightings(row, ["lever"] * 8, xy, yaw), recorded(np.zeros(8)), CELL).parts[0]
    assert np.allclose(part.xy_mm, [20, 30], atol=1e-9)
    assert part.yaw_rad == pytest.approx(0, abs=1e-9)
    assert part.frames_seen == 8


def test_a_part_long_in_view_is_averaged_over_all_of_it():
    rng = np.random.default_rng(0)
    xy, yaw = rng.normal(0, 0.1, (2000, 2)), 3.1 + rng.normal(0, 0.005, 2000)
    xy[1500] += 2.0  # an outlier past the first sightings, which are looked at together
    part = follow(sightings(range(2000), ["lever"] * 2000, xy, yaw), recorded(np.zeros(2000)), CELL).parts[0]
    assert np.allclose(part.xy_mm, np.delete(xy, 1500, axis=0).mean(axis=0), atol=0.001)
    assert part.yaw_rad == pytest.approx(np.arctan2(np.sin(yaw.mean()), np.cos(yaw.mean())), abs=1e-4)
    assert part.score == pytest.approx(0.9)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 5), st.sampled_from(["", "lever", "plate", "dome"]), st.integers(-8, 8),
                          st.floats(-4, 4), st.floats(0, 1)), max_size=30), st.floats(1e-6, 1e3), st.booleans())
def test_anything_sighted_is_of_one_part_or_left_out(seen, sigma, tray):
    rows, kinds, along, yaws, scores = zip(*seen, strict=True) if seen else ((),) * 5
    given_in = sightings(rows, kinds, [(x, 0) for x in along] or np.zeros((0, 2)), np.array(yaws, float),
                         np.array(scores, float), sigma_mm=sigma, outline=SQUARE)
    followed = follow(given_in, recorded(np.arange(6) * 20), TRAY if tray else CELL, {"lever": SQUARE})
    seen_of = np.bincount(followed.part_of[followed.part_of >= 0], minlength=len(followed.parts))
    assert [part.frames_seen for part in followed.parts] == seen_of.tolist()
    for k, part in enumerate(followed.parts):
        mine = np.array(rows)[followed.part_of == k]
        assert len(set(mine)) == len(mine)  # at most once a frame
        assert (part.first_row, part.last_row) == (mine.min(), mine.max())
        assert np.isfinite([*part.xy_mm, part.yaw_rad, part.score, part.sigma_mm, part.sigma_rad]).all()


def test_kind_and_side_are_voted():
    seen = sightings(range(5), ["lever", "plate", "lever", "", "lever"], [[0, 0]] * 5)
    sides = np.array(["down", "up", "down", "", "down"])
    part = follow(replace(seen, side=sides), recorded(np.zeros(5)), CELL).parts[0]
    assert (part.kind, part.side) == ("lever", "down")
    assert part.known.kind.tolist() == ["lever", "lever", "lever", "lever", "lever"]


@settings(max_examples=50, deadline=None)
@given(st.lists(st.tuples(st.floats(-0.01, 0.01), st.integers(0, 1)), min_size=1, max_size=9), st.floats(-3.1, 3.1))
def test_yaw_is_the_circular_mean_modulo_the_symmetry(sighted, about):
    """Against scipy.stats.circmean (Mardia, Jupp 2000) of the sightings folded onto half a turn."""
    yaws = np.array([about + off + np.pi * half for off, half in sighted])
    n = len(yaws)
    part = follow(sightings(range(n), ["plate"] * n, [[0, 0]] * n, yaws), recorded(np.zeros(n)), CELL).parts[0]
    assert yaw_error(part.yaw_rad, circmean(yaws, high=np.pi), 2) < 1e-6
    assert np.abs(np.diff(np.unwrap(part.known.yaw_rad))).max(initial=0) < 0.1  # on one branch from the first on


def test_what_is_known_rests_on_the_sightings_until_then():
    recording = stop_and_go(1, frames=120)
    seen = scene(recording, parts=20, seed=1)[3]
    followed = follow(seen, recording, CELL)
    cut = 60
    early = seen.row <= cut
    before = follow(seen.where(early), recording, CELL)
    for part, same in zip(followed.parts, before.parts, strict=False):
        k = part.known.by(cut)
        assert np.array_equal(part.known.xy_mm[k], same.xy_mm)
        assert part.known.yaw_rad[k] == same.yaw_rad
        assert (part.known.kind[k], part.known.side[k], part.known.score[k]) == (same.kind, same.side, same.score)
    assert followed.parts[0].known.by(-1) == -1


def test_predicted_uncertainty_covers_the_errors():
    recording = stop_and_go(2)
    at, _, _, seen = scene(recording, parts=200, noise_mm=0.2, seed=2)
    followed = follow(seen, recording, CELL)
    error = places(followed) - at[cKDTree(at).query(places(followed))[1]]
    sigma = np.array([part.sigma_mm for part in followed.parts])
    assert 0.90 < (np.abs(error) < 1.96 * sigma[:, None]).mean() < 0.99


def test_error_common_to_all_sightings_is_not_averaged_away():
    """Sightings that agree far better than their sigma share an error: more of them do not make a part surer."""
    recording = recorded(np.arange(40) * 10)
    rows = np.arange(30)
    seen = sightings(rows, ["lever"] * 30, rows[:, None] * 0.5 * HEADING, sigma_mm=0.3)
    assert follow(seen, recording, CELL).parts[0].sigma_mm == pytest.approx(0.3, rel=0.1)


def foreign_then(kind, share_frame):
    """A thing not recognised in rows 0 to 2, about (4, 0), and a part at (0, 0) in later rows."""
    rows = [0, 1, 2, 2 if share_frame else 3, 4, 5]
    return sightings(rows, ["", "", "", kind, kind, kind], [[4, 0]] * 3 + [[0, 0]] * 3, outline=SQUARE)


def test_a_part_not_recognised_at_first_is_one():
    outlines = {"lever": SQUARE + np.array([4, 0])}
    followed = follow(foreign_then("lever", False), recorded(np.zeros(6)), CELL, outlines)
    assert [(part.kind, part.first_row) for part in followed.parts] == [("lever", 3)]
    assert followed.part_of.tolist() == [-1, -1, -1, 0, 0, 0]


def test_a_foreign_thing_beside_a_part_stays():
    followed = follow(foreign_then("lever", True), recorded(np.zeros(6)), CELL, {"lever": SQUARE + np.array([4, 0])})
    assert [part.kind for part in followed.parts] == ["", "lever"]
    assert followed.parts[0].outline_mm.shape == (4, 2)


def test_a_part_mistaken_for_another_kind_once_is_one():
    seen = sightings([0, 1, 2, 3], ["plate", "lever", "lever", "lever"], [[9, 0], [0, 0], [0, 0], [0, 0]])
    outlines = {"lever": SQUARE * 0.8 + [4, 0], "plate": SQUARE * 0.8 - [5, 0]}
    followed = follow(seen, recorded(np.zeros(4)), CELL, outlines)
    assert [part.kind for part in followed.parts] == ["lever"]


def test_overlap_is_the_share_of_the_smaller_polygon():
    assert overlap(SQUARE, SQUARE + np.array([10, 0])) == pytest.approx(0.5, abs=0.07)
    assert overlap(SQUARE, SQUARE * 0.3) == 1.0
    assert overlap(SQUARE, SQUARE + np.array([20.1, 0])) == 0.0
    assert inside(SQUARE, np.array([[0, 0], [9, 9], [11, 0]])).tolist() == [True, True, False]


@settings(max_examples=200, deadline=None)
@given(st.dictionaries(st.tuples(st.integers(0, 3), st.integers(0, 3)), st.floats(0, 30), max_size=12))
def test_frames_are_assigned_as_brute_force_would(costs):
    found = best_pairs([Pair(cost, *key) for key, cost in costs.items()])
    candidates = [[(s, t) for s, t in zip(range(4), order, strict=True) if (s, t) in costs]
                  for order in permutations(range(4))]
    best = min((-len(pairs), sum(costs[pair] for pair in pairs)) for pairs in candidates)
    assert all(pair in costs for pair in found.items())
    assert len(set(found.values())) == len(found) == -best[0]
    assert sum(costs[pair] for pair in found.items()) == pytest.approx(best[1])
