"""Drift between sightings of one part: found, told from noise, and named for what it is."""

from dataclasses import replace

import numpy as np
import pytest
from some_sightings import CELL, HEADING, recorded, scene, stop_and_go

from pipeline.follow import follow


@pytest.mark.parametrize("percent", [0.8, -0.4, 5.0])
def test_a_wrong_scale_is_followed_and_named(percent):
    recording = recorded(5000 + np.arange(300) * 200)
    at, _, _, seen = scene(recording, scale=1 + percent / 100)
    followed = follow(seen, recording, CELL)
    assert len(followed.parts) == len(at)
    assert followed.drift.along_mm == pytest.approx(percent, abs=0.05)
    assert abs(followed.drift.across_mm) < 0.05
    (told,) = followed.drift.findings
    assert told.startswith(f"sightings drift {followed.drift.along_mm:+.2f} mm per 100 mm along the belt: "
                           "recheck mm_per_count (")
    assert float(told.split("(")[1].split()[0]) == pytest.approx(0.05 * (1 + percent / 100), rel=1e-3)


def test_a_wrong_height_is_told_from_a_wrong_scale():
    """What lies higher than the map is told drifts by parallax: only that kind does."""
    recording = recorded(5000 + np.arange(300) * 200)
    seen = scene(recording, parts=120)[3]
    along = np.where(seen.kind == "plate", seen.xy_mm @ HEADING, 0.0)
    seen = replace(seen, xy_mm=seen.xy_mm + 0.004 * along[:, None] * HEADING)
    drift = follow(seen, recording, CELL).drift
    (told,) = drift.findings
    assert told.startswith("sightings of plate drift +")
    assert "height_mm" in told
    assert {name: round(along, 1) for name, along, _ in drift.by_kind} == {"dome": 0.0, "lever": 0.0, "plate": 0.4}


def test_a_wrong_heading_is_named():
    recording = recorded(5000 + np.arange(300) * 200)
    followed = follow(scene(recording, turn_deg=0.3)[3], recording, CELL)
    (told,) = followed.drift.findings
    assert "across the belt: recheck heading_deg" in told
    assert float(told.split("(")[1].split()[0]) == pytest.approx(0.3, abs=0.05)


@pytest.mark.parametrize("delay_s", [0.006, -0.006])
def test_late_time_stamps_are_named(delay_s):
    recording = stop_and_go(5)
    followed = follow(scene(recording, parts=100, delay_s=delay_s)[3], recording, CELL)
    assert followed.drift.delay_s == pytest.approx(delay_s, abs=0.0015)
    told = [one for one in followed.drift.findings if "time stamps" in one]
    assert len(told) == 1
    assert ("after" if delay_s > 0 else "before") in told[0]


@pytest.mark.parametrize("seed", range(8))
def test_sound_sightings_drift_nowhere(seed):
    recording = stop_and_go(seed)
    drift = follow(scene(recording, noise_mm=0.3, seed=seed)[3], recording, CELL).drift
    assert drift.findings == ()
    assert abs(drift.along_mm) < 5 * drift.along_error_mm
    assert abs(drift.across_mm) < 5 * drift.across_error_mm
