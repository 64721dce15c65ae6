import json

import numpy as np
import pytest
from skimage.measure import LineModelND

from cameras.faults import InputFault
from pipeline.belt_scale import BeltMarks, fit_belt, read_marks


def made_marks(
    heading_deg: float = 37.0, mm_per_count: float = 0.05, marks: int = 3, touches: int = 5, noise_mm: float = 0.05,
    seed: int = 0,
) -> BeltMarks:  # fmt: skip
    """Marks touched every 100 mm or so, counts rounded as a counter does."""
    rng = np.random.default_rng(seed)
    mark = np.repeat(np.arange(marks), touches)
    way = 100.0 * np.tile(np.arange(touches), marks) + rng.uniform(-8, 8, marks * touches)
    along = np.array([np.cos(np.radians(heading_deg)), np.sin(np.radians(heading_deg))])
    points = rng.uniform(-100, 100, (marks, 2))[mark] + way[:, None] * along
    counts = np.round(rng.uniform(0, 60000, marks)[mark] + way / mm_per_count)
    return BeltMarks(np.arange(len(mark)) + 2, mark, counts, points + rng.normal(0, noise_mm, points.shape))


@pytest.mark.parametrize(("heading_deg", "mm_per_count"), [(0.0, 0.0625), (37.0, 0.05), (180.0, 0.01), (270.0, 0.2)])
def test_heading_and_scale_are_found_within_their_standard_errors(heading_deg, mm_per_count):
    found = fit_belt(made_marks(heading_deg, mm_per_count))
    turn = np.angle(np.exp(1j * (found.heading_rad - np.radians(heading_deg))))
    assert abs(turn) < 4 * found.heading_error_rad
    assert abs(found.mm_per_count - mm_per_count) < 4 * found.mm_per_count_error
    assert found.sigma_mm == pytest.approx(0.05, rel=0.5)


def test_a_falling_counter_has_negative_mm_per_count():
    """The heading is the way the belt runs, from a mark's first touch to its last."""
    marks = made_marks(30.0)
    falling = fit_belt(BeltMarks(marks.line, marks.mark, -marks.counts, marks.points))
    assert falling.heading_deg == pytest.approx(30.0, abs=0.05)
    assert falling.mm_per_count == pytest.approx(-0.05, rel=1e-3)
    assert falling.drift_95_mm(500.0) == pytest.approx(fit_belt(marks).drift_95_mm(500.0), rel=1e-6)


def test_standard_errors_are_the_scatter_of_repetition():
    found = [fit_belt(made_marks(seed=seed)) for seed in range(200)]
    assert np.std([one.mm_per_count for one in found]) == pytest.approx(
        np.mean([one.mm_per_count_error for one in found]), rel=0.15)
    assert np.std([one.heading_rad for one in found]) == pytest.approx(
        np.mean([one.heading_error_rad for one in found]), rel=0.15)


def test_drift_holds_95_percent_of_what_becomes_of_a_carried_part():
    true = np.array([np.cos(np.radians(37.0)), np.sin(np.radians(37.0))]) * 0.05
    inside = []
    for seed in range(200):
        found = fit_belt(made_marks(seed=seed))
        along = np.array([np.cos(found.heading_rad), np.sin(found.heading_rad)]) * found.mm_per_count
        inside.append(np.linalg.norm((along - true) * 800 / 0.05) <= found.drift_95_mm(800.0))
    assert 0.90 <= np.mean(inside) <= 0.99


def test_it_is_the_line_of_total_least_squares():
    """Outside check: skimage's LineModelND, orthogonal distances in three dimensions, counts scaled alike."""
    marks = made_marks(heading_deg=20.0, marks=1, touches=12)
    found = fit_belt(marks)
    size = found.sigma_mm / 12**-0.5
    line = LineModelND.from_estimate(np.column_stack([size * (marks.counts - marks.counts.mean()), marks.points]))
    first, x, y = line.direction
    assert found.mm_per_count == pytest.approx(size * np.hypot(x, y) / abs(first), rel=1e-6)
    assert found.heading_rad == pytest.approx(np.arctan2(y * np.sign(first), x * np.sign(first)), abs=1e-6)


def test_a_bad_touch_is_left_out():
    marks = made_marks()
    marks.points[7] += [1.5, -1.0]
    found = fit_belt(marks)
    assert np.flatnonzero(~found.kept).tolist() == [7]
    assert found.mm_per_count == pytest.approx(0.05, abs=4 * found.mm_per_count_error)
    assert np.hypot(found.along_mm[7], found.across_mm[7]) > 1.5


def test_a_bad_touch_would_matter():
    """What leaving it out is worth: with it in the fit, the scale is off by far more than its standard error."""
    marks = made_marks()
    marks.points[4] += 3.0 * np.array([np.cos(np.radians(37.0)), np.sin(np.radians(37.0))])
    apart = np.diff(marks.counts[:5])[-1]
    rough = np.linalg.norm(marks.points[4] - marks.points[3]) / apart
    assert abs(rough - 0.05) > 20 * fit_belt(marks).mm_per_count_error


def test_counts_roll_over(tmp_path):
    marks = made_marks()
    file = tmp_path / "belt.csv"
    rows = zip(marks.mark, marks.counts.astype(int) % 8192, *marks.points.T, strict=True)
    file.write_text("mark,counts,x_mm,y_mm\n" + "".join(f"{m},{c},{x},{y}\n" for m, c, x, y in rows))
    read = read_marks(file, 8192)
    whole = fit_belt(marks)
    assert fit_belt(read).mm_per_count == pytest.approx(whole.mm_per_count, abs=1e-9)
    with pytest.raises(InputFault, match="modulus"):
        fit_belt(read_marks(file))


@pytest.mark.parametrize(("name", "modulus"), [("bells", None), ("mixed", 65536)])
def test_recorded_belts(recordings_folder, name, modulus):
    true = json.loads((recordings_folder / name / "calibration" / "truth.json").read_text())
    found = fit_belt(read_marks(recordings_folder / name / "calibration" / "belt.csv", modulus))
    assert abs(found.mm_per_count - true["mm_per_count"]) < 4 * found.mm_per_count_error
    turn = np.angle(np.exp(1j * (found.heading_rad - np.radians(true["heading_deg"]))))
    assert abs(turn) < 4 * found.heading_error_rad


@pytest.mark.parametrize(("rows", "what"), [
    ("", "no touches"),
    ("a,0,0,0\na,100,5,0\nb,0,0,0\n", "touched once"),
    ("a,0,0,0\na,100,5,0\n", "too few"),
    ("a,5,0,0\na,5,5,0\na,5,9,0\n", "too few"),
    ("a,0,0,0\na,nan,5,0\n", "not finite"),
    ("a,0,0,0\na,1.5,5,0\n", "whole number"),
    ("a,0,0,0\na,x,5,0\n", "not a number"),
    ("a,0,0,0\na,100,5,0\na,200,90,3\na,300,-70,4\n", "off any one heading"),
])  # fmt: skip
def test_touches_that_will_not_do_are_a_fault(tmp_path, rows, what):
    file = tmp_path / "belt.csv"
    file.write_text("mark,counts,x_mm,y_mm\n" + rows)
    with pytest.raises(InputFault, match=what):
        fit_belt(read_marks(file), file)
