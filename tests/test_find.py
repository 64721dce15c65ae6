import csv
import json
import math
import tomllib

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scenes import HOLE, PLATE, Laid, Pinhole, Scene, disc

from cameras.blobs import blobs_of
from cameras.edges import edge_map, noise_of
from cameras.find import PartFinder, TaughtPart
from cameras.model import load_model
from cameras.resized import Resized, resized
from cameras.teach import Taught, teach
from cameras.view import project, unproject, views_of

BAR = np.array([[-18.0, -4.0], [18, -4], [18, 4], [6, 4], [6, 9], [-2, 9], [-2, 4], [-18, 4]])
TAUGHT_AT = (10.0, -6.0, 0.4)


def plate(pose, **more) -> Laid:
    return Laid(PLATE, pose, 5.0, hole=more.pop("hole", HOLE), **more)


def ring(pose, **more) -> Laid:
    return Laid(disc(12.0), pose, 8.0, hole=(np.zeros(2), 4.5), **more)


def taught_part(make, name, turns, belt=60.0, **more) -> TaughtPart:
    laid = make(TAUGHT_AT, **more)
    scene = Scene([laid], belt)
    model = teach(scene.image(), scene.camera, 0.0, Taught(name, laid.height_mm, turns, TAUGHT_AT))
    return TaughtPart(name, model, laid.height_mm, turns)


@pytest.fixture(scope="module")
def finder() -> PartFinder:
    return PartFinder([taught_part(plate, "plate", 1), taught_part(ring, "ring", 0)], 0.0)


def matched(seen, parts):
    """Index of the sighting nearest to each part; each sighting serves once."""
    apart = np.linalg.norm(seen.xy_mm[:, None] - np.array([part.pose[:2] for part in parts])[None], axis=2)
    nearest = np.argmin(apart, axis=0)
    assert len(set(nearest)) == len(parts) == len(seen)
    return nearest


def turn(angle: float) -> float:
    return (angle + math.pi) % (2 * math.pi) - math.pi


SPREAD = [(-100.0, 60.0), (-40.0, 70.0), (30.0, 60.0), (95.0, 55.0), (-95.0, -40.0), (-25.0, -55.0), (40.0, -50.0)]


@pytest.mark.parametrize(("level", "belt"), [(170.0, 60.0), (45.0, 140.0)])
def test_poses_are_found_to_a_fraction_of_a_pixel_anywhere_in_view(level, belt):
    """A pixel is 0.33 mm. Plates stand 5 mm high and are seen up to 10 degrees askew."""
    finder = PartFinder([taught_part(plate, "plate", 1, belt, level=level)], 0.0)
    parts = [plate((x, y, 0.9 * k), level=level) for k, (x, y) in enumerate(SPREAD)]
    scene = Scene(parts, belt, seed=3)
    seen = finder.find(scene.image(), scene.camera)
    order = matched(seen, parts)
    assert set(seen.kind) == {"plate"}
    assert set(seen.side) == {"up"}
    error = np.linalg.norm(seen.xy_mm[order] - np.array([part.pose[:2] for part in parts]), axis=1)
    yaw = [abs(math.degrees(turn(seen.yaw_rad[k] - part.pose[2]))) for k, part in zip(order, parts, strict=True)]
    assert np.median(error) < 0.15
    assert error.max() < 0.4
    assert np.median(yaw) < 0.2
    assert max(yaw) < 0.6
    assert np.sqrt(np.mean((error / seen.sigma_mm[order]) ** 2) / 2) < 2.0
    assert seen.score.min() > 0.9


def test_touching_parts_are_told_apart_and_a_turned_one_is_called_down(finder):
    parts = [ring((0.0, 0.0, 0.0)), ring((24.1, 0.0, 0.0)), ring((12.0, 20.9, 0.0)), plate((-28.2, 2.0, 0.0)),
             plate((60.0, -40.0, 2.0), down=True, hole=None)]  # fmt: skip
    scene = Scene(parts, seed=4)
    seen = finder.find(scene.image(), scene.camera)
    order = matched(seen, parts)
    assert list(seen.kind[order]) == ["ring", "ring", "ring", "plate", "plate"]
    assert list(seen.side[order]) == ["up", "up", "up", "up", "down"]


