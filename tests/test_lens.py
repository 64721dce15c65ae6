import json
from pathlib import Path

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from made_camera import MILD, SIZE, STRONG, image_net

from cameras.boards import View, checked_board, view_of
from cameras.camera import rotation
from cameras.coverage import draw_coverage, uncovered_corners
from cameras.faults import InputFault
from cameras.lens import NAMES, Lens, load_lens
from cameras.lens_fit import LensFit, fit_lens

BOARD = checked_board("9x6", 20.0, "", 0.0)


def made_views(parameters: np.ndarray, noise_px: float, seed: int = 0, n: int = 12) -> list[View]:
    """Board corners projected by OpenCV, tilted about 25 degrees all ways, with noise."""
    rng = np.random.default_rng(seed)
    points = np.column_stack([BOARD.points_mm - BOARD.points_mm.mean(axis=0), np.zeros(len(BOARD.points_mm))])
    matrix = np.array([[parameters[0], 0, parameters[2]], [0, parameters[1], parameters[3]], [0, 0, 1.0]])
    views = []
    for k in range(n):
        way = 2 * np.pi * k / n
        turn = cv2.Rodrigues(rotation(np.array([0.45 * np.cos(way), 0.45 * np.sin(way), rng.uniform(-0.5, 0.5)])))[0]
        away = parameters[0] * rng.uniform(0.32, 0.5)
        shift = np.array([*(rng.uniform(-0.11, 0.11, 2) * [1.2, 0.9] * away * 1000 / parameters[0]), away])
        seen = cv2.projectPoints(points, turn, shift, matrix, parameters[4:])[0].reshape(-1, 2)
        views.append(View(f"view {k}", SIZE, seen + rng.normal(0, noise_px, seen.shape), BOARD.points_mm))
    return views


def radial(k3: float) -> np.ndarray:
    return np.array([*STRONG[:4], -0.28, 0.09, 6e-4, -4e-4, k3])


@pytest.mark.parametrize("parameters", [MILD, STRONG])
def test_undistorted_and_distorted_back_is_the_same_pixel(parameters):
    lens = Lens(parameters, SIZE)
    assert np.abs(lens.pixels(lens.rays(image_net())) - image_net()).max() < 1e-6


@given(k1=st.floats(-0.3, 0.3), k2=st.floats(-0.05, 0.05), p=st.floats(-1e-3, 1e-3), x=st.floats(-0.6, 0.6),
       y=st.floats(-0.6, 0.6))  # fmt: skip
@settings(max_examples=60, deadline=None)
def test_rays_survive_any_sane_lens(k1, k2, p, x, y):
    """A ray on the near side of the fold comes back as itself."""
    lens = Lens(np.array([900.0, 910.0, 500.0, 400.0, k1, k2, p, -p, 0.0]), SIZE)
    assert np.allclose(lens.rays(lens.pixels([x, y])), [x, y], atol=1e-9)


def test_a_pixel_beyond_the_fold_has_no_ray():
    """With k1 = -0.3 the distorted radius never exceeds 0.7027: farther out there is nothing to see."""
    lens = Lens(np.array([100.0, 100.0, 0.0, 0.0, -0.3, 0, 0, 0, 0]), SIZE)
    assert np.isfinite(lens.rays([70.0, 0.0])).all()
    assert np.isnan(lens.rays([70.6, 0.0])).all()


def test_distortion_is_that_of_opencv():
    """Outside check: cv2.projectPoints of the same rays."""
    rays = Lens(STRONG, SIZE).rays(image_net()).reshape(-1, 2)
    matrix = np.array([[STRONG[0], 0, STRONG[2]], [0, STRONG[1], STRONG[3]], [0, 0, 1.0]])
    points = np.column_stack([rays, np.ones(len(rays))])
    theirs = cv2.projectPoints(points, np.zeros(3), np.zeros(3), matrix, STRONG[4:])[0]
    assert np.abs(theirs.reshape(-1, 2) - Lens(STRONG, SIZE).pixels(rays)).max() < 1e-9


