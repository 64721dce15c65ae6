"""How near the joints come to their limits."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from pipeline.replay import Run
from pipeline.trajectory import Samples

FloatArray = NDArray[np.float64]
STEP_S = 0.002
BINS = 300
JOINTS = ("J1", "J2", "J3", "J4")


@dataclass(frozen=True)
class Loads:
    """Speed and acceleration of the joints as shares of their limits, by central differences every STEP_S.

    times_s (b,); speed, accel (b, 4): greatest share within each of b equal stretches of the run.  range_used (4, 2):
    least and greatest position, rad and mm.  peak_speed, peak_accel (4,): greatest of all; speed_at_s, accel_at_s (4,):
    when.
    """

    times_s: FloatArray
    speed: FloatArray
    accel: FloatArray
    range_used: FloatArray
    peak_speed: FloatArray
    peak_accel: FloatArray
    speed_at_s: FloatArray
    accel_at_s: FloatArray


def loads_of(run: Run) -> Loads | None:
    """The loads of a run; None where the arm never moved."""
    samples, limits = Samples(run, STEP_S), run.mover.arm.limits
    count = len(samples) - 2  # no difference at either end
    if count < 1:
        return None
    edges = np.unique(np.linspace(0, count, min(BINS, count) + 1).astype(int))
    times, speeds, accels, low, high = (list[FloatArray]() for _ in range(5))
    when = np.zeros((2, 4, len(edges) - 1))
    for k, (begin, end) in enumerate(pairwise(edges)):
        t, joints = samples.between(begin, end + 2)
        speed = np.abs(joints[2:] - joints[:-2]) / (2 * STEP_S) / limits.speed
        accel = np.abs(joints[2:] - 2 * joints[1:-1] + joints[:-2]) / STEP_S**2 / limits.accel
        times.append(t[1])
        for told, one in ((speeds, speed.max(axis=0)), (accels, accel.max(axis=0)), (low, joints.min(axis=0)),
                          (high, joints.max(axis=0))):
            told.append(one)
        when[:, :, k] = t[1 + speed.argmax(axis=0)], t[1 + accel.argmax(axis=0)]
    speed, accel = np.stack(speeds), np.stack(accels)
    speed_at, accel_at = (at[np.arange(4), most.argmax(axis=0)] for at, most in zip(when, (speed, accel), strict=True))
    return Loads(np.array(times), speed, accel, np.stack([np.min(low, axis=0), np.max(high, axis=0)], axis=1),
                 speed.max(axis=0), accel.max(axis=0), speed_at, accel_at)
