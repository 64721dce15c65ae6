"""What the report's scripts are given: packed series, the motion, outlines, frames."""

import base64
from pathlib import Path

import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from some_pages import Made, made, plain, scene_of
from some_streams import belt, scattered

from pipeline.page.drawn import thinned
from pipeline.page.images import MOST_BYTES, shots_of
from pipeline.page.pack import packed


@pytest.fixture(scope="module")
def one(tmp_path_factory: pytest.TempPathFactory) -> Made:
    return plain(tmp_path_factory.mktemp("page"))


def unpacked(text: str) -> list[int]:
    """Read `packed` text as its docstring says, byte by byte."""
    values, before, last = [], 0, 0
    number = shift = 0
    for byte in base64.b64decode(text):
        number |= (byte & 127) << shift
        shift += 7
        if byte < 128:
            second = -(number + 1) // 2 if number % 2 else number // 2
            before, last = last, second + 2 * last - before
            values.append(last)
            number = shift = 0
    return values


@given(st.lists(st.integers(-10**9, 10**9), max_size=40))
def test_packed_numbers_come_back(values: list[int]) -> None:
    assert unpacked(packed(np.array(values, float) * 0.5, 0.5)) == values


@pytest.mark.parametrize(("number", "stored"), [
    (1, "02"), (-64, "7f"), (64, "8001"), (-65, "8101"), (-6429, "b964"), (2**31 - 1, "feffffff0f"),
    (-(2**31), "ffffffff0f"),
])  # fmt: skip
def test_packed_bytes_are_those_of_the_published_examples(number: int, stored: str) -> None:
    """DWARF 5, 7.6: 2, 127, 128, 129, 12857 as 02, 7f, 80 01, 81 01, b9 64; Protocol Buffers' encoding page: a signed n
    travels as 2 n or -2 n - 1, the greatest and least of 32 bits as 4294967294 and 4294967295. From memory."""
    assert base64.b64decode(packed(np.array([float(number)]), 1.0)).hex() == stored


def test_the_motion_shown_is_the_motion_planned(one: Made, tmp_path: Path) -> None:
    """To 0.3 degrees and 0.5 mm at grasp and release, as the scripts interpolate it."""
    scene = scene_of(one.written(tmp_path / "report.html"))
    motion = scene["motion"]
    series = zip(motion["joints"], motion["units"], strict=True)
    joints = np.array([np.array(unpacked(text)) * unit for text, unit in series])
    grid = motion["start"] + motion["step"] * np.arange(joints.shape[1])
    for pick in one.run.picks:
        cycle = pick.cycle
        for at in (cycle.grasp_start_s, 0.5 * (cycle.grasp_end_s + cycle.left_s), cycle.release_start_s):
            shown = [np.interp(at, grid, row) for row in joints]
            off = np.abs(shown - one.run.mover.joints(cycle, np.array([at]))[0])
            assert off[2] < 0.5
            assert np.degrees(off[[0, 1, 3]]).max() < 0.3


@given(st.integers(3, 60), st.integers(0, 10**6))
def test_thinned_outlines_stay_near(number: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    turns = np.sort(rng.uniform(0, 2 * np.pi, number))
    outline = rng.uniform(8, 12, number)[:, None] * np.column_stack([np.cos(turns), np.sin(turns)])
    kept = thinned(outline, 0.3)
    ends = np.roll(kept, -1, axis=0) - kept
    share = np.clip(((outline[:, None] - kept) * ends).sum(-1) / np.maximum((ends**2).sum(-1), 1e-12), 0, 1)
    assert np.linalg.norm(outline[:, None] - kept - share[..., None] * ends, axis=-1).min(axis=1).max() < 0.31


def test_frames_of_a_long_recording_fit_into_the_page(tmp_path: Path) -> None:
    """400 frames that hardly compress, as of 40 s at 10 Hz."""
    stream = belt(scattered(4, 6, 300.0), 40.0, 60.0)
    noisy = made(stream, tmp_path, images=True)
    noise = np.random.default_rng(0).integers(0, 255, (600, 800), np.uint8)
    for k in range(len(stream.times_s)):
        cv2.imwrite(str(tmp_path / f"none-{k}.bmp"), np.roll(noise, 40 * k, axis=1))
        (tmp_path / f"none-{k}.bmp").replace(tmp_path / f"none-{k}.png")
    shots = shots_of(noisy.seen)
    assert len(shots) > 100
    assert sum(len(shot.jpeg) for shot in shots) <= MOST_BYTES
    assert all(shot.width / shot.height == pytest.approx(800 / 600, abs=0.02) for shot in shots)
    assert len(noisy.written(tmp_path / "report.html")) < 6_000_000
