"""A physical part as followed through a recording, and what was known of it when."""

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Known:
    """What was known of a part after each of its sightings, from these sightings alone; k of them, in order of time.

    row (k,): row of the frame in its recording.  xy_mm (k, 2): grip frame at counts 0.  yaw_rad (k,), on one branch of
    the part's symmetry throughout.  kind, side (k,): as voted until then.  score (k,): mean until then.
    """

    row: NDArray[np.int64]
    xy_mm: FloatArray
    yaw_rad: FloatArray
    kind: NDArray[np.str_]
    side: NDArray[np.str_]
    score: FloatArray

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for one in fields(self):
            getattr(self, one.name).flags.writeable = False

    def part(self, first: int, end: int) -> "Known":
        """The entries from first to before end."""
        return Known(*(getattr(self, one.name)[first:end] for one in fields(self)))

    def by(self, row: int) -> int:
        """Index of what was known once the frames up to `row` were; -1 before the first sighting."""
        return int(np.searchsorted(self.row, row, side="right")) - 1


@dataclass(frozen=True)
class Part:
    """One physical part, or a thing not recognised (kind ""), at counts 0 in the cell frame.

    xy_mm (2,), yaw_rad: pose of the grip frame.  side: "up", "down", "" not known.  score: 0 to 1, mean of its
    sightings.  first_row, last_row: rows of the frames it was first and last seen in.  sigma_mm, sigma_rad: predicted
    standard deviations of one coordinate and of yaw.  outline_mm (k, 2): about xy along the cell's axes, of the
    sighting that shows most of it; (0, 2) where the kind's own outline applies.
    """

    number: int
    kind: str
    side: str
    xy_mm: FloatArray
    yaw_rad: float
    score: float
    first_row: int
    last_row: int
    frames_seen: int
    sigma_mm: float
    sigma_rad: float
    outline_mm: FloatArray
    known: Known