def test_a_ring_without_its_hole_is_the_wrong_side_up(finder):
    """Both sides have the outline of a circle: only the inner edge tells them apart."""
    parts = [ring((0.0, 0.0, 0.0)), Laid(disc(12.0), (50.0, 20.0, 0.0), 8.0)]
    scene = Scene(parts, seed=5)
    seen = finder.find(scene.image(), scene.camera)
    assert list(seen.side[matched(seen, parts)]) == ["up", "down"]


def test_a_strange_thing_is_unknown_with_its_outline_and_a_cut_part_is_left_out(finder):
    strange = Laid(BAR, (-40.0, 30.0, 0.5), 5.0)
    scene = Scene([strange, plate((40.0, -20.0, 1.0)), plate((165.0, 0.0, 0.3)), ring((0.0, 136.0, 0.0))], seed=6)
    seen = finder.find(scene.image(), scene.camera)
    assert sorted(seen.kind) == ["", "plate"]
    at = int(np.flatnonzero(seen.kind == "")[0])
    outline = seen.outline_mm[at] + seen.xy_mm[at]
    true = strange.placed(BAR)
    assert seen.side[at] == ""
    assert np.allclose(outline.min(axis=0), true.min(axis=0), atol=3.0)
    assert np.allclose(outline.max(axis=0), true.max(axis=0), atol=3.0)
    assert not len(seen.outline_mm[1 - at])


def test_the_least_score_is_what_decides(finder):
    """A plate with a third of it covered is found when half of its outline is asked for, and not when nearly all is."""
    cover = Laid(disc(9.0), (13.0, -1.0, 0.0), 5.0, level=60.0)
    image = Scene([plate((0.0, 0.0, 0.0)), cover], seed=7).image()
    parts = [part for part in finder.parts if part.name == "plate"]
    easy, strict = (PartFinder(parts, 0.0, least).find(image, Pinhole()) for least in (0.5, 0.97))
    assert "plate" in easy.kind
    assert "plate" not in strict.kind


def test_what_is_seen_does_not_depend_on_what_was_seen_before(finder):
    scene = Scene([plate((0.0, 0.0, 0.3)), ring((50.0, 0.0, 0.0))])
    image, other = scene.image(), Scene([ring((0.0, 0.0, 0.0))], seed=9).image()
    first = finder.find(image, scene.camera)
    finder.find(other, scene.camera)
    again = finder.find(image, scene.camera)
    assert np.array_equal(first.xy_mm, again.xy_mm)
    assert np.array_equal(first.sigma_mm, again.sigma_mm)


@pytest.mark.parametrize("finer", [0.6, 1.6, 3.0])
def test_finer_and_coarser_images_show_the_same_parts(finer):
    """Taught from and found in images of more pixels than are needed, as blurred as the usual ones; or of fewer."""

    def fine(scene):
        shape = round(800 * finer), round(1024 * finer)
        image = cv2.resize(scene.image(), shape[::-1], interpolation=cv2.INTER_AREA if finer < 1 else cv2.INTER_CUBIC)
        return image, Resized(scene.camera, np.array([shape[1] / 1024, shape[0] / 800]), shape)

    kinds = []
    for make, name, turns in ((plate, "plate", 1), (ring, "ring", 0)):
        laid = make(TAUGHT_AT)
        model = teach(*fine(Scene([laid])), 0.0, Taught(name, laid.height_mm, turns, TAUGHT_AT))
        kinds.append(TaughtPart(name, model, laid.height_mm, turns))
    parts = [plate((-60.0, 30.0, 0.3)), ring((10.0, -20.0, 0.0)), plate((60.0, 40.0, 2.0)), ring((34.1, -20.0, 0.0))]
    image, camera = fine(Scene(parts))
    seen = PartFinder(kinds, 0.0).find(image, camera)
    nearest = matched(seen, parts)
    assert [str(seen.kind[k]) for k in nearest] == ["plate", "ring", "plate", "ring"]
    for part, k in zip(parts, nearest, strict=True):
        assert np.linalg.norm(seen.xy_mm[k] - part.pose[:2]) < 0.3


