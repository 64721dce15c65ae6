"""Recordings: read whole or refused with a file, a place, a fault and a remedy."""

import pickle
import struct
import zlib

import cv2
import numpy as np
import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from cameras.faults import InputFault
from cameras.image import MOST_PIXELS, image_header, read_image
from cameras.recording import read_recording, split_video

ROWS = [(0, "a.png", 0.5, 100), (1, "b.png", 0.6, 220), (2, "c.png", 0.7, 340)]
PICTURE = (np.random.default_rng(0).random((40, 60)) * 255).astype(np.uint8)
FORMATS = [".png", ".jpg", ".tif", ".bmp"]


def encoded(extension, picture=PICTURE, *options):
    return cv2.imencode(extension, picture, list(options))[1].tobytes()


def written(folder, rows=ROWS, header="frame,file,time_s,counts", picture=True):
    text = [",".join(str(value) for value in row) for row in rows]
    (folder / "frames.csv").write_text("\n".join([header, *text]) + "\n", encoding="utf-8")
    for row in rows if picture else ():
        (folder / row[1]).write_bytes(encoded(".png"))
    return folder


def fault_of(call, *arguments, **options):
    with pytest.raises(InputFault) as caught:
        call(*arguments, **options)
    assert "\n" not in caught.value.line
    assert all(part for part in (caught.value.file, caught.value.fault, caught.value.remedy))
    return caught.value


def test_reads_frames_and_images(tmp_path):
    recording = read_recording(written(tmp_path))
    assert len(recording) == 3
    assert recording.files == ("a.png", "b.png", "c.png")
    assert recording.counts.tolist() == [100, 220, 340]
    assert np.array_equal(recording.image(1), PICTURE)


