"""Detections made elsewhere: into the cell frame, or refused by line."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from cameras.faults import InputFault
from cameras.locate import SIGMA_MM, SIGMA_PX, read_detections, read_located
from cameras.recording import read_recording

LOCATED = "frame,part,x_mm,y_mm,yaw_deg,score"
DETECTED = "frame,part,u_px,v_px,angle_deg,score"
HEIGHTS = {"lever": 10.0, "dome": 30.0}
FROM_ABOVE_MM = 800.0


class Pinhole:
    """A camera 800 mm above the cell's origin looking straight down, u along +x, v along -y: 1000 px focal length."""

    def to_cell(self, pixels, height_mm=None):
        height = 0.0 if height_mm is None else np.asarray(height_mm)[..., None]
        ray = (np.asarray(pixels) - [500.0, 400.0]) / 1000.0 * [1.0, -1.0]
        return ray * (FROM_ABOVE_MM - height)


ONE_CAMERA = {"left": Pinhole()}
TWO_CAMERAS = {"left": Pinhole(), "right": Pinhole()}


@pytest.fixture
def recording(tmp_path):
    rows = [f"{10 * k},none.png,{k},{k * 100},{'left' if k % 2 else 'right'}" for k in range(6)]
    (tmp_path / "frames.csv").write_text("\n".join(["frame,file,time_s,counts,camera", *rows]), encoding="utf-8")
    return read_recording(tmp_path, images=False)


def table(recording, header, *rows):
    path = recording.folder / "table.csv"
    path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return path


def test_located_poses_are_sorted_by_frame_and_wrapped(recording):
    path = table(recording, LOCATED + ",side", "30,dome,1,2,370,0.5,", "10,lever,3,4,-90,1,down", "10,,5,6,0,0.1,up")
    seen = read_located(path, recording, HEIGHTS)
    assert seen.row.tolist() == [1, 1, 3]
    assert seen.kind.tolist() == ["lever", "", "dome"]
    assert seen.side.tolist() == ["down", "up", ""]
    assert np.allclose(seen.yaw_rad, np.radians([-90, 0, 10]))
    assert np.allclose(seen.sigma_mm, SIGMA_MM)


def test_without_a_side_all_lie_up_and_given_sigmas_are_kept(recording):
    seen = read_located(table(recording, LOCATED + ",sigma_mm", "0,dome,1,2,3,1,0.07"), recording, HEIGHTS)
    assert seen.side.tolist() == ["up"]
    assert seen.sigma_mm.tolist() == [0.07]


def test_no_rows_are_no_sightings(recording):
    assert len(read_located(table(recording, LOCATED), recording, HEIGHTS)) == 0
    assert len(read_detections(table(recording, DETECTED), recording, TWO_CAMERAS, HEIGHTS)) == 0


def test_detections_are_mapped_at_their_parts_height(recording):
    """Against the pinhole's similar triangles: mm per pixel is the distance over the focal length."""
    path = table(recording, DETECTED, "0,lever,600,300,30,0.9", "10,dome,600,300,-75,0.9", "20,,600,300,0,0")
    seen = read_detections(path, recording, TWO_CAMERAS, HEIGHTS)
    assert np.allclose(seen.xy_mm, [[79, 79], [77, 77], [80, 80]])
    assert np.allclose(seen.yaw_rad, np.radians([30, -75, 0]))
    assert np.allclose(seen.sigma_mm, SIGMA_PX * np.array([0.79, 0.77, 0.8]))


@pytest.mark.parametrize(
    ("header", "row", "place", "words"),
    [
        (LOCATED, "7,dome,1,2,3,1", "frame", "not in frames.csv"),
        (LOCATED, "10,lver,1,2,3,1", "part", "did you mean 'lever'"),
        (LOCATED, "10,dome,nan,2,3,1", "x_mm", "not finite"),
        (LOCATED, "10,dome,1e300,2,3,1", "x_mm", "outside any cell"),
        (LOCATED, "10,dome,1,2,3,85", "score", "share of 0 to 1"),
        (LOCATED + ",side", "10,dome,1,2,3,1,left", "side", "up, down"),
        (LOCATED + ",sigma_mm", "10,dome,1,2,3,1,0", "sigma_mm", "standard deviation"),
        (DETECTED, "10,dome,1e300,2,3,1", "u_px", "outside any image"),
        (DETECTED, "0,dome,1,2,3,1", "frame", "no calibration"),
        (DETECTED, "10,dome,1,2,3", "", "5 values for 6"),
    ],
)
def test_a_wrong_row_is_named_by_its_line(recording, header, row, place, words):
    path = table(recording, header, row)
    located = header.startswith(LOCATED)
    with pytest.raises(InputFault) as caught:
        read_located(path, recording, HEIGHTS) if located else read_detections(path, recording, ONE_CAMERA, HEIGHTS)
    assert caught.value.place.startswith("line 2")
    assert place in caught.value.place
    assert words in caught.value.line


def test_a_pixel_that_meets_no_belt_is_refused(recording):
    class Horizon(Pinhole):
        def to_cell(self, pixels, height_mm=None):
            return np.full(np.shape(pixels), np.nan)

    with pytest.raises(InputFault, match="no point of the cell"):
        read_detections(table(recording, DETECTED, "10,dome,1,2,3,1"), recording, {"left": Horizon()}, HEIGHTS)


CELLS = st.sampled_from(["0", "10", "dome", "", "nan", "-1e308", "1e309", "up", '"', "\x00", "10\n", "½", "0.5"])


@settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(rows=st.lists(st.lists(CELLS, min_size=5, max_size=8), max_size=4), detected=st.booleans())
def test_any_table_is_read_or_a_fault(recording, rows, detected):
    path = table(recording, DETECTED if detected else LOCATED, *(",".join(row) for row in rows))
    try:
        if detected:
            seen = read_detections(path, recording, TWO_CAMERAS, HEIGHTS)
        else:
            seen = read_located(path, recording, HEIGHTS)
    except InputFault:
        return
    assert np.isfinite(seen.xy_mm).all()
    assert np.isfinite(seen.yaw_rad).all()


def test_recorded_streams_are_read_whole(recordings_folder):
    folder = recordings_folder / "streams" / "mid-10-poisson"
    stream = read_recording(folder, images=False)
    seen = read_located(folder / "located.csv", stream, ["lever", "plate", "dome", "gear"])
    assert len(seen) == len((folder / "located.csv").read_text(encoding="utf-8").splitlines()) - 1
    assert (np.diff(seen.row) >= 0).all()