def test_tiny_parts_keep_their_pixels():
    """A disc of 10 mm has 40 pixels across where a pixel is 0.25 mm: no fewer."""
    camera = Pinhole(height_mm=600.0)
    assert resized(camera, 0.0, (800, 1024), 78.5).shape == (800, 1024)
    rows, columns = resized(Resized(camera, np.full(2, 3.0), (2400, 3072)), 0.0, (2400, 3072), 2000.0).shape
    assert 600 < rows < 700
    assert 800 < columns < 900


def test_colour_images_are_taken_as_grey(finder):
    scene = Scene([plate((0.0, 0.0, 0.3))])
    image = scene.image()
    colour = finder.find(cv2.cvtColor(image, cv2.COLOR_GRAY2BGR), scene.camera)
    assert np.allclose(colour.xy_mm, finder.find(image, scene.camera).xy_mm)


@pytest.mark.parametrize("shape", [(1, 1), (31, 200), (33, 33), (120, 90), (801, 1023)])
@pytest.mark.parametrize("fill", ["black", "white", "noise"])
def test_images_of_nothing_hold_no_parts(finder, shape, fill):
    rng = np.random.default_rng(0)
    image = {"black": np.zeros(shape), "white": np.full(shape, 255), "noise": rng.integers(0, 256, shape)}[fill]
    assert not [kind for kind in finder.find(image.astype(np.uint8), Pinhole()).kind if kind]


@settings(max_examples=15, deadline=None)
@given(st.binary(min_size=64, max_size=4096), st.integers(64, 160))
def test_images_of_random_bytes_end_in_sightings(finder, junk, columns):
    image = np.resize(np.frombuffer(junk, np.uint8), (96, columns))
    seen = finder.find(image, Pinhole())
    assert np.all(np.isfinite(seen.xy_mm))
    assert np.all((seen.score >= 0) & (seen.score <= 1))


def test_local_projections_agree_with_the_camera():
    camera = Pinhole(tilt_rad=0.12)
    views = views_of(camera, 0.0, 30.0, (800, 1024))
    rng = np.random.default_rng(2)
    xy, z = camera.to_cell(rng.uniform([30, 30], [990, 770], (200, 2)), 0.0), rng.uniform(0.0, 30.0, 200)
    true = camera.to_pixel(np.column_stack([xy, z]))
    back = np.empty(2)
    for (x, y), h, pixel, place in zip(xy, z, true, views.nearest(xy), strict=True):
        near, local = views.coefficients[place], np.array([x, y]) - views.places_mm[place]
        assert np.allclose(project(near, *local, h), pixel, atol=0.03)
        unproject(near, *pixel, h, back)
        assert np.allclose(back, local, atol=0.02)


def test_all_coins_of_a_photograph_are_apart_and_none_twice():
    """scikit-image's `coins`, Greek coins from Pompeii (Brooklyn Museum): 24, by its documentation; unevenly lit."""
    data = pytest.importorskip("skimage.data")
    coins = cv2.resize(data.coins(), None, fx=4, fy=4, interpolation=cv2.INTER_CUBIC)  # as large as parts are
    found = blobs_of(edge_map(coins), close_cells=1)  # some all but touch
    whole = found.cells >= 0.3 * np.median(found.cells)
    assert whole.sum() == 24
    assert found.cells[~whole].sum() < 0.1 * np.median(found.cells)


