"""Questions with one answer, on runs whose answer is known, and on a small stream."""

import json
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pytest
from some_cases import stream
from some_streams import sanderling

from cameras.faults import InputFault
from pipeline.sweep.find import greatest_factor, mean_interval, shortest_horizon
from pipeline.sweep.kept import Outcome
from pipeline.sweep.points import Point

BASE = [Point(0, (), seed, 60.0) for seed in range(1, 6)]


def losing(limit: dict[int | None, float], counts: list[int] | None = None):
    """A runner that loses nothing up to a factor of its own for each seed, and 10 % beyond."""
    def run(points: Sequence[Point]) -> list[Outcome]:
        if counts is not None:
            counts.append(len(points))
        factor = [float(dict(point.settings)["belt-speed"]) for point in points]
        return [Outcome(p, {"lost_share": 0.0 if f <= limit[p.seed] else 0.1, "lost": 5, "had": 50,
                            "missed": {"too_late": 5}}) for p, f in zip(points, factor, strict=True)]  # fmt: skip
    return run


def picking(table: np.ndarray):
    """A runner that picks table[seed - 1, horizon - 1]."""
    def run(points: Sequence[Point]) -> list[Outcome]:
        return [Outcome(p, {"picked": int(table[p.seed - 1, int(dict(p.settings)["horizon"]) - 1])})  # type: ignore[operator]
                for p in points]
    return run


@pytest.mark.parametrize("limits", [[1.0, 1.1, 1.2, 0.9, 1.3], [7.0, 6.5, 8.0, 7.7, 9.0], [0.2, 0.21, 0.2, 0.3, 0.25]])
def test_the_greatest_factor_is_found_to_one_percent(limits: list[float]) -> None:
    answer = greatest_factor("belt-speed", 0.01, BASE, losing(dict(enumerate(limits, 1))))
    for found, limit in zip(answer.each, limits, strict=True):
        assert limit / 1.011 <= found <= limit
    assert answer.low < answer.value < answer.high
    assert answer.value == pytest.approx(np.mean(answer.each))


def test_seeds_are_tried_together() -> None:
    """Each step asks all that are still open at once, so that cores stay busy."""
    counts: list[int] = []
    greatest_factor("belt-speed", 0.01, BASE, losing(dict.fromkeys(range(1, 6), 1.2), counts))
    assert set(counts) == {5}
    assert len(counts) < 12


def test_where_there_is_no_answer_the_reason_is_told() -> None:
    never = greatest_factor("belt-speed", 0.01, BASE, losing(dict.fromkeys(range(1, 6), 0.0)))
    assert np.isnan(never.value)
    assert "5 too_late" in never.why
    always = greatest_factor("belt-speed", 0.01, BASE, losing(dict.fromkeys(range(1, 6), np.inf)))
    assert "still less is lost" in always.why


def test_the_interval_of_a_mean_is_students() -> None:
    """Nine values of mean 10 and standard deviation 3: 10 ± 2.306 (t of 8 degrees at 97.5 %, from memory: 2.306)."""
    raw = np.array([-4.0, -3, -2, -1, 0, 1, 2, 3, 4])
    mean, low, high = mean_interval((10 + 3 * raw / raw.std(ddof=1)).tolist())
    assert (mean, low, high) == pytest.approx((10.0, 10 - 2.306, 10 + 2.306), abs=1e-3)
    assert mean_interval([4.0]) == (4.0, -np.inf, np.inf)


def test_the_shortest_horizon_within_a_share_is_found() -> None:
    row = np.array([50, 80, 95, 99, 100, 100, 100, 100, 100, 100, 100, 100, 100, 100])
    table = np.tile(row, (5, 1))
    assert shortest_horizon(0.01, BASE, picking(table)).value == 4
    assert shortest_horizon(0.005, BASE, picking(table)).value == 5
    assert shortest_horizon(0.25, BASE, picking(table)).value == 2
    mixed = table.copy()
    mixed[0, 3] = 90
    answer = shortest_horizon(0.01, BASE, picking(mixed))
    assert (answer.value, answer.low, answer.high) == (5, 4, 5)
    assert answer.share == 0.0


@pytest.mark.parametrize("share", [0.0, 1.0, -0.1, float("nan")])
def test_a_share_that_will_not_do_is_refused(share: float) -> None:
    with pytest.raises(InputFault):
        greatest_factor("belt-speed", share, BASE, losing({}))
    with pytest.raises(InputFault):
        shortest_horizon(share, BASE, picking(np.zeros((5, 14))))


def test_a_failed_point_ends_the_question() -> None:
    with pytest.raises(InputFault, match="out of luck"):
        greatest_factor("belt-speed", 0.01, BASE, lambda points: [Outcome(p, {}, "out of luck") for p in points])


def test_the_fastest_belt_of_a_stream(tmp_path: Path) -> None:
    """At the answer less than a tenth is lost by every seed; a tenth faster, by one seed at least, not."""
    folder = stream(12, 150.0, 30.0).written(tmp_path / "in")
    words = ["sweep", folder, "--cell", folder / "cell.toml", "--located", "located.csv", "--set", "order=arrival",
             "--seeds", 2, "--length-s", 25, "--jobs", 1, "--out", tmp_path / "out"]
    told = sanderling(*words, "--find", "belt-speed", "--missed-below", "10%")
    assert told.status == 0, told.err
    answer = json.loads((tmp_path / "out" / "find.json").read_text())[0]
    assert answer["with"] == {"order": "arrival"}
    assert answer["low"] <= answer["value"] <= answer["high"]
    assert "mm/s" in told.out
    assert (tmp_path / "out" / "find.png").stat().st_size > 5000
    at = ",".join(f"{factor:.4f}" for each in answer["each"] for factor in (each * 0.5, each * 1.3))
    checked = sanderling(*words[:-1], tmp_path / "check", "--set", f"belt-speed={at}")
    assert checked.status == 0
    head, *rows = [line.split(",") for line in (tmp_path / "check" / "sweep.csv").read_text().splitlines()]
    table = [dict(zip(head, row, strict=True)) for row in rows]
    for seed, each in enumerate(answer["each"], 1):
        lost = {float(r["belt-speed"]): float(r["lost_share"]) for r in table if r["seed"] == str(seed)}
        assert lost[round(each * 0.5, 4)] < 0.1 <= lost[round(each * 1.3, 4)]
