import csv
import json
from pathlib import Path

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from made_camera import MILD, SIZE, STRONG, image_net, made_camera, made_touches, map_errors_mm
from skimage.transform import ProjectiveTransform

from cameras.camera import CameraMap
from cameras.confidence import radius_95
from cameras.faults import InputFault
from cameras.lens import Lens
from cameras.lens_fit import LensFit
from cameras.plane import fit_plane, fit_touches
from cameras.touches import Carriage, read_touches
from pipeline.cell import load_cell

TILTED = made_camera(tilt_deg=(12.0, -7.0))


def test_exact_points_give_the_homographies_of_opencv_and_scikit_image():
    """Outside check: cv2.findHomography, skimage's ProjectiveTransform (after Hartley and Zisserman 2004, ch. 4)."""
    plane = np.array([[0.31, 0.05, 120.0], [-0.04, 0.30, -80.0], [1e-5, -4e-5, 1.0]])
    pixels = image_net(5, 5).reshape(-1, 2)
    points = cv2.perspectiveTransform(pixels[None], plane)[0]
    ours = fit_plane(pixels, points).to_cell(image_net(), 0.0).reshape(-1, 2)
    theirs = cv2.perspectiveTransform(image_net().reshape(1, -1, 2), cv2.findHomography(pixels, points)[0])[0]
    other = ProjectiveTransform.from_estimate(pixels, points)
    assert np.abs(ours - theirs).max() < 1e-4  # where OpenCV's refinement stops
    assert np.abs(ours - other(image_net().reshape(-1, 2))).max() < 1e-6


def test_noisy_points_give_the_homography_of_least_squares_in_mm():
    """Outside check: cv2.findHomography minimises the same distances, in mm, where no lens bends the field."""
    camera = made_camera(np.array([2600.0, 2604.0, 511.5, 399.5, 0, 0, 0, 0, 0]))
    touched = made_touches(camera)
    fit = fit_touches(touched.pixels, touched.points[:, :2], None, SIZE)
    plane, _ = cv2.findHomography(touched.pixels, touched.points[:, :2])
    theirs = cv2.perspectiveTransform(touched.pixels[None], plane)[0]
    assert fit.kept.all()
    if fit.map.lens.parameters[4] == 0.0:
        assert np.abs(fit.map.to_cell(touched.pixels) - theirs).max() < 1e-3
    assert fit.map.rms_mm <= np.sqrt(((theirs - touched.points[:, :2]) ** 2).sum(axis=1).mean()) + 1e-9


def test_published_homographies_are_found(reference_folder: Path):
    """Outside check: homography pairs of the MAGSAC repository (Barath and others 2019), exact and tentative."""
    folder = reference_folder / "images" / "homography_planar"
    rows = list(csv.DictReader((folder / "correspondences.csv").open()))
    for known in csv.DictReader((folder / "homographies.csv").open()):
        plane = np.array([[float(known[f"h{i}{j}"]) for j in range(3)] for i in range(3)])
        kinds = {}
        for kind in ("exact", "tentative"):
            some = [row for row in rows if row["pair"] == known["pair"] and row["kind"] == kind]
            kinds[kind] = (np.array([[float(r["xa"]), float(r["ya"])] for r in some]),
                           np.array([[float(r["xb"]), float(r["yb"])] for r in some]))  # fmt: skip
        there, here = kinds["exact"]
        assert np.abs(fit_plane(there, here).to_cell(there) - here).max() < 1e-6, known["pair"]
        fit = fit_touches(*kinds["tentative"])
        true = cv2.perspectiveTransform(kinds["tentative"][0][None], plane)[0]
        near = np.linalg.norm(true - kinds["tentative"][1], axis=1) < 3.0
        assert (fit.kept & near).sum() > 0.7 * near.sum(), known["pair"]
        assert np.median(np.linalg.norm(fit.map.to_cell(there) - here, axis=1)) < 5.0, known["pair"]


@pytest.mark.parametrize("basis", ["pose", "rays", "plane"])
@given(u=st.floats(0, 1023), v=st.floats(0, 799), height=st.floats(-80, 60))
@settings(max_examples=40, deadline=None)
def test_the_inverse_is_exact(basis, u, v, height):
    """Pixel to cell and back, at any height, whatever the map rests on."""
    camera = fitted(basis)
    assert np.abs(camera.to_pixel(camera.to_cell([u, v], height), height) - [u, v]).max() < 1e-6


FITTED: dict[str, CameraMap] = {}


def fitted(basis: str) -> CameraMap:
    """One fit for each basis, made once."""
    if basis not in FITTED:
        touched = made_touches(TILTED, off_plane=0 if basis == "plane" else 6)
        FITTED[basis] = fit_plane(touched.pixels, touched.points, TILTED.lens if basis == "pose" else None, SIZE)
        assert FITTED[basis].basis == basis
    return FITTED[basis]


