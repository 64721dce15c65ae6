"""Places: where slots are, and which of them is filled next."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.cell import PlaceCell

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Place:
    """A grid of slots. slots_mm (n, 3): tool tip at release, along the rows, row after row; yaw: of the tool there."""

    name: str
    slots_mm: FloatArray
    yaw: float
    any_yaw: bool
    endless: bool

    @classmethod
    def of(cls, cell: PlaceCell) -> "Place":
        """The slots of one of `[[places]]`: columns along yaw, rows a quarter turn to the left of it."""
        yaw = np.radians(cell.yaw_deg)
        along, across = np.array([np.cos(yaw), np.sin(yaw), 0.0]), np.array([-np.sin(yaw), np.cos(yaw), 0.0])
        row, column = np.divmod(np.arange(cell.rows * cell.columns), cell.columns)
        slots = (np.array(cell.origin_mm) + column[:, None] * cell.pitch_mm[0] * along
                 + row[:, None] * cell.pitch_mm[1] * across)
        slots.flags.writeable = False
        return cls(cell.name, slots, float(yaw + np.radians(cell.slot_yaw_deg)), cell.any_yaw, cell.endless)


class Filling:
    """How far each place is filled; slots are taken in their order, an endless place starts over when it is full."""

    def __init__(self, places: tuple[Place, ...]) -> None:
        self._places = {place.name: place for place in places}
        self._filled = dict.fromkeys(self._places, 0)

    def next_slot(self, place: str) -> int | None:
        """Index of the slot to be filled next; None where the place is full."""
        filled, slots = self._filled[place], len(self._places[place].slots_mm)
        if filled < slots:
            return filled
        return filled % slots if self._places[place].endless else None

    def coming(self, place: str, number: int) -> list[int]:
        """Indices of the next `number` slots to be filled, fewer where the place will be full."""
        filled, slots = self._filled[place], len(self._places[place].slots_mm)
        last = filled + number if self._places[place].endless else min(filled + number, slots)
        return [k % slots for k in range(filled, last)]

    def filled(self, place: str) -> int:
        """How many slots have been filled."""
        return self._filled[place]

    def fill(self, place: str) -> None:
        """Take the next slot."""
        self._filled[place] += 1