def test_the_usual_few_iterations_would_not_do():
    """Outside check: OpenCV's default undistortion leaves more of a pixel at the edge of a strong lens than we do."""
    matrix = np.array([[STRONG[0], 0, STRONG[2]], [0, STRONG[1], STRONG[3]], [0, 0, 1.0]])
    corner = np.array([[0.0, 0.0]])
    theirs = cv2.undistortPoints(corner[None], matrix, STRONG[4:])[0]
    lens = Lens(STRONG, SIZE)
    assert np.linalg.norm(lens.pixels(theirs) - corner) > 1e-3 > np.linalg.norm(lens.pixels(lens.rays(corner)) - corner)


@pytest.mark.parametrize("parameters", [MILD, radial(0.0), radial(-0.06)])
def test_lens_is_found_within_its_standard_errors(parameters):
    """Zhang (2000): the views of a flat board determine the lens."""
    fit = fit_lens(made_views(parameters, 0.05))
    free = fit.lens.standard_errors > 0
    assert (np.abs(fit.lens.parameters - parameters)[free] < 4 * fit.lens.standard_errors[free]).all()
    assert fit.rms_px == pytest.approx(0.05 * np.sqrt(2), rel=0.1)


def test_standard_errors_are_those_of_opencv_and_of_repetition():
    """Outside check: cv2.calibrateCameraExtended's deviations; then the scatter over 25 made calibrations."""
    views = made_views(MILD, 0.05)
    flat = [np.column_stack([v.points_mm, np.zeros(54)]).astype(np.float32) for v in views]
    theirs = cv2.calibrateCameraExtended(flat, [v.pixels.astype(np.float32) for v in views], SIZE, None, None,
                                         flags=cv2.CALIB_FIX_K3)[5].ravel()[:8]  # fmt: skip
    ours = fit_lens(views).lens.standard_errors[:8]
    assert np.allclose(ours, theirs, rtol=0.1)
    found = np.array([fit_lens(made_views(MILD, 0.05, seed)).lens.parameters[:5] for seed in range(25)])
    mean = np.mean([fit_lens(made_views(MILD, 0.05, seed)).lens.standard_errors[:5] for seed in range(5)], axis=0)
    assert np.allclose(found.std(axis=0) / mean, 1.0, atol=0.45)


def test_sixth_order_is_fitted_only_where_it_earns_its_place():
    assert fit_lens(made_views(MILD, 0.05)).lens.parameters[8] == 0.0
    assert fit_lens(made_views(radial(-0.06), 0.05)).lens.parameters[8] == pytest.approx(-0.06, abs=0.02)


def test_a_view_that_spoils_the_fit_is_named():
    views = made_views(MILD, 0.05)
    views[4] = View("bad", SIZE, views[4].pixels + np.random.default_rng(1).normal(0, 0.6, (54, 2)), BOARD.points_mm)
    fit = fit_lens(views)
    assert fit.spoilers == [4]
    assert fit_lens([view for k, view in enumerate(views) if k != 4]).spoilers == []


def test_corners_of_the_image_never_covered_are_named():
    net = image_net().reshape(-1, 2)
    whole = View("whole", SIZE, net, net)
    left = View("left", SIZE, net[net[:, 0] < 600], net[net[:, 0] < 600])
    assert uncovered_corners([whole]) == []
    assert uncovered_corners([left]) == ["top right", "bottom right"]
    assert draw_coverage([whole, left], np.array([0.1, 0.2]), [1]).get_axes()


def test_too_few_views_and_mixed_sizes_are_faults():
    views = made_views(MILD, 0.05, n=3)
    with pytest.raises(InputFault, match="3 are the least"):
        fit_lens(views[:2])
    with pytest.raises(InputFault, match="one size"):
        fit_lens([*views[:2], View("other", (640, 480), views[2].pixels, views[2].points_mm)])


