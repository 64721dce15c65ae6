import csv

import numpy as np
import pytest
from made_camera import MILD, SIZE, image_net, made_camera, made_touches

from cameras.confidence import radius_95
from cameras.faults import InputFault
from cameras.field import field_of, parallax_mm, share_touched
from cameras.lens import Lens
from cameras.plane import fit_touches
from cameras.plane_checks import carry_drift, plane_warnings
from cameras.touches import Carriage, Touches, read_touches
from cameras.uncertainty import draw_uncertainty

CAMERA = made_camera()
TOUCHED = made_touches(CAMERA, 30)


def fit_of(rows: np.ndarray, lens: Lens | None = CAMERA.lens):
    return fit_touches(TOUCHED.pixels[rows], TOUCHED.points[rows], lens, SIZE)


def warnings_of(rows: np.ndarray) -> str:
    fit = fit_of(rows)
    return "; ".join(plane_warnings(fit, field_of(fit.map, CAMERA.plane_mm)))


def test_good_touches_raise_no_warning():
    assert warnings_of(np.arange(30)) == ""


def test_few_touches_are_warned_of():
    assert "only 6 touches" in warnings_of(np.arange(6))


def test_touches_nearly_on_a_line_are_warned_of():
    touched = made_touches(CAMERA, 30)
    touched.pixels[:, 1] = 400 + 0.05 * (touched.pixels[:, 1] - 400)
    touched.points[:, :2] = CAMERA.to_cell(touched.pixels)
    fit = fit_touches(touched.pixels + 0.1 * np.random.default_rng(0).normal(size=(30, 2)), touched.points, CAMERA.lens)
    assert "nearly on a line" in "; ".join(plane_warnings(fit, field_of(fit.map, CAMERA.plane_mm)))


def test_a_field_outside_the_touched_hull_is_warned_of():
    corner = np.flatnonzero((TOUCHED.pixels < [620, 480]).all(axis=1))
    assert "extrapolated" in warnings_of(corner)


def test_a_lens_file_of_another_camera_is_warned_of():
    other = Lens(MILD * np.array([0.5, 0.5, 1, 1, 2.5, 1, 1, 1, 1]), SIZE)
    fit = fit_of(np.arange(30), other)
    assert any("without the lens file" in line for line in plane_warnings(fit, field_of(fit.map, -50.0)))


def test_a_wrong_belt_scale_shows_in_the_touches():
    """Marks moved back by a scale 0.4 % too small and a heading 0.3 degrees off: found again from the residuals."""
    rng = np.random.default_rng(3)
    travel = rng.uniform(150, 650, 30)
    along, across = np.array([0.0, 1.0]), np.array([-1.0, 0.0])
    moved = TOUCHED.points.copy()
    moved[:, :2] += travel[:, None] * (0.004 * along + np.radians(0.3) * across)
    drift = carry_drift(fit_touches(TOUCHED.pixels, moved, CAMERA.lens), travel, np.pi / 2)
    assert drift is not None
    assert drift.certain
    assert drift.along == pytest.approx(0.004, abs=4 * drift.along_error)
    assert drift.across == pytest.approx(np.radians(0.3), abs=4 * drift.across_error)
    right = carry_drift(fit_of(np.arange(30)), travel, np.pi / 2)
    assert right is not None
    assert not right.certain
    assert carry_drift(fit_of(np.arange(30)), np.zeros(30), np.pi / 2) is None


def test_parallax_is_what_similar_triangles_say():
    """Straight from above, a top h up is put off by r h / (H - h), r from the foot of the camera (common geometry)."""
    camera = made_camera(tilt_deg=(0.0, 0.0), above_mm=800.0)
    off = parallax_mm(camera, field_of(camera, -50.0), 16.0)
    r = np.linalg.norm(field_of(camera, -50.0).points_mm - [320.0, 40.0], axis=-1)
    assert np.allclose(off, r * 16.0 / 800.0, rtol=1e-6)


def test_share_touched_is_the_share_of_the_hull():
    fit = fit_of(np.arange(30))
    field = field_of(fit.map, -50.0, 101, 101)
    edge = np.roll(fit.map.touched_px, -1, axis=0)
    area = 0.5 * abs(np.sum(fit.map.touched_px[:, 0] * edge[:, 1] - fit.map.touched_px[:, 1] * edge[:, 0]))
    assert share_touched(fit.map, field) == pytest.approx(area / (1023 * 799), abs=0.02)