@pytest.mark.parametrize(("basis", "most_mm"), [("pose", 0.10), ("rays", 0.25)])
def test_any_height_maps_right(basis, most_mm):
    for above in (0.0, 10.0, 30.0):
        assert map_errors_mm(fitted(basis), TILTED, TILTED.plane_mm + above).max() < most_mm


def test_height_matters():
    """What ignoring 16 mm costs: the map of the plane alone is off by millimetres there, and right on the plane."""
    flat = fitted("plane")
    assert map_errors_mm(flat, TILTED, TILTED.plane_mm).max() < 0.25
    assert map_errors_mm(flat, TILTED, TILTED.plane_mm + 16.0).max() > 2.0
    assert not flat.maps_height


@pytest.mark.parametrize("name", ["bells", "mixed"])
def test_rendered_cameras_are_mapped_to_a_tenth_of_a_millimetre(name, recordings_folder, lens_fits: dict[str, LensFit]):
    """From a recording's raw files alone, against the camera as rendered, on the surface and 16 and 30 mm above."""
    cell = load_cell(recordings_folder / name / "cell.toml")
    assert cell.belt is not None
    belt = Carriage(np.radians(cell.belt.heading_deg), cell.belt.mm_per_count, cell.belt.counts_modulus)
    marks = read_touches(recordings_folder / name / "calibration" / "touches.csv", belt)
    found = fit_plane(marks.pixels, marks.points, lens_fits[name].lens)
    true = rendered(recordings_folder / name)
    for above in (0.0, 16.0, 30.0):
        off = map_errors_mm(found, true, cell.surface_mm + above)
        assert np.sqrt((off**2).mean()) < 0.05
        assert off.max() < 0.10


def test_a_tray_needs_no_belt(recordings_folder):
    true = rendered(recordings_folder / "tray")
    marks = read_touches(recordings_folder / "tray" / "calibration" / "touches.csv")
    for lens, most in ((true.lens, 0.10), (None, 0.25)):
        found = fit_plane(marks.pixels, marks.points, lens, SIZE)
        assert max(map_errors_mm(found, true, above).max() for above in (0.0, 16.0, 30.0)) < most


def rendered(folder: Path) -> CameraMap:
    """The camera as it was rendered."""
    true = json.loads((folder / "calibration" / "truth.json").read_text())
    k = np.array(true["K"])
    lens = Lens(np.array([k[0, 0], k[1, 1], k[0, 2], k[1, 2], *true["dist"]]), SIZE)
    projection = np.column_stack([true["R_cell_to_camera"], true["t_mm"]])
    return CameraMap("pose", lens, projection, true["surface_mm"], np.zeros((15, 15)), 0.0, 0.0)


@pytest.mark.parametrize("size_mm", [1.0, 5.0, 60.0])
@pytest.mark.parametrize("known", [True, False])
def test_bad_touches_are_left_out_and_no_good_ones(known, size_mm):
    touched = made_touches(made_camera())
    bad = np.array([2, 9, 17])
    touched.points[bad, :2] += size_mm * np.array([[1.0, 0.3], [-0.5, 0.9], [0.2, -1.0]])
    fit = fit_touches(touched.pixels, touched.points, made_camera().lens if known else None, SIZE)
    assert np.flatnonzero(~fit.kept).tolist() == bad.tolist()
    assert (np.linalg.norm(fit.residuals_mm[bad], axis=1) > 0.8 * size_mm).all()
    assert map_errors_mm(fit.map, made_camera(), -50.0).max() < 0.3


def test_leave_one_out_is_what_leaving_one_out_gives():
    touched = made_touches(TILTED, off_plane=4)
    fit = fit_touches(touched.pixels, touched.points, TILTED.lens)
    for k in (0, 7, 25):
        others = np.arange(len(touched.pixels)) != k
        alone = fit_plane(touched.pixels[others], touched.points[others], TILTED.lens)
        off = alone.to_cell(touched.pixels[k], touched.points[k, 2]) - touched.points[k, :2]
        assert np.abs(off - fit.left_out_mm[k]).max() < 0.002
    assert fit.map.leave_one_out_rms_mm > fit.map.rms_mm


@pytest.mark.parametrize("known", [True, False])
def test_foretold_uncertainty_covers_the_true_errors(known):
    """95 % of the errors lie within the radius foretold for them: 20 sets of touches, 9 places, two heights."""
    camera = made_camera()
    lens = camera.lens if known else None
    at, height = np.stack([image_net(3, 3) * 0.8 + 80] * 2), camera.plane_mm + np.array([0.0, 16.0])[:, None, None]
    true = camera.to_cell(at, height)
    inside = []
    for seed in range(20):
        touched = made_touches(camera, 20, 6, seed=seed)
        found = fit_plane(touched.pixels, touched.points, lens, SIZE)
        off = np.linalg.norm(found.to_cell(at, height) - true, axis=-1)
        inside.append(off <= radius_95(found.covariance_mm2(true, height), found.freedom))
    assert 0.88 <= np.mean(inside) <= 0.995


