"""How large the report of five minutes is, how long it takes to write, and to open beside an empty page of that size.

    python tests/bench_page.py
"""

import shutil
import statistics
import tempfile
import time
from pathlib import Path

import cv2
import numpy as np
from some_pages import made
from some_streams import belt, scattered
from webdriver import Browser, browser

FRAMES_S, PARTS = 300.0, 200
OPENED = "return performance.timing.loadEventEnd - performance.timing.navigationStart"


def five_minutes(folder: Path) -> Path:
    """A page of 300 s at 10 Hz with 200 parts and frames that hardly compress."""
    stream = belt(scattered(4, PARTS, 200.0), FRAMES_S, 150.0, places=[
        {"name": "tray", "origin_mm": [-60.0, 260.0, -40.0], "columns": 3, "pitch_mm": [40.0, 0.0], "endless": True}])
    one = made(stream, folder, images=True)
    noise = np.random.default_rng(0).integers(0, 255, (600, 800), np.uint8)
    for k in range(len(stream.times_s)):
        cv2.imwrite(str(folder / "frame.bmp"), np.roll(noise, 40 * k, axis=1))
        (folder / "frame.bmp").replace(folder / f"none-{k}.png")
    begun = time.perf_counter()
    one.written(folder / "report.html")
    size = (folder / "report.html").stat().st_size
    print(f"{len(one.run.picks)} picks, {len(one.run.parts)} parts: {size / 1e6:.2f} MB, "
          f"written in {time.perf_counter() - begun:.1f} s")
    return folder / "report.html"


def opened_ms(session: Browser, page: Path) -> float:
    """Median of five openings."""
    times = []
    for _ in range(5):
        session.open(page)
        session.wait(OPENED.replace("return ", "return performance.timing.loadEventEnd > 0 && 0 <= "))
        times.append(float(session.js(OPENED)))
    return statistics.median(times)


def main() -> None:
    """Print size and times."""
    binary, driver = shutil.which("chromium"), shutil.which("chromedriver")
    with tempfile.TemporaryDirectory() as name:
        page, empty = five_minutes(Path(name)), Path(name) / "empty.html"
        empty.write_text("<!doctype html><title>empty</title><!--" + "x" * page.stat().st_size + "-->")
        if binary is None or driver is None:
            print("no chromium with its driver installed: not opened")
            return
        with browser(driver, binary, Path(name) / "profile") as session:
            floor, took = opened_ms(session, empty), opened_ms(session, page)
            print(f"opened in {took:.0f} ms, an empty page of that size in {floor:.0f} ms: {took / floor:.1f} times")


if __name__ == "__main__":
    main()
