"""What a report is about: one run, with what its sections share."""

from dataclasses import dataclass
from functools import cached_property
from typing import Any

from pipeline.account.phases import Phase, phases_of
from pipeline.account.windows import PartWindow, windows_of
from pipeline.grasp import Refusal
from pipeline.replay import Run, Setting
from pipeline.study import Seen
from pipeline.trip import Pick

LATEST_AS_GIVEN_S = 1e5  # later clocks are shown from the first frame on


@dataclass(frozen=True)
class Subject:
    """A run and what led to it. Sections take one and answer their HTML."""

    seen: Seen
    setting: Setting
    run: Run
    figures: dict[str, Any]

    @cached_property
    def zero_s(self) -> float:
        """What is taken off every time before it is shown."""
        start = self.run.start_s
        return 0.0 if 0 <= start < LATEST_AS_GIVEN_S else start

    @cached_property
    def windows(self) -> list[PartWindow]:
        """When each part could have been gripped."""
        return windows_of(self.setting)

    @cached_property
    def phases(self) -> list[Phase]:
        """What the arm does when."""
        return phases_of(self.run)

    @cached_property
    def kinds(self) -> list[str]:
        """Names of the kinds of part, in the cell file's order."""
        return list(self.setting.cell.parts)

    @cached_property
    def pick_of(self) -> dict[int, int]:
        """Index of the pick of each picked part's number."""
        return {pick.part.number: k for k, pick in enumerate(self.run.picks)}

    @cached_property
    def missed(self) -> list[tuple[int, Refusal]]:
        """Indices and refusals of the parts that were missed."""
        return [(k, fate) for k, fate in enumerate(self.run.fates) if fate is not None]

    def clock(self, at_s: float) -> str:
        """A time as the report shows it, without its unit."""
        return f"{at_s - self.zero_s:.2f}"

    def best_moment_s(self, k: int) -> float:
        """When to look at part k: as it enters the window, but not before it is known; within the run."""
        window = self.windows[k]
        return min(max(window.enters_s, window.known_s, self.run.start_s), self.run.end_s)


def place_of(pick: Pick) -> str:
    """Place and slot, as picks.csv names them."""
    return f"{pick.place} {pick.slot + 1}"
