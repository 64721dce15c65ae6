"""Three short examples of the Python interface, as the README shows them."""

from pathlib import Path

import pytest
from some_cases import stream


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A recording with poses made elsewhere."""
    return stream(6, 80.0, 20.0).written(tmp_path)


def test_replay_a_recording(folder: Path) -> None:
    from pipeline.cell import load_cell
    from pipeline.study import Source, run, see, setting
    from pipeline.tables import summary

    cell = load_cell(folder / "cell.toml")
    seen = see(cell, folder, Source(located=folder / "located.csv"))
    done = run(setting(seen), order="lookahead", horizon=8)
    figures = summary(done, horizon=8, find_s=[])
    print(f"{figures['picked']} of {figures['parts_seen']}, {figures['picks_per_min']:.1f} a minute")

    assert figures["picked"] == len(done.picks) == 6 - sum(figures["missed"].values()) > 3


def test_sweep_over_the_speed_of_the_belt(folder: Path) -> None:
    from pipeline.cell import load_cell
    from pipeline.study import Source, see
    from pipeline.sweep.case import case_of
    from pipeline.sweep.points import grid, points_of
    from pipeline.sweep.run import run_points

    cell = load_cell(folder / "cell.toml")
    case = case_of(see(cell, folder, Source(located=folder / "located.csv")), "my recording")
    points = points_of(grid({"belt-speed": [0.8, 1.0, 4.0], "order": ["arrival"]}), recordings=1)
    outcomes = run_points([case], points, folder / "points", jobs=1)
    for outcome in outcomes:
        print(outcome.point.told(), outcome.figures["picks_per_min"], outcome.figures["lost_share"])

    assert outcomes[0].figures["lost_share"] <= outcomes[2].figures["lost_share"]


def test_an_order_of_ones_own(folder: Path) -> None:
    import numpy as np

    from pipeline.cell import load_cell
    from pipeline.policy import Choice, Picked
    from pipeline.replay import replay
    from pipeline.study import Source, see, setting

    class LastFirst:
        """The part farthest upstream that can be had, by the grasp that is done soonest."""

        def choose(self, choice: Choice) -> Picked | None:
            contact, finish = choice.next_ones()
            able = np.flatnonzero(np.isfinite(contact))
            if not len(able):
                return None
            return Picked(int(min(able, key=lambda node: (choice.along_mm[choice.nodes.part[node]], finish[node]))))

    cell = load_cell(folder / "cell.toml")
    seen = see(cell, folder, Source(located=folder / "located.csv"))
    done = replay(setting(seen), LastFirst(), "last first", horizon=8)
    print([pick.part.number for pick in done.picks])

    assert len(done.picks) > 0