def test_an_unsure_lens_makes_an_unsure_map():
    """What the lens file leaves open reaches the map, and `lens_known` takes just that away again."""
    sure = made_camera()
    error = np.diag(np.array([2.0, 2.0, 4.0, 4.0, 5e-3, 0.05, 1e-4, 1e-4, 0.0]) ** 2)
    unsure = Lens(MILD, SIZE, error)
    touched = made_touches(sure)
    with_error = fit_plane(touched.pixels, touched.points, unsure)
    without = fit_plane(touched.pixels, touched.points, sure.lens)
    at = sure.to_cell(image_net(), -34.0)
    assert (with_error.sigma_mm(at, -34.0) > 1.05 * without.sigma_mm(at, -34.0)).mean() > 0.9
    assert np.allclose(with_error.lens_known().sigma_mm(at, -34.0), without.sigma_mm(at, -34.0), rtol=0.1)


def test_sigma_is_the_scatter_of_the_map():
    """sigma_mm and yaw_sigma_rad against the scatter of maps drawn from the fit's covariance."""
    camera = fitted("pose")
    at, height = camera.to_cell([[200.0, 150.0], [900.0, 700.0]], -40.0), -40.0
    root = np.linalg.cholesky(camera.covariance[9:, 9:])
    drawn = np.random.default_rng(0).normal(size=(300, 6)) @ root.T
    maps = [camera.shifted(np.concatenate([np.zeros(9), one])) for one in drawn]
    pixels = camera.to_pixel(at, height)
    scatter = np.array([one.to_cell(pixels, height) for one in maps]).std(axis=0)
    assert np.allclose(camera.sigma_mm(at, height), np.sqrt((scatter**2).mean(axis=-1)), rtol=0.12)
    yaws = []
    for angle in np.pi / 4 * np.arange(4):
        end = camera.to_pixel(at + 20.0 * np.array([np.cos(angle), np.sin(angle)]), height)
        along = np.array([one.to_cell(end, height) - one.to_cell(pixels, height) for one in maps])
        yaws.append(np.angle(np.exp(1j * (np.arctan2(along[..., 1], along[..., 0]) - angle))).std(axis=0))
    assert np.allclose(camera.yaw_sigma_rad(at, height), np.sqrt(np.mean(np.square(yaws), axis=0)), rtol=0.15)


def test_mm_per_pixel_is_the_step_of_one_pixel():
    camera = made_camera()
    at, right, below = camera.to_cell([[700.0, 300.0], [701.0, 300.0], [700.0, 301.0]])
    step = np.array([right - at, below - at])
    assert camera.mm_per_pixel(at) == pytest.approx(np.sqrt(abs(np.linalg.det(step))), rel=1e-3)


@pytest.mark.parametrize(("pixels", "points"), [
    (image_net(1, 3).reshape(-1, 2), image_net(1, 3).reshape(-1, 2)),
    (np.repeat(image_net(1, 3).reshape(-1, 2), 4, axis=0), np.repeat(image_net(1, 3).reshape(-1, 2), 4, axis=0)),
    (np.column_stack([np.arange(9.0), np.arange(9.0)]), np.column_stack([np.arange(9.0), np.zeros(9)])),
    (np.array([[0, 0], [100, 0], [200, 0], [50, 300.0]]), np.array([[0, 0], [10, 0], [20, 0], [5, 30.0]])),
    (np.full((6, 2), np.nan), np.ones((6, 2))),
    (image_net(2, 3).reshape(-1, 2), np.random.default_rng(1).uniform(0, 300, (5, 2))),
    (np.zeros((0, 2)), np.zeros((0, 3))),
])  # fmt: skip
def test_touches_that_determine_no_map_are_a_fault(pixels, points):
    """Three points, three points often, a line, three of four on a line, NaN, a missing point, none at all."""
    with pytest.raises(InputFault):
        fit_plane(pixels, points)


def test_random_touches_agree_on_no_map():
    rng = np.random.default_rng(5)
    with pytest.raises(InputFault, match="agree"):
        fit_plane(rng.uniform(0, 800, (30, 2)), rng.uniform(0, 300, (30, 2)))


@pytest.mark.parametrize("n", [4, 5, 6])
def test_few_touches_make_an_honest_map(n):
    """With none to spare a pixel is assumed; the true error is no more than four times what is foretold."""
    camera = made_camera()
    touched = made_touches(camera, n=9)
    some = np.array([0, 1, 2, 3, 4, 5])[:n]
    found = fit_plane(touched.pixels[some], touched.points[some], camera.lens)
    at = touched.points[some, :2].mean(axis=0)
    off = np.linalg.norm(found.to_cell(camera.to_pixel(at)) - at)
    assert off < 4 * max(float(found.sigma_mm(at)), 0.05)


def test_a_strong_lens_is_no_worse():
    camera = made_camera(STRONG, above_mm=400.0)
    touched = made_touches(camera)
    assert map_errors_mm(fit_plane(touched.pixels, touched.points, camera.lens), camera, -40.0).max() < 0.25
