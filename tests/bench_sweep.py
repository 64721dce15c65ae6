"""How busy a sweep keeps its workers: `python tests/bench_sweep.py [points] [jobs]`.

The share of workers' time in which they replay, against all of it from the first worker's start to the last result. The
work itself is measured in the workers, in the same run. On a machine that is busy with other things both grow alike.
"""

import sys
import tempfile
import time
from pathlib import Path

from some_cases import case, stream

from pipeline.sweep.points import grid, points_of
from pipeline.sweep.run import run_points


def main() -> None:
    """Print points, seconds, and the busy share; a second time, when all is done already."""
    many, jobs = (int(word) for word in (*sys.argv[1:], "200", "2")[:2])
    with tempfile.TemporaryDirectory() as folder:
        small = case(Path(folder), stream(40, 60.0, 40.0, 120.0))
        speeds = [0.5 + 1.5 * k / many for k in range(many // 2)]
        points = points_of(grid({"belt-speed": speeds, "order": ["arrival", "nearest"]}), 1)
        for time_of in ("first", "again"):
            begun = time.perf_counter()
            outcomes = run_points([small], points, Path(folder) / "points", jobs)
            took = time.perf_counter() - begun
            ran = sum(outcome.ran_s for outcome in outcomes if not outcome.again)
            print(f"{time_of}: {len(points)} points on {jobs} in {took:.1f} s, busy {100 * ran / jobs / took:.0f} %")


if __name__ == "__main__":
    main()
