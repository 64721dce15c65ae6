"""How long finding takes, as a multiple of a floor measured on the same frames; and that memory stays flat.

The floor is what any finder must do: 5 x 5 blur, Otsu's threshold, connected components, contours. One core, images
decoded beforehand. Run: python tests/bench_find.py [RECORDING CELL] (the demo's frames by default, with the models
and the calibration that the cell names).
"""

import resource
import sys
import time
from pathlib import Path

import cv2
import numpy as np

from cameras.camera import load_camera
from cameras.find import PartFinder, grey_of
from cameras.recording import read_recording
from pipeline.cell import load_cell
from pipeline.finding import calibration_of, taught_parts

FRAMES = 1000


def floor(grey: np.ndarray) -> None:
    """Blur, threshold, components, contours."""
    marked = cv2.threshold(cv2.GaussianBlur(grey, (5, 5), 0), 0, 255, cv2.THRESH_OTSU)[1]
    cv2.connectedComponentsWithStats(marked)
    cv2.findContours(marked, cv2.RETR_LIST, cv2.CHAIN_APPROX_SIMPLE)


def seconds(work, grey: np.ndarray) -> float:
    """How long work on an image takes."""
    start = time.perf_counter()
    work(grey)
    return time.perf_counter() - start


def main() -> None:
    """Print medians, their ratio, and the growth of memory over a thousand frames."""
    cv2.setNumThreads(1)
    demo = Path(__file__).resolve().parents[1] / "demo_images" / "bells"
    folder, file = (Path(one) for one in sys.argv[1:3]) if len(sys.argv) > 2 else (demo, demo / "cell.toml")
    cell = load_cell(file)
    recording = read_recording(folder, cell.belt.counts_modulus if cell.belt else None)
    camera, finder = load_camera(calibration_of(cell, "")), PartFinder(taught_parts(cell), cell.surface_mm)
    images = [grey_of(recording.image(row)) for row in range(len(recording))]
    finder.find(images[0], camera)
    found = [seconds(lambda grey: finder.find(grey, camera), grey) for grey in images]
    least = [seconds(floor, grey) for grey in images]
    print(f"find {np.median(found) * 1e3:.1f} ms (longest {max(found) * 1e3:.1f})")
    print(f"floor {np.median(least) * 1e3:.1f} ms: ratio {np.median(found) / np.median(least):.1f}, {len(images)} rows")
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    for k in range(FRAMES):
        finder.find(images[k % len(images)], camera)
    grown = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before
    print(f"memory: peak grew by {grown / 1024:.1f} MB over {FRAMES} frames")


if __name__ == "__main__":
    main()
