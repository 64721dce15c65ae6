"""The belt between frames: true to the recorded counts, smooth, without look ahead."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import PchipInterpolator

from cameras.recording import read_recording
from pipeline.belt import SMOOTHED_S, Belt, monotone_slopes
from pipeline.cell import BeltCell

CELL = BeltCell(surface_mm=0.0, heading_deg=30.0, mm_per_count=0.05)


def stop_and_go(seed=0, frames=60, start_s=0.5, first=1000.0):
    """Frames a tenth of a second apart, give or take, of a belt that stops and starts within its means."""
    rng = np.random.default_rng(seed)
    times = start_s + np.cumsum(rng.uniform(0.095, 0.105, frames))
    speed = 2200 * np.clip(np.sin(times * 0.8) + 0.4, 0, 1)  # counts a second
    counts = first + np.concatenate([[0.0], np.cumsum(np.round((speed[1:] + speed[:-1]) / 2 * np.diff(times)))])
    return times, counts


def test_passes_the_recorded_counts():
    times, counts = stop_and_go()
    assert np.abs(Belt(times, counts, CELL).travel_mm(times) / 0.05 - counts).max() < 0.6


def test_recorded_streams_are_met_within_half_a_count(recordings_folder):
    for folder in sorted((recordings_folder / "streams").iterdir()):
        if folder.is_dir():
            recording = read_recording(folder, 65536 if "rollover" in folder.name else None, images=False)
            belt = Belt(recording.times_s, recording.counts, CELL)
            off = np.abs(belt.travel_mm(recording.times_s) / 0.05 - recording.counts)
            assert np.quantile(off, 0.99) < 0.5, folder.name
            assert off.max() < 1.5, folder.name  # where the belt's speed jumps


def test_is_the_mean_of_the_published_monotone_cubic_over_the_window():
    """Against scipy's PCHIP (Fritsch, Butland 1984), summed numerically; the end intervals have slopes of our own."""
    times, counts = stop_and_go(1)
    cubic = PchipInterpolator(times, counts * 0.05)
    assert np.allclose(monotone_slopes(times, counts * 0.05)[1:-1], cubic.derivative()(times)[1:-1], atol=1e-9)
    at = np.linspace(times[2], times[-3], 400)
    steps = (np.arange(400) + 0.5) / 400 - 0.5
    mean = cubic(at[:, None] + steps * SMOOTHED_S).mean(axis=1)
    assert np.abs(Belt(times, counts, CELL).travel_mm(at) - mean).max() < 1e-5


def test_speed_and_acceleration_are_its_derivatives():
    times, counts = stop_and_go(2)
    belt = Belt(times, counts, CELL)
    at, h = np.linspace(times[0] - 0.5, times[-1] + 0.5, 3001), 1e-4
    assert np.abs((belt.travel_mm(at + h) - belt.travel_mm(at - h)) / (2 * h) - belt.speed_mm_s(at)).max() < 1e-2
    assert np.abs((belt.speed_mm_s(at + h) - belt.speed_mm_s(at - h)) / (2 * h) - belt.accel_mm_s2(at)).max() < 5.0


def test_speed_and_acceleration_have_no_steps():
    times, counts = stop_and_go(3)
    belt = Belt(times, counts, CELL)
    edges = belt.starts_s[1:]
    for rate, step in ((belt.travel_mm, 1e-5), (belt.speed_mm_s, 1e-4), (belt.accel_mm_s2, 1e-2)):
        assert np.abs(rate(edges + 1e-9) - rate(edges - 1e-9)).max() < step


def test_runs_on_at_the_end_speeds():
    times, counts = stop_and_go(4)
    belt = Belt(times, counts, CELL)
    for end, inner, out in ((0, 1, -3.0), (-1, -2, 3.0)):
        speed = (counts[end] - counts[inner]) / (times[end] - times[inner]) * 0.05
        assert belt.travel_mm(times[end] + out) == pytest.approx(counts[end] * 0.05 + out * speed, abs=1e-6)
        assert belt.speed_mm_s(times[end] + out) == pytest.approx(speed, abs=1e-6)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.floats(0.001, 2.0), st.integers(0, 5000)), min_size=1, max_size=30), st.floats(0, 1e7))
def test_never_runs_back_where_the_counts_do_not(steps, first):
    gaps, ways = np.array(steps).T
    times, counts = 10 + np.cumsum(gaps), np.round(first) + np.cumsum(ways)
    at = np.linspace(times[0] - 1, times[-1] + 1, 2001)
    travel = Belt(times, counts, CELL).travel_mm(at)
    assert (np.diff(travel) >= -1e-9 * max(1.0, travel.max())).all()


def test_keeps_its_accuracy_over_an_hour_of_belt():
    times, counts = stop_and_go(5, frames=36_000, first=2e7)
    assert np.abs(Belt(times, counts, CELL).travel_mm(times) / 0.05 - counts).max() < 0.6


def test_moves_things_along_the_heading():
    times, counts = stop_and_go()
    belt = Belt(times, counts, CELL)
    shift = belt.shift_mm(times[:6].reshape(2, 3))
    assert shift.shape == (2, 3, 2)
    assert np.allclose(shift @ [np.cos(np.pi / 6), np.sin(np.pi / 6)], belt.travel_mm(times[:6]).reshape(2, 3))
    assert np.allclose(shift @ [-np.sin(np.pi / 6), np.cos(np.pi / 6)], 0)


@pytest.mark.parametrize("frames", [1, 2, 3])
def test_few_frames_make_a_belt(frames):
    times, counts = stop_and_go(frames=frames)
    belt = Belt(times, counts, CELL)
    assert np.allclose(belt.travel_mm(times), counts * 0.05, atol=0.03)
    assert np.isfinite(belt.known_at(times[0])).all()


def test_a_tray_stands_still():
    belt = Belt([0.0, 30.0], [0.0, 0.0], None)
    assert not belt.shift_mm(np.linspace(-5, 50, 9)).any()
    assert belt.known_at(12.0) == (0.0, 0.0)


def test_what_is_known_does_not_depend_on_later_counts():
    times, counts = stop_and_go()
    later = counts.copy()
    later[31:] += 500 * np.arange(1, len(counts) - 30)
    for t in np.linspace(times[1], times[30], 50, endpoint=False):
        speed = Belt(times, counts, CELL).known_at(float(t)).speed_mm_s
        assert speed == Belt(times, later, CELL).known_at(float(t)).speed_mm_s


def test_known_speed_follows_a_steady_belt():
    times = np.arange(50) * 0.1
    known = Belt(times, np.round(times * 2345.6), CELL).known_at(3.33)
    assert known.speed_mm_s == pytest.approx(2345.6 * 0.05, abs=0.3)
    assert known.travel_mm == pytest.approx(3.33 * 2345.6 * 0.05, abs=0.05)