def test_lens_file_comes_back_as_it_went(tmp_path):
    fit = fit_lens(made_views(MILD, 0.05))
    path = tmp_path / "lens.json"
    path.write_text(json.dumps(fit.document()))
    back = load_lens(path)
    assert (back.parameters == fit.lens.parameters).all()
    assert (back.covariance == fit.lens.covariance).all()
    assert back.image_size_px == SIZE


@pytest.mark.parametrize(("change", "place"), [
    ({"kind": "camera"}, "kind"), ({"format": 2}, "format"), ({"fx_px": -1.0}, "fx_px"), ({"fx_px": "a"}, "fx_px"),
    ({"k1": float("nan")}, "k1"), ({"covariance": [[1.0]]}, "covariance"),
    ({"covariance": [[1], [1, 2]]}, "covariance"), ({"image_size_px": [0, 10]}, "image_size_px"),
    ({"colour": 1}, "colour"), ({"k2": None}, "k2"),
])  # fmt: skip
def test_a_lens_file_that_will_not_do_is_named_by_key(tmp_path, change, place):
    document = {**Lens(MILD, SIZE).document(), **change}
    path = tmp_path / "lens.json"
    path.write_text(json.dumps(document))
    with pytest.raises(InputFault) as fault:
        load_lens(path)
    assert fault.value.place == place
    assert "calibrate lens" in fault.value.remedy


@pytest.mark.parametrize("content", [b"", b"[1, 2]", b"{", b"\xff\xfe", b"[" * 100000])
def test_what_is_no_json_object_is_a_fault(tmp_path, content):
    (tmp_path / "lens.json").write_bytes(content)
    with pytest.raises(InputFault):
        load_lens(tmp_path / "lens.json")


def test_open_chessboard_images(reference_folder: Path):
    """Outside check: OpenCV's sample images right01..14.jpg; published f = 534.8 px (intrinsics.yml, M2)."""
    files = sorted((reference_folder / "images" / "calib_chessboard").glob("right*.jpg"))
    views = [view_of(file, checked_board("9x6", 25.0, "", 0.0)) for file in files]
    assert len(views) == 13
    fit = fit_lens([view for view in views if view is not None])
    assert len(fit.views) == 13
    assert fit.rms_px <= 0.50
    assert np.allclose(fit.lens.parameters[:2], 534.80, rtol=0.02)


def test_open_charuco_image(reference_folder: Path):
    """Outside check: opencv_contrib's aruco tutorial image img_01.jpg, 24 corners, 0.218 px about their plane."""
    file = reference_folder / "images" / "calib_charuco" / "img_01.jpg"
    view = view_of(file, checked_board("4x6", 40.0, "DICT_6X6_250", 20.0))
    assert view is not None
    assert len(view.pixels) == 24
    plane, _ = cv2.findHomography(view.points_mm, view.pixels)
    off = cv2.perspectiveTransform(view.points_mm[None], plane)[0] - view.pixels
    assert np.sqrt((off**2).sum(axis=1).mean()) == pytest.approx(0.218, abs=0.01)


def test_rendered_lenses_are_found(lens_fits: dict[str, LensFit], recordings_folder: Path):
    """The lens as rendered lies within four standard errors, and the fit is near the corners' own noise."""
    for name, fit in lens_fits.items():
        true = json.loads((recordings_folder / name / "calibration" / "truth.json").read_text())
        wanted = np.array([true["K"][0][0], true["K"][1][1], true["K"][0][2], true["K"][1][2], *true["dist"]])
        free = fit.lens.standard_errors > 0
        assert (np.abs(fit.lens.parameters - wanted)[free] < 4 * fit.lens.standard_errors[free]).all(), name
        assert fit.rms_px < 0.1
        assert len(NAMES) == len(wanted)