class Rendered(Pinhole):
    """The camera a recording was rendered with."""

    def __init__(self, truth: dict) -> None:
        self.k, self.lens = np.array(truth["K"]), np.array(truth["dist"])
        self.r, self.t = np.array(truth["R_cell_to_camera"]), np.array(truth["t_mm"])

    def to_pixel(self, points_mm):
        points = np.asarray(points_mm, dtype=float)
        turned = cv2.Rodrigues(self.r)[0]
        return cv2.projectPoints(points.reshape(-1, 1, 3), turned, self.t, self.k, self.lens)[0].reshape(
            (*points.shape[:-1], 2))

    def to_cell(self, pixels, height_mm):
        flat = np.asarray(pixels, dtype=float).reshape(-1, 1, 2)
        criteria = (cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 100, 1e-12)
        ray = cv2.undistortImagePoints(flat, self.k, self.lens, arg1=criteria)[:, 0]
        ray = np.column_stack([(ray - self.k[:2, 2]) / np.diag(self.k)[:2], np.ones(len(ray))]) @ self.r
        centre = -self.r.T @ self.t
        at = centre[:2] + ray[:, :2] * ((height_mm - centre[2]) / ray[:, 2])[:, None]
        return at.reshape(np.shape(pixels))


def rows(path) -> list[dict[str, str]]:
    with open(path, newline="") as file:
        return list(csv.DictReader(file))


def read_grey(path) -> np.ndarray:
    return cv2.imread(str(path), cv2.IMREAD_GRAYSCALE)


def test_the_demo_is_found_whole_right_and_once(demo, tmp_path):
    """Six frames of the demo, taught from its own images, against its true poses."""
    cell = tomllib.loads((demo / "cell.toml").read_text())
    camera = Rendered(json.loads((demo / "calibration" / "truth.json").read_text()))
    belt, surface = cell["belt"]["mm_per_count"], cell["belt"]["surface_mm"]
    parts = []
    for row in rows(demo / "teach" / "teach.csv"):
        kind = cell["parts"][row["part"]]
        turns = 0 if kind["symmetry"] == "round" else kind["symmetry"]
        moved = (float(row["counts"]) - float(row["touch_counts"])) * belt
        pose = (float(row["x_mm"]), float(row["y_mm"]) + moved, math.radians(float(row["yaw_deg"])))
        model = teach(read_grey(demo / "teach" / row["image"]), camera, surface,
                      Taught(row["part"], kind["height_mm"], turns, pose))
        (tmp_path / "model.json").write_text(model.as_json())
        parts.append(TaughtPart(row["part"], load_model(tmp_path / "model.json"), kind["height_mm"], turns))
    finder, truth = PartFinder(parts, surface), rows(demo / "truth.csv")
    true = np.array([[float(row["x_mm"]), float(row["y_mm"])] for row in truth])
    errors, found = [], 0
    for frame in rows(demo / "frames.csv")[2:24:4]:
        seen = finder.find(read_grey(demo / frame["file"]), camera)
        here = true + np.array([0.0, float(frame["counts"]) * belt])
        known = np.flatnonzero(seen.kind != "")
        apart = np.linalg.norm(seen.xy_mm[known, None] - here[None], axis=2)
        nearest = np.argmin(apart, axis=1)
        assert len(set(nearest)) == len(known)
        assert [truth[k]["part"] for k in nearest] == list(seen.kind[known])
        assert [truth[k]["side"] for k in nearest] == list(seen.side[known])
        errors += list(apart.min(axis=1))
        pixels = camera.to_pixel(np.column_stack([here, np.full(len(here), surface)]))
        inner = np.all((pixels > 110) & (pixels < [914, 690]), axis=1)
        assert set(np.flatnonzero(inner)) <= set(nearest)
        found += len(known)
    assert found >= 15
    assert np.median(errors) < 0.15
    assert np.percentile(errors, 95) < 0.4


@pytest.mark.parametrize("sigma", [1.0, 3.0, 8.0])
def test_noise_is_told_from_slopes_and_edges(sigma):
    """A ramp and a bright square are no noise."""
    rng = np.random.default_rng(1)
    level = np.tile(np.linspace(60, 140, 400), (300, 1))
    level[100:200, 100:200] += 80.0
    grey = np.clip(np.round(level + rng.normal(0, sigma, level.shape)), 0, 255).astype(np.uint8)
    assert noise_of(grey) == pytest.approx(sigma, rel=0.06)
