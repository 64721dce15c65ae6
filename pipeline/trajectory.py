"""A run as joints over time."""

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from pipeline.motion.cycle import Cycle, Transfer
from pipeline.replay import Run

FloatArray = NDArray[np.float64]
STEP_S = 0.004
MANY = 100_000  # joints worked out together: few enough for an hour's run to take little memory


class Samples:
    """The joints of a run every step_s from the first move to the last, n = len(...) times in all."""

    def __init__(self, run: Run, step_s: float = STEP_S) -> None:
        self._mover, self._step_s = run.mover, step_s
        moves: list[Cycle | Transfer] = [*(pick.cycle for pick in run.picks), *run.waits,
                                        *(pick.set_down.way for pick in run.picks if pick.set_down),
                                        *([run.home] if run.home else [])]
        self._moves = sorted(moves, key=lambda move: move.depart_s) if run.picks else []
        self._first = self._end = 0
        if self._moves:
            final = self._moves[-1]
            last = final.end_s if isinstance(final, Transfer) else final.release_end_s
            last = max([last, *(pick.release_end_s for pick in run.picks)])
            self._first = int(np.floor(self._moves[0].depart_s / step_s))
            self._end = int(np.ceil(last / step_s)) + 1

    def __len__(self) -> int:
        return self._end - self._first

    def between(self, begin: int, end: int) -> tuple[FloatArray, FloatArray]:
        """Times (m,) and joints (m, 4), rad and mm, of the samples from one number up to another."""
        t = np.asarray(np.arange(self._first + begin, min(self._first + end, self._end)) * self._step_s, np.float64)
        joints = np.empty((len(t), 4))
        if len(t):
            departs = np.array([move.depart_s for move in self._moves])
            k = max(int(np.searchsorted(departs, t[0], side="right")) - 1, 0)
            begins = np.searchsorted(t, departs[k:])
            begins[0] = 0
            for move, low, high in zip(self._moves[k:], begins, [*begins[1:], len(t)], strict=True):
                if low < high:
                    of = self._mover.joints if isinstance(move, Cycle) else self._mover.transfer_joints
                    joints[low:high] = of(move, t[low:high])  # type: ignore[arg-type]
        return t, joints

    def pieces(self) -> Iterator[tuple[FloatArray, FloatArray]]:
        """All of it, piece by piece."""
        return (self.between(begin, begin + MANY) for begin in range(0, len(self), MANY))


def sampled(run: Run, step_s: float = STEP_S) -> tuple[FloatArray, FloatArray]:
    """Times (n,) and joints (n, 4), rad and mm, every step_s from the first move to the last."""
    samples = Samples(run, step_s)
    return samples.between(0, len(samples))
