"""A part that may be picked, as it is known at one moment."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.follow import Part
from pipeline.grasp import Grasps, Holds

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Candidate:
    """A part that may be picked: its row, its holds at the latest estimate, its place and slot, its grasps."""

    row: int
    part: Part
    xy_mm: FloatArray
    holds: Holds
    place: str
    slot: int
    grasps: Grasps
