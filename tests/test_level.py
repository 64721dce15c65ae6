"""Heights of edges, told by the drift that a wrong one causes."""

from dataclasses import replace

import numpy as np
import pytest
from some_sightings import CELL, TRAY, recorded, scene, sightings, stop_and_go

from pipeline.follow import follow

FOOT = np.array([100.0, 40.0])
LEAN = 2.0 / 800.0  # edges 2 mm higher (one standard deviation), seen from 800 mm


def leaning(seen, raised):
    """The sightings as they come where edges are higher than assumed by `raised` standard deviations, by kind."""
    lean = LEAN * (seen.xy_mm - FOOT)
    by = np.array([raised.get(str(kind), 0.0) for kind in seen.kind])
    return replace(seen, xy_mm=seen.xy_mm + lean * by[:, None], lean_mm=lean, sigma_mm=np.full(len(seen), 0.3))


def errors(followed, true):
    return np.array([np.min(np.linalg.norm(true - part.xy_mm, axis=1)) for part in followed.parts])


def test_edges_higher_than_assumed_do_not_shift_parts():
    recording = stop_and_go(frames=200)
    true, _, _, seen = scene(recording, parts=40)
    given = leaning(seen, {"lever": 1.5, "plate": -1.0})
    levelled, plain = follow(given, recording, CELL), follow(replace(given, lean_mm=np.zeros((0, 2))), recording, CELL)
    assert np.percentile(errors(levelled, true), 95) < 0.15
    assert np.percentile(errors(plain, true), 95) > 0.3
    assert levelled.drift.findings == ()


def test_parts_are_surer_once_their_heights_are_told():
    recording = stop_and_go(frames=200)
    given = leaning(scene(recording, parts=40)[3], {"lever": 1.0})
    levelled, plain = follow(given, recording, CELL), follow(replace(given, lean_mm=np.zeros((0, 2))), recording, CELL)
    sigmas = [np.median([part.sigma_mm for part in one.parts]) for one in (levelled, plain)]
    assert sigmas[0] < 0.8 * sigmas[1]


def test_a_belt_that_drifts_is_told_of_and_not_taken_for_heights():
    recording = stop_and_go(frames=200)
    seen = leaning(scene(recording, parts=40, scale=1.008)[3], {})
    told = " ".join(follow(seen, recording, CELL).drift.findings)
    assert "recheck mm_per_count" in told
    assert "+0.8" in told


@pytest.mark.parametrize("cell", [CELL, TRAY])
def test_what_is_seen_once_tells_no_height(cell):
    recording = recorded(np.arange(3) * 2000)
    seen = leaning(sightings([0, 1, 2], ["lever"] * 3, [[0.0, 0.0], [180.0, 90.0], [40.0, 120.0]]), {})
    assert np.allclose(follow(seen, recording, cell).parts[0].xy_mm,
                       follow(replace(seen, lean_mm=np.zeros((0, 2))), recording, cell).parts[0].xy_mm)
