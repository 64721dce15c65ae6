"""What the cell's controller knows when: parts as they become known, are gripped, or leave the window."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from cameras.recording import Recording
from pipeline.belt import Belt
from pipeline.cell import Cell
from pipeline.follow import Part

FloatArray = NDArray[np.float64]
BESIDE_MM = 150.0  # so far behind the window a part may still stand in the way of one inside it
NOW_S = 1e-9
RECENT = 20  # parts that say where the next one will come


class Watch:
    """The parts of one replay by their rows, as time goes by. Nothing is known before its camera's latency is over."""

    def __init__(self, cell: Cell, recording: Recording, belt: Belt, parts: Sequence[Part]) -> None:
        self.parts = parts
        latency = {str(name): cell.camera(str(name)).latency_s for name in np.unique(recording.cameras)}
        self.known_s = np.maximum.accumulate(
            recording.times_s + np.array([latency[str(name)] for name in recording.cameras]))
        self.first_s = np.array([self.known_s[part.first_row] for part in parts])
        self.along_mm = np.array([part.xy_mm @ belt.heading for part in parts])
        self.until_s = np.full(len(parts), np.inf)
        if cell.belt is None:  # a tray lies until the next image
            gone = np.append(recording.times_s[1:], np.inf)
            self.until_s = np.array([gone[part.first_row] for part in parts])
        self.gripped = np.zeros(len(parts), bool)
        self.passed = np.zeros(len(parts), bool)
        self._heading = belt.heading
        self._first_mm = cell.belt.window_mm[0] if cell.belt and cell.belt.window_mm else np.nan
        self._last_mm = cell.belt.window_mm[1] if cell.belt and cell.belt.window_mm else np.inf
        self._coming = np.argsort(self.first_s, kind="stable")
        self._seen = 0
        self._lying: list[int] = []

    def look(self, now: float, travel_mm: float) -> int:
        """Take in what is known by now; the row of the latest frame known."""
        while self._seen < len(self._coming) and self.first_s[self._coming[self._seen]] <= now + NOW_S:
            self._lying.append(int(self._coming[self._seen]))
            self._seen += 1
        lying = np.array(self._lying, np.int64)
        away = (self.until_s[lying] <= now) | (self.along_mm[lying] + travel_mm > self._last_mm)
        self.passed[lying[away]] = True
        beside = (self.until_s[lying] > now) & (self.along_mm[lying] + travel_mm < self._last_mm + BESIDE_MM)
        self._lying = lying[beside & ~self.gripped[lying]].tolist()
        return int(np.searchsorted(self.known_s, now + NOW_S, side="right")) - 1

    @property
    def lying(self) -> list[int]:
        """Rows of the parts known to lie there, in the order they became known."""
        return self._lying

    def waiting(self) -> list[int]:
        """Rows of those that have not left the window, farthest downstream first."""
        rows = [k for k in self._lying if not self.passed[k]]
        return sorted(rows, key=lambda k: (-self.along_mm[k], k))

    def expected_mm(self) -> FloatArray:
        """Where the next part is likely to be gripped first (2,), from those known so far; NaN before the first."""
        seen = self._coming[max(self._seen - RECENT, 0):self._seen]
        if not len(seen):
            return np.full(2, np.nan)
        middle = np.mean([self.parts[k].xy_mm for k in seen], axis=0)
        if np.isfinite(self._first_mm):
            middle = middle + (self._first_mm - middle @ self._heading) * self._heading
        return np.asarray(middle)

    def next_news(self, now: float) -> float:
        """When the next part will be known; inf where none is left."""
        k = self._seen
        while k < len(self._coming) and self.first_s[self._coming[k]] <= now + NOW_S:
            k += 1
        return float(self.first_s[self._coming[k]]) if k < len(self._coming) else np.inf

    def next_frame(self, now: float) -> float:
        """When the next frame will be known; inf where none is left."""
        later = int(np.searchsorted(self.known_s, now + NOW_S, side="right"))
        return float(self.known_s[later]) if later < len(self.known_s) else np.inf
