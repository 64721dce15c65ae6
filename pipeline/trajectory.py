"""A run as joints over time."""

import numpy as np
from numpy.typing import NDArray

from pipeline.motion.cycle import Cycle, Transfer
from pipeline.replay import Run

FloatArray = NDArray[np.float64]
STEP_S = 0.004


def sampled(run: Run, step_s: float = STEP_S) -> tuple[FloatArray, FloatArray]:
    """Times (n,) and joints (n, 4), rad and mm, every step_s from the first move to the last."""
    if not run.picks:
        return np.zeros(0), np.zeros((0, 4))
    moves: list[Cycle | Transfer] = [*(pick.cycle for pick in run.picks), *run.waits,
                                    *(pick.set_down.way for pick in run.picks if pick.set_down),
                                    *([run.home] if run.home else [])]
    moves.sort(key=lambda move: move.depart_s)
    last = moves[-1].end_s if isinstance(moves[-1], Transfer) else moves[-1].release_end_s
    last = max([last, *(pick.release_end_s for pick in run.picks)])
    t = np.arange(np.floor(moves[0].depart_s / step_s), np.ceil(last / step_s) + 1) * step_s
    begins = np.searchsorted(t, [move.depart_s for move in moves])
    begins[0] = 0
    joints = np.empty((len(t), 4))
    for move, begin, end in zip(moves, begins, [*begins[1:], len(t)], strict=True):
        of = run.mover.joints if isinstance(move, Cycle) else run.mover.transfer_joints
        joints[begin:end] = of(move, t[begin:end])  # type: ignore[arg-type]
    return t, joints
