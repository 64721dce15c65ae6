"""Sightings: what a finder hands on, in millimetres and radians of the cell frame."""

from collections.abc import Iterable
from dataclasses import dataclass, field, fields

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Sightings:
    """Things seen in frames: n of them, poses in the cell frame at the counts of their frame. Arrays are read-only.

    row (n,) int: row of the frame in its recording.  kind (n,) str: the part's name, "" not recognised.
    side (n,) str: "up", "down", "" not known.  xy_mm (n, 2), yaw_rad (n,): pose of the grip frame.
    score (n,): share of the expected edge found, 0 to 1.
    sigma_mm (n,), sigma_rad (n,): standard deviations of one coordinate and of yaw.
    outline_mm: n polygons (k, 2) about xy along the cell's axes where a thing has no outline of its kind; else (0, 2).
    lean_mm (n, 2): how far xy would move, were the kind's edges one standard deviation higher than was assumed; 0 where
    left out.
    """

    row: NDArray[np.int64]
    kind: NDArray[np.str_]
    side: NDArray[np.str_]
    xy_mm: FloatArray
    yaw_rad: FloatArray
    score: FloatArray
    sigma_mm: FloatArray
    sigma_rad: FloatArray
    outline_mm: tuple[FloatArray, ...]
    lean_mm: FloatArray = field(default_factory=lambda: np.zeros((0, 2)))

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        if len(self.lean_mm) != len(self.row):
            object.__setattr__(self, "lean_mm", np.zeros((len(self.row), 2)))
        for one in fields(self):
            value = getattr(self, one.name)
            if isinstance(value, np.ndarray):
                value.flags.writeable = False

    def __len__(self) -> int:
        return len(self.row)

    def where(self, kept: NDArray[np.bool_]) -> "Sightings":
        """Those of them that are kept (n,)."""
        columns = {f.name: getattr(self, f.name)[kept] for f in fields(self) if f.name != "outline_mm"}
        return Sightings(**columns, outline_mm=tuple(o for o, k in zip(self.outline_mm, kept, strict=True) if k))

    @classmethod
    def joined(cls, several: Iterable["Sightings"]) -> "Sightings":
        """Several sightings as one, in the order given; none of them makes an empty one."""
        kept = [one for one in several if len(one)]
        if not kept:
            zero = np.zeros(0)
            text = np.zeros(0, np.str_)
            return cls(np.zeros(0, np.int64), text, text, np.zeros((0, 2)), zero, zero, zero, zero, ())
        columns = {f.name: np.concatenate([getattr(one, f.name) for one in kept])
                   for f in fields(cls) if f.name != "outline_mm"}
        return cls(**columns, outline_mm=tuple(polygon for one in kept for polygon in one.outline_mm))
