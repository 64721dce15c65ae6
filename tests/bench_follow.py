"""How long an hour of belt takes to follow, against reading the same sightings and one search tree of them.

Run: python tests/bench_follow.py
"""

import tempfile
import time
from pathlib import Path

import numpy as np
from scipy.spatial import cKDTree
from some_sightings import CELL, recorded, scene

from cameras.locate import read_located
from pipeline.follow import follow


def timed(call):
    start = time.perf_counter()
    result = call()
    return time.perf_counter() - start, result


def main():
    recording = recorded(5000 + np.arange(36_000) * 200)
    seen = scene(recording, parts=6000)[3]
    columns = zip(seen.row, seen.kind, *seen.xy_mm.T, np.degrees(seen.yaw_rad), seen.score, strict=True)
    with tempfile.TemporaryDirectory() as folder:
        table = Path(folder) / "located.csv"
        rows = "\n".join(",".join(map(str, row)) for row in columns)
        table.write_text("frame,part,x_mm,y_mm,yaw_deg,score\n" + rows, encoding="utf-8")
        read_s, _ = timed(lambda: read_located(table, recording, list(CELL.parts)))
    tree_s, _ = timed(lambda: cKDTree(seen.xy_mm).query(seen.xy_mm, k=2))
    follow_s, followed = timed(lambda: follow(seen, recording, CELL))
    floor_s = read_s + tree_s
    print(f"{len(seen)} sightings, {len(followed.parts)} parts: {follow_s:.2f} s, {follow_s / floor_s:.1f} times the "
          f"floor (read {read_s:.2f} s, search tree {tree_s:.2f} s)")


if __name__ == "__main__":
    main()
