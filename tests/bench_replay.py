"""An hour of belt with 6,000 parts: seconds, memory, and decisions, beside a floor measured in the same run.

python tests/bench_replay.py RECORDING CELL LOCATED [PARTS]. The floor is what the exact cycles of the picks alone
take to plan: one call of `Mover.pick` a pick.
"""

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


def main(recording: str, cell: str, located: str, parts: int = 6000) -> None:
    """Print a line an order."""
    seen = see(load_cell(cell), Path(recording), Source(located=Path(located)))
    case = case_of(seen, "hour", 0.5)
    span = float(seen.recording.times_s[-1] - seen.recording.times_s[0])
    rate = parts / 3600.0 / (len(seen.followed.parts) / span)
    hour = resampled(case, 3600.0, 1, rate).setting()
    for order in ("arrival", "lookahead"):
        begun = time.perf_counter()
        run = replay(hour, policy_named(order), order, 12)
        seconds = time.perf_counter() - begun
        begun = time.perf_counter()
        for pick in run.picks[:200]:
            cycle = pick.cycle
            hour.mover.pick(cycle.start_joints, cycle.depart_s, cycle.hold, cycle.end_joints)
        floor = (time.perf_counter() - begun) / min(len(run.picks), 200) * len(run.picks)
        memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
        print(f"{order:10} {len(run.parts)} parts, {len(run.picks)} picks: {seconds:.1f} s, "
              f"{seconds / floor:.1f} times the floor; {memory:.0f} MB; "
              f"decisions {1e3 * np.median(run.decide_s):.1f} ms median, {1e3 * max(run.decide_s):.0f} ms at most")


if __name__ == "__main__":
    main(sys.argv[1], sys.argv[2], sys.argv[3], *(int(word) for word in sys.argv[4:5]))