def test_colour_is_kept_and_transparency_dropped(tmp_path):
    colour = np.dstack([PICTURE, PICTURE // 2, PICTURE // 3, PICTURE])
    written(tmp_path)
    (tmp_path / "a.png").write_bytes(encoded(".png", colour))
    assert np.array_equal(read_recording(tmp_path).image(0), colour[:, :, :3])


def test_rows_are_found_by_frame_number(tmp_path):
    recording = read_recording(written(tmp_path, [(7, "a.png", 0, 0), (3, "b.png", 1, 0), (12, "c.png", 2, 0)]))
    assert recording.row_of([[3, 7], [12, 4]]).tolist() == [[1, 0], [2, -1]]
    assert recording.row_of([99, -1]).tolist() == [-1, -1]


def test_counts_are_unwrapped_in_either_direction(tmp_path):
    rows = [(k, f"{k}.png", k, counts) for k, counts in enumerate([990, 10, 9, 500, 10, 990])]
    assert read_recording(written(tmp_path, rows), 1000).counts.tolist() == [990, 1010, 1009, 1500, 1010, 990]


@pytest.mark.parametrize(
    ("rows", "place"),
    [
        ([*ROWS, (3, "d.png", 0.7, 400)], "line 5, time_s"),
        ([*ROWS, (3, "d.png", 0.1, 400)], "line 5, time_s"),
        ([*ROWS, (1, "d.png", 0.9, 400)], "line 5, frame"),
        ([*ROWS, (3, "d.png", 0.9, 1000)], "line 5, counts"),
        ([*ROWS, (3, "d.png", 0.9, -1)], "line 5, counts"),
        ([*ROWS, (3, "d.png", "nan", 400)], "line 5, time_s"),
        ([*ROWS, (3, "d.png", "soon", 400)], "line 5, time_s"),
        ([*ROWS, (3, "d.png", 1e300, 400)], "line 5, time_s"),
        ([*ROWS, (3.5, "d.png", 0.9, 400)], "line 5, frame"),
        ([*ROWS, (3, "d.png", 0.9)], "line 5"),
        ([], "line 1"),
    ],
)
def test_a_wrong_row_is_named_by_its_line(tmp_path, rows, place):
    fault = fault_of(read_recording, written(tmp_path, rows, picture=False), 1000, images=False)
    assert fault.place == place
    assert fault.file.endswith("frames.csv")


def test_missing_columns_and_empty_files_are_refused(tmp_path):
    assert "counts" in fault_of(read_recording, written(tmp_path, [], "frame,file,time_s")).fault
    (tmp_path / "frames.csv").write_text("", encoding="utf-8")
    assert "empty" in fault_of(read_recording, tmp_path).fault
    assert "no such file" in fault_of(read_recording, tmp_path / "nowhere").fault


@pytest.mark.parametrize(
    "name", ["../a.png", "/etc/passwd", "sub/../../a.png", "C:\\a.png", "..\\a.png", "\\\\host\\a.png", "link.png",
             "link/a.png", "a\x00.png", "../clip.mp4#3"]
)  # fmt: skip
def test_names_that_leave_the_recording_are_refused(tmp_path, name):
    folder = tmp_path / "recording"
    folder.mkdir()
    (tmp_path / "a.png").write_bytes(encoded(".png"))
    (folder / "link.png").symlink_to(tmp_path / "a.png")
    (folder / "link").symlink_to(tmp_path)
    fault = fault_of(read_recording, written(folder, [(0, name, 0, 0)], picture=False))
    assert fault.place == "line 2, file"
    assert "leads out" in fault.fault


def test_a_linked_recording_folder_is_read(tmp_path):
    (tmp_path / "real").mkdir()
    written(tmp_path / "real")
    (tmp_path / "linked").symlink_to(tmp_path / "real")
    assert len(read_recording(tmp_path / "linked")) == 3


@pytest.mark.parametrize("name", ["absent.png", "", ".", "folder", "x" * 400 + ".png", "absent.mp4#1"])
def test_missing_images_are_told_at_once(tmp_path, name):
    (tmp_path / "folder").mkdir()
    fault = fault_of(read_recording, written(tmp_path, [(0, name, 0, 0)], picture=False))
    assert fault.place == "line 2, file"


def test_images_that_are_not_wanted_are_never_touched(tmp_path):
    recording = read_recording(written(tmp_path, [(0, "../../gone.png", 0, 0)], picture=False), images=False)
    assert len(recording) == 1


def sixteen_bit():
    return encoded(".png", PICTURE.astype(np.uint16) * 256)


def vast_png():
    header = struct.pack(">IIBBBBB", 60_000, 60_000, 8, 0, 0, 0, 0)
    chunk = struct.pack(">I", 13) + b"IHDR" + header + struct.pack(">I", zlib.crc32(b"IHDR" + header))
    return b"\x89PNG\r\n\x1a\n" + chunk


@pytest.mark.parametrize(
    ("data", "fault"),
    [
        (encoded(".png")[:-200], "cut short"),
        (encoded(".jpg")[:-2], "cut short"),
        (encoded(".png", PICTURE)[:500] + b"\x55" + encoded(".png", PICTURE)[501:], "damaged"),
        (encoded(".tif")[:-300], "cut short"),
        (encoded(".bmp")[:-300], "cut short"),
        (sixteen_bit(), "16 bits"),
        (vast_png(), "60000 x 60000"),
        (b"", "empty"),
        (b"no image at all", "not a PNG"),
        (encoded(".png", np.zeros((41, 60), np.uint8)), "60 x 41"),
    ],
)
def test_a_bad_image_is_named_with_its_line(tmp_path, data, fault):
    written(tmp_path)
    (tmp_path / "b.png").write_bytes(data)
    told = fault_of(read_recording(tmp_path).image, 1)
    assert fault in told.fault
    assert told.file.endswith("b.png")
    assert told.place == "line 3 of frames.csv"


@pytest.mark.parametrize("extension", FORMATS)
def test_every_cut_of_an_image_is_noticed(tmp_path, extension):
    """Decoders may fill the rest with grey; a file that has lost its end is refused whatever they do."""
    data = encoded(extension)
    for size in range(0, len(data) - 1, 7):
        fault_of(image_header, data[:size], tmp_path / "cut")
    assert image_header(data, tmp_path / "whole").whole


@pytest.mark.parametrize("extension", FORMATS)
def test_headers_agree_with_the_decoder(tmp_path, extension):
    """Against OpenCV's own reading, over sizes, channels and encodings."""
    rng = np.random.default_rng(1)
    progressive = [(), (cv2.IMWRITE_JPEG_PROGRESSIVE, 1), (cv2.IMWRITE_JPEG_RST_INTERVAL, 2)]
    for shape in [(1, 1), (7, 5), (33, 129, 3), (300, 200)]:
        for options in progressive if extension == ".jpg" else [()]:
            (tmp_path / "image").write_bytes(encoded(extension, (rng.random(shape) * 255).astype(np.uint8), *options))
            assert read_image(tmp_path / "image").shape[:2] == shape[:2]


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(extension=st.sampled_from(FORMATS), data=st.data())
def test_damaged_bytes_are_an_image_or_a_fault(tmp_path, extension, data):
    """Never a traceback, a hang, or more memory than the limit on pixels allows."""
    bytes_in = bytearray(encoded(extension))
    for _ in range(data.draw(st.integers(1, 6))):
        bytes_in[data.draw(st.integers(0, len(bytes_in) - 1) | st.integers(0, 60))] = data.draw(st.integers(0, 255))
    bytes_in = bytes_in[: data.draw(st.integers(0, len(bytes_in)) | st.just(len(bytes_in)))]
    (tmp_path / "fuzzed").write_bytes(bytes_in)
    try:
        image = read_image(tmp_path / "fuzzed")
    except InputFault:
        return
    assert image.dtype == np.uint8
    assert image.shape[0] * image.shape[1] <= MOST_PIXELS


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(text=st.binary(max_size=200), headed=st.booleans())
@example(text=b'"', headed=True)
@example(text=b"0,a.png,0,1e400\n", headed=True)
def test_any_bytes_for_frames_are_read_or_a_fault(tmp_path, text, headed):
    (tmp_path / "frames.csv").write_bytes(b"frame,file,time_s,counts\n" + text if headed else text)
    try:
        recording = read_recording(tmp_path, 1000)
    except InputFault:
        return
    assert np.isfinite(recording.counts).all()


@pytest.fixture(scope="module", params=["clip.mp4", "clip.avi"])
def clip(request, tmp_path_factory):
    """A video whose frame k is of grey level 8 k, and a recording of its frames out of step."""
    folder = tmp_path_factory.mktemp("video")
    code = "mp4v" if request.param.endswith("mp4") else "MJPG"
    writer = cv2.VideoWriter(str(folder / request.param), cv2.VideoWriter.fourcc(*code), 10, (64, 48))
    for level in range(30):
        writer.write(np.full((48, 64, 3), 8 * level, np.uint8))
    writer.release()
    written(folder, [(k, f"{request.param}#{number}", k, 0) for k, number in enumerate([2, 3, 20, 29])], picture=False)
    return folder


def test_video_frames_come_exactly_and_in_any_order(clip):
    recording = read_recording(clip)
    for row, number in [(0, 2), (1, 3), (3, 29), (2, 20), (2, 20), (0, 2)]:
        assert abs(float(recording.image(row).mean()) - 8 * number) < 3


def test_a_recording_in_use_goes_to_another_process(clip):
    recording = read_recording(clip)
    image = recording.image(1)
    assert np.array_equal(pickle.loads(pickle.dumps(recording)).image(1), image)


def test_a_frame_beyond_the_video_is_refused(clip):
    name = read_recording(clip).files[0].split("#")[0]
    (clip / "beyond").mkdir(exist_ok=True)
    (clip / "beyond" / name).write_bytes((clip / name).read_bytes())
    fault = fault_of(read_recording, written(clip / "beyond", [(0, f"{name}#400", 0, 0)], picture=False))
    assert "30" in fault.fault
    recording = read_recording(written(clip / "beyond", [(0, f"{name}#31", 0, 0)], picture=False))
    assert "frame 31" in fault_of(recording.image, 0).fault


@pytest.mark.parametrize("data", [b"", b"garbage" * 99, b"#EXTM3U\n/etc/passwd\n", b"\0\0\0\x18ftypmp42" + b"\0" * 400])
def test_what_is_no_video_is_refused(tmp_path, data):
    (tmp_path / "clip.mp4").write_bytes(data)
    fault = fault_of(read_recording, written(tmp_path, [(0, "clip.mp4#0", 0, 0)], picture=False))
    assert fault.place.startswith("line 2")


def test_a_number_after_a_hash_means_a_video():
    assert split_video("clip.mp4#120") == ("clip.mp4", 120)
    assert split_video("image#1.png") == ("image#1.png", None)


def test_every_recorded_image_is_whole(recordings_folder):
    for name, modulus in (("bells", None), ("tray", None), ("mixed", 65536)):
        recording = read_recording(recordings_folder / name, modulus)
        assert {recording.image(row).shape for row in (0, len(recording) - 1)} == {(800, 1024)}