def test_radius_holds_95_percent():
    """Against 200,000 drawn errors; and the known ends, 1.960 of a line and 2.448 of a round one."""
    drawn = np.random.default_rng(0).normal(size=(200_000, 2)) * [2.0, 1.0]
    inside = np.linalg.norm(drawn, axis=1) <= radius_95(np.diag([4.0, 1.0]))
    assert inside.mean() == pytest.approx(0.95, abs=0.002)
    assert radius_95(np.diag([1.0, 0.0])) == pytest.approx(1.959964, abs=1e-4)
    assert radius_95(np.eye(2)) == pytest.approx(np.sqrt(-2 * np.log(0.05)), abs=1e-4)
    assert radius_95(np.eye(2), 10) > radius_95(np.eye(2), 50) > radius_95(np.eye(2))
    assert radius_95(np.eye(2), 0) == np.inf


@pytest.mark.parametrize("n", [4, 30])
def test_the_picture_is_drawn_even_where_nothing_is_known(n, tmp_path):
    fit = fit_of(np.array([0, 5, 22, 29]) if n == 4 else np.arange(n), None)
    draw_uncertainty(fit, field_of(fit.map, -50.0)).savefig(tmp_path / "picture.png")
    assert (tmp_path / "picture.png").stat().st_size > 10_000


@pytest.mark.parametrize(("scale", "modulus", "seen", "touched", "travel"), [
    (0.05, None, 100, 300, 10.0), (0.05, None, 300, 100, -10.0), (0.05, 65536, 65500, 64, 5.0),
    (0.05, 65536, 64, 65500, 3271.8), (-0.05, 65536, 64, 65500, 5.0), (0.05, 65536, 7, 7, 0.0),
])  # fmt: skip
def test_the_belt_runs_forward_from_image_to_touch(scale, modulus, seen, touched, travel):
    ran = Carriage(0.0, scale, modulus).travel_mm(np.array([seen]), np.array([touched]))
    assert ran == pytest.approx([travel])


def written(path, rows, header="u_px,v_px,counts,x_mm,y_mm,z_mm,touch_counts"):
    with path.open("w", newline="") as file:
        csv.writer(file).writerows([header.split(","), *rows])
    return path


def test_touches_are_moved_back_to_the_moment_of_the_image(tmp_path):
    file = written(tmp_path / "t.csv", [(10, 20, 1000, 300.0, 50.0, -5.0, 3000), (30, 40, 0, 1, 2, 3, 0)])
    marks = read_touches(file, Carriage(np.pi / 2, 0.05))
    assert isinstance(marks, Touches)
    assert np.allclose(marks.points, [[300.0, -50.0, -5.0], [1, 2, 3]])
    assert marks.line.tolist() == [2, 3]


def test_cameras_are_told_apart(tmp_path):
    rows = [(*pixel, 0, 1, 2, 3, 0, name) for pixel, name in zip(image_net(1, 4)[0], "aabb", strict=True)]
    file = written(tmp_path / "t.csv", rows, "u_px,v_px,counts,x_mm,y_mm,z_mm,touch_counts,camera")
    assert len(read_touches(file, camera="b").pixels) == 2
    with pytest.raises(InputFault, match="--camera"):
        read_touches(file)
    with pytest.raises(InputFault, match="no touch of camera"):
        read_touches(file, camera="c")


def test_a_pixel_outside_the_image_names_its_row(tmp_path):
    """Such touches are of another camera, or at another image size."""
    file = written(tmp_path / "t.csv", [(10, 20, 0, 300, 50, -5, 0), (1024, 20, 0, 300, 50, -5, 0)])
    assert len(read_touches(file).pixels) == 2
    with pytest.raises(InputFault, match="outside an image of 1024 x 800") as fault:
        read_touches(file, image_size_px=SIZE)
    assert fault.value.place == "line 3"


@pytest.mark.parametrize(("row", "what"), [
    ((10, 20, 1000, 300, 50, -5, 3000), "no belt"), ((1e9, 20, 0, 300, 50, -5, 0), "out of all bounds"),
    (("nan", 20, 0, 300, 50, -5, 0), "not finite"), ((10, 20, 0.5, 300, 50, -5, 0), "whole number"),
])  # fmt: skip
def test_touches_that_will_not_do_name_their_row(tmp_path, row, what):
    with pytest.raises(InputFault, match=what) as fault:
        read_touches(written(tmp_path / "t.csv", [row]))
    assert "line 2" in fault.value.place
