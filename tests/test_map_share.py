"""Parts are as unsure as the finding of them and the map together."""

import numpy as np
import pytest
from made_camera import MILD, SIZE, made_camera, made_touches
from some_sightings import CELL, TRAY, recorded

from cameras.camera import CameraMap
from cameras.lens import Lens
from cameras.plane import fit_plane
from cameras.sightings import Sightings
from pipeline.follow import Followed, follow
from pipeline.map_share import with_map_share

FRAMES = 4
TRUE = made_camera(plane_mm=0.0)


def seen_through(camera: CameraMap, found_mm: float, seed: int) -> tuple[np.ndarray, Sightings]:
    """Where 25 levers truly lie, one tray of them, and where the map puts what a finder so unsure found."""
    rng = np.random.default_rng(seed)
    net = np.stack(np.meshgrid(np.linspace(0.15, 0.85, 5), np.linspace(0.15, 0.85, 5)), axis=-1).reshape(-1, 2)
    true = TRUE.to_cell(net * SIZE, 0.0)
    xy = camera.to_cell(net * SIZE, 0.0) + rng.normal(0, found_mm, true.shape)
    n = len(true)
    return true, Sightings(np.zeros(n, np.int64), np.full(n, "lever"), np.full(n, "up"), xy, np.zeros(n), np.ones(n),
                           np.full(n, found_mm), np.full(n, 0.002), tuple(np.zeros((0, 2)) for _ in range(n)))


def shared(sightings: Sightings, camera: CameraMap, cell=TRAY) -> tuple[Followed, Followed]:  # type: ignore[no-untyped-def]
    recording = recorded([0] * FRAMES)
    followed = follow(sightings, recording, cell)
    return followed, with_map_share(followed, sightings, recording, {"": camera}, cell)


def test_the_two_together_cover_what_they_should() -> None:
    """95 % intervals, over many maps each fitted to its own touches: finding alone covers too little."""
    alone, both = [], []
    for seed in range(40):
        touched = made_touches(TRUE, n=12, seed=seed)
        camera = fit_plane(touched.pixels, touched.points, Lens(MILD, SIZE))
        true, sightings = seen_through(camera, 0.02, seed)
        for told, parts in zip((alone, both), (one.parts for one in shared(sightings, camera)), strict=True):
            error = [np.abs(part.xy_mm - true[np.hypot(*(true - part.xy_mm).T).argmin()]) / part.sigma_mm
                     for part in parts]
            told.append(np.mean(np.array(error) <= 1.96))
    assert np.mean(alone) < 0.85
    assert 0.90 <= np.mean(both) <= 0.99


def test_the_share_is_the_map_s_own_where_the_part_was_seen() -> None:
    camera = fit_plane(made_touches(TRUE).pixels, made_touches(TRUE).points, Lens(MILD, SIZE))
    _, sightings = seen_through(camera, 0.05, 0)
    found, both = shared(sightings, camera)
    for k, (one, other) in enumerate(zip(found.parts, both.parts, strict=True)):
        at = np.append(sightings.xy_mm[np.flatnonzero(found.part_of == k)[0]], 0.0)
        assert other.sigma_mm == pytest.approx(np.hypot(one.sigma_mm, camera.sigma_mm(at)))
        assert other.sigma_rad == pytest.approx(np.hypot(one.sigma_rad, camera.yaw_sigma_rad(at)))


def test_sightings_do_not_average_the_map_out() -> None:
    """Seen sixteen times, a part is as unsure by its map as seen once."""
    camera = fit_plane(made_touches(TRUE).pixels, made_touches(TRUE).points, Lens(MILD, SIZE))
    n = 16
    at = np.tile([320.0, 40.0], (n, 1))
    sightings = Sightings(np.arange(n), np.full(n, "lever"), np.full(n, "up"), at, np.zeros(n), np.ones(n),
                          np.full(n, 0.02), np.full(n, 0.002), tuple(np.zeros((0, 2)) for _ in range(n)))
    recording = recorded([0] * n)
    followed = follow(sightings, recording, CELL)
    (part,) = with_map_share(followed, sightings, recording, {"": camera}, CELL).parts
    assert part.sigma_mm > float(camera.sigma_mm(np.array([320.0, 40.0, 0.0])))
    assert with_map_share(followed, sightings, recording, {}, CELL) == followed
