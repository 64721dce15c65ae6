"""How good each decision was: what its sequence picks against what no sequence over the same parts can pass."""

from dataclasses import dataclass

import numpy as np

from pipeline.replay import Run

EQUAL = 1e-9


@dataclass(frozen=True)
class Choices:
    """Decisions of a run. bounded: how many came with a bound; best: how many reached it; gaps: shares of the bound
    that each bounded one falls short by, in order of the picks; looked_at: parts in view at each pick."""

    decisions: int
    bounded: int
    best: int
    gaps: tuple[float, ...]
    looked_at: tuple[int, ...]


def choices_of(run: Run) -> Choices:
    """The decisions that led to a pick."""
    gaps = []
    for pick in run.picks:
        bound = pick.picked.weight_bound
        if np.isfinite(bound) and bound > 0:
            gaps.append(max(1.0 - pick.picked.weight / bound, 0.0))
    return Choices(len(run.picks), len(gaps), sum(gap <= EQUAL for gap in gaps), tuple(gaps),
                   tuple(pick.looked_at for pick in run.picks))
