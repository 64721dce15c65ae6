"""A run as joints over time."""

import numpy as np
from numpy.typing import NDArray

from pipeline.replay import Run

FloatArray = NDArray[np.float64]
STEP_S = 0.004
ROWS_AT_ONCE = 50_000


def sampled(run: Run, step_s: float = STEP_S) -> tuple[FloatArray, FloatArray]:
    """Times (n,) and joints (n, 4), rad and mm, every step_s from the first move to the last."""
    if not run.picks:
        return np.zeros(0), np.zeros((0, 4))
    first, last = run.picks[0].cycle.depart_s, run.home.end_s if run.home else run.picks[-1].cycle.release_end_s
    t = np.arange(np.floor(first / step_s), np.ceil(last / step_s) + 1) * step_s
    departs = [pick.cycle.depart_s for pick in run.picks[1:]]
    ends = np.searchsorted(t, [*departs, run.home.depart_s if run.home else np.inf])
    joints, begin = np.empty((len(t), 4)), 0
    for pick, end in zip(run.picks, ends, strict=True):
        joints[begin:end] = run.mover.joints(pick.cycle, t[begin:end])
        begin = int(end)
    if run.home:
        joints[begin:] = run.mover.transfer_joints(run.home, t[begin:])
    return t, joints
