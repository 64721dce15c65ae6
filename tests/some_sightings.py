"""A cell, recordings and sightings that tests of following share."""

from pathlib import Path

import numpy as np

from cameras.recording import Recording
from cameras.sightings import Sightings
from pipeline.cell import cell_from

JOINT = {"min": -90.0, "max": 90.0, "max_speed": 1.0, "max_accel": 1.0}
RAW = {
    "arm": {"link1_mm": 1.0, "link2_mm": 1.0, "flange_height_mm": 1.0, "home": [0.0, 0.0, 0.0, 0.0],
            **{f"j{n}": JOINT for n in (1, 2, 3, 4)}},
    "tool": {}, "motion": {"travel_mm": 1.0},
    "belt": {"surface_mm": 0.0, "heading_deg": 30.0, "mm_per_count": 0.05},
    "parts": {"lever": {"grasp_mm": 1.0, "places": ["bin"], "symmetry": 1},
              "plate": {"grasp_mm": 1.0, "places": ["bin"], "symmetry": 2},
              "dome": {"grasp_mm": 1.0, "places": ["bin"], "symmetry": "round"}},
    "places": [{"name": "bin", "origin_mm": [0.0, 0.0, 0.0]}],
}  # fmt: skip
CELL = cell_from(RAW)
TRAY = cell_from({key: value for key, value in RAW.items() if key != "belt"})
HEADING = np.array([np.cos(np.radians(30)), np.sin(np.radians(30))])
LEFT = np.array([-HEADING[1], HEADING[0]])
VIEW_MM = 300.0
SQUARE = np.array([[-10.0, -10.0], [10.0, -10.0], [10.0, 10.0], [-10.0, 10.0]])


def recorded(counts, times=None):
    n = len(counts)
    times = np.arange(n) * 0.1 if times is None else times
    return Recording(Path("."), np.arange(n), ("x",) * n, np.array(times, float), np.array(counts, float),
                     np.full(n, ""), np.arange(n) + 2)


def stop_and_go(seed=0, frames=400):
    """Frames with jitter, some of them dropped, of a belt that slows and stops."""
    rng = np.random.default_rng(seed)
    times = np.sort(rng.choice(np.arange(frames) * 0.1, int(frames * 0.93), replace=False))
    times = times + rng.uniform(-0.02, 0.02, len(times))
    speed = 2000 * np.clip(1.2 * np.sin(times * 0.5) + 0.6, 0, 1)
    return recorded(np.round(5000 + np.concatenate([[0], np.cumsum(speed[1:] * np.diff(times))])), times)


def scene(recording, parts=60, noise_mm=0.1, noise_deg=0.3, missed=0.05, scale=1.0, turn_deg=0.0, delay_s=0.0, seed=0):
    """True places (n, 2), kinds and yaws at counts 0, and the sightings of a view of VIEW_MM of belt."""
    rng = np.random.default_rng(seed)
    travel = recording.counts * 0.05
    along, across = rng.uniform(travel[0], travel[-1], parts), rng.uniform(-80, 80, parts)
    kinds, yaws = rng.choice(["lever", "plate", "dome"], parts), rng.uniform(-np.pi, np.pi, parts)
    at = -along[:, None] * HEADING + across[:, None] * LEFT
    true_travel = travel * scale + delay_s * np.gradient(travel, recording.times_s)
    angle = np.radians(30 + turn_deg)
    xy = at[:, None, :] + true_travel[:, None] * np.array([np.cos(angle), np.sin(angle)])
    seen_along = xy @ HEADING
    shown = (seen_along > 0) & (seen_along < VIEW_MM) & (rng.random(seen_along.shape) > missed)
    part, row = np.nonzero(shown)
    places = xy[part, row] + rng.normal(0, noise_mm, (len(row), 2))
    turned = np.where(kinds[part] == "plate", rng.integers(0, 2, len(row)) * np.pi, 0)
    yaw = yaws[part] + turned + rng.normal(0, np.radians(noise_deg), len(row))
    yaw = np.where(kinds[part] == "dome", rng.uniform(-np.pi, np.pi, len(row)), yaw)
    order = np.lexsort((rng.random(len(row)), row))
    seen = sightings(row[order], kinds[part][order], places[order], yaw[order], sigma_mm=noise_mm,
                     sigma_deg=noise_deg)
    return at[shown.any(axis=1)], kinds[shown.any(axis=1)], yaws[shown.any(axis=1)], seen


def sightings(row, kind, xy_mm, yaw_rad=0.0, score=0.9, side="up", sigma_mm=0.1, sigma_deg=0.3, outline=None):
    n = len(row)
    outlines = tuple(np.zeros((0, 2)) if name or outline is None else outline for name in kind)
    return Sightings(np.array(row, np.int64), np.array(kind, np.str_), np.full(n, side), np.array(xy_mm, float),
                     np.broadcast_to(yaw_rad, n).astype(float), np.broadcast_to(score, n).astype(float),
                     np.full(n, float(sigma_mm)), np.full(n, np.radians(sigma_deg)), outlines)
