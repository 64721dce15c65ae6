"""An hour of belt with 6,000 parts: seconds, memory, and decisions, beside a floor measured in the same run.

python tests/bench_replay.py RECORDING CELL LOCATED [PARTS]. Parts come as in the recording, as much faster as it takes.
Each order runs in a process of its own; its memory is the most that process ever took. Seconds and milliseconds are of
CPU time, but for those of whole decisions, which a busy machine makes longer. The floor is what the exact cycles of the
picks alone take to plan: one call of `Mover.pick` a pick.
"""

import multiprocessing
import resource
import sys
import time
from pathlib import Path

import numpy as np

from pipeline.cell import load_cell
from pipeline.policy import policy_named
from pipeline.replay import replay
from pipeline.study import Source, see
from pipeline.sweep.case import case_of
from pipeline.sweep.resample import resampled


def one_order(order: str, recording: str, cell: str, located: str, parts: int) -> None:
    """Print an order's line."""
    seen = see(load_cell(cell), Path(recording), Source(located=Path(located)))
    case = case_of(seen, "hour", 0.5)
    span = float(seen.recording.times_s[-1] - seen.recording.times_s[0])
    rate = parts / 3600.0 / (len(seen.followed.parts) / span)
    hour = resampled(case, 3600.0, 1, rate).setting()
    begun = time.process_time()
    run = replay(hour, policy_named(order), order, 12)
    seconds = time.process_time() - begun
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    begun = time.process_time()
    for pick in run.picks[:200]:
        cycle = pick.cycle
        hour.mover.pick(cycle.start_joints, cycle.depart_s, cycle.hold, cycle.end_joints)
    floor = (time.process_time() - begun) / min(len(run.picks), 200) * len(run.picks)
    decide = 1e3 * np.array(run.decide_s)
    print(f"{order:10} {len(run.parts)} parts, {len(run.picks)} picks: {seconds:.1f} s, {seconds / floor:.1f} times "
          f"the floor; {memory:.0f} MB; decisions {np.median(decide):.1f} ms median, {decide.max():.0f} ms "
          "at most", flush=True)


def main(recording: str, cell: str, located: str, parts: int = 6000) -> None:
    """Print a line an order."""
    apart = multiprocessing.get_context("spawn")
    for order in ("arrival", "lookahead"):
        process = apart.Process(target=one_order, args=(order, recording, cell, located, parts))
        process.start()
        process.join()


if __name__ == "__main__":
    main(sys.argv[1], sys.argv[2], sys.argv[3], *(int(word) for word in sys.argv[4:5]))
