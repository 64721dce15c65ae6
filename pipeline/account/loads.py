"""How near the joints come to their limits."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.replay import Run
from pipeline.trajectory import sampled

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
    times, joints = sampled(run, STEP_S)
    if len(times) < 3:
        return None
    limits = run.mover.arm.limits
    speed = np.abs(joints[2:] - joints[:-2]) / (2 * STEP_S) / limits.speed
    accel = np.abs(joints[2:] - 2 * joints[1:-1] + joints[:-2]) / STEP_S**2 / limits.accel
    inner = times[1:-1]
    edges = np.unique(np.linspace(0, len(inner), min(BINS, len(inner)) + 1).astype(int)[:-1])
    return Loads(inner[edges], np.maximum.reduceat(speed, edges), np.maximum.reduceat(accel, edges),
                 np.stack([joints.min(axis=0), joints.max(axis=0)], axis=1), speed.max(axis=0), accel.max(axis=0),
                 inner[speed.argmax(axis=0)], inner[accel.argmax(axis=0)])
