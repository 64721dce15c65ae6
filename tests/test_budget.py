import numpy as np
import pytest
from made_camera import MILD, SIZE, made_camera, made_touches
from some_arms import changed

from cameras.lens import Lens
from cameras.plane import fit_plane
from pipeline.budget import BudgetLine, MapDoubt, budgets_of, error_budget, longest_carry_mm, map_doubt
from pipeline.cell import load_cell

NO_DOUBT = MapDoubt(0.0, 0.0, 0.0, 0.0)


def test_the_trade_arithmetic_of_a_belt():
    """1 ms at 300 mm/s is 0.3 mm, 0.1 % of scale over 500 mm is 0.5 mm (arithmetic); 95 % is 1.96 of each."""
    budget = error_budget("lever", NO_DOUBT, finding_mm=0.0, carry_mm=500.0, scale_error=0.001, speed_mm_s=300.0,
                          time_error_s=0.001)  # fmt: skip
    by_source = {line.source.split()[0]: line for line in budget.lines}
    assert by_source["belt"].along_mm == pytest.approx(0.5)
    assert by_source["time"].along_mm == pytest.approx(0.3)
    assert by_source["time"].within_mm == pytest.approx(1.96 * 0.3, rel=1e-3)
    assert budget.total.within_mm == pytest.approx(1.96 * np.hypot(0.5, 0.3), rel=1e-3)


def test_variances_add_and_every_source_counts():
    """Drawn errors of all sources together lie within the sum 95 % of the time; each source taken away lessens it."""
    kinds = {"finding_mm": 0.06, "finding_rad": 0.002, "carry_mm": 800.0, "scale_error": 1e-4,
             "heading_error_rad": 1.5e-4, "speed_mm_s": 200.0, "time_error_s": 5e-4}  # fmt: skip
    doubt = MapDoubt(0.02, 0.03, 1e-4, 2e-4)
    total = error_budget("lever", doubt, **kinds).total
    rng = np.random.default_rng(0)
    lines = error_budget("lever", doubt, **kinds).lines
    along = sum(rng.normal(0, line.along_mm, 100_000) for line in lines)
    across = sum(rng.normal(0, line.across_mm, 100_000) for line in lines)
    assert np.mean(np.hypot(along, across) <= total.within_mm) == pytest.approx(0.95, abs=0.004)
    for name in ("finding_mm", "scale_error", "heading_error_rad", "time_error_s"):
        assert error_budget("lever", doubt, **{**kinds, name: 0.0}).total.within_mm < total.within_mm
    assert error_budget("lever", NO_DOUBT, **kinds).total.within_deg < total.within_deg


@pytest.mark.parametrize(("mm", "deg", "met"), [
    (None, None, True), (0.3, None, True), (0.2, None, False), (None, 0.3, True), (None, 0.1, False), (0.3, 0.1, False),
])  # fmt: skip
def test_the_sum_is_held_against_the_tolerance(mm, deg, met):
    budget = error_budget("lever", NO_DOUBT, finding_mm=0.1, finding_rad=0.002, tolerance_mm=mm, tolerance_deg=deg)
    assert budget.met is met
    assert (budget.rows()[-1][0] == "tolerated") is (mm is not None or deg is not None)


def test_one_coordinate_and_a_round_error_have_their_own_95_percent():
    assert BudgetLine("x", 1.0, 0.0).within_mm == pytest.approx(1.960, abs=1e-3)
    assert BudgetLine("x", 1.0, 1.0).within_mm == pytest.approx(2.448, abs=1e-3)
    assert BudgetLine("x", 0.0, 0.0, np.radians(1.0)).within_deg == pytest.approx(1.960, abs=1e-3)


def test_the_map_s_doubt_is_split_between_lens_and_touches():
    error = np.diag(np.array([2.0, 2.0, 4.0, 4.0, 5e-3, 0.05, 1e-4, 1e-4, 0.0]) ** 2)
    camera = made_camera()
    touched = made_touches(camera)
    unsure = map_doubt(fit_plane(touched.pixels, touched.points, Lens(MILD, SIZE, error)), -40.0)
    sure = map_doubt(fit_plane(touched.pixels, touched.points, Lens(MILD, SIZE)), -40.0)
    assert sure.lens_mm == pytest.approx(0.0, abs=1e-6)
    assert unsure.lens_mm > 0.003
    assert unsure.plane_mm == pytest.approx(sure.plane_mm, rel=0.1)
    assert 0 < sure.plane_mm < 0.06
    assert 0 < sure.plane_rad < 1e-3


def test_the_longest_carry_runs_from_the_image_to_the_window_s_end(recordings_folder):
    cell = load_cell(recordings_folder / "bells" / "cell.toml")
    camera = made_camera()
    seen = camera.to_cell([[0.0, 0.0], [1023.0, 0.0], [0.0, 799.0], [1023.0, 799.0]])
    assert longest_carry_mm(cell, [camera]) == pytest.approx(220.0 - seen[:, 1].min(), abs=1.0)
    assert longest_carry_mm(load_cell(recordings_folder / "tray" / "cell.toml"), [camera]) == 0.0


def test_what_is_not_known_is_told_and_not_summed():
    """None is unknown; 0 is known to be nothing."""
    whole = {"finding_mm": 0.1, "carry_mm": 500.0, "scale_error": 0.001, "heading_error_rad": 5e-4, "speed_mm_s": 200.0,
             "time_error_s": 0.001}  # fmt: skip
    names = {"scale_error": "belt scale", "heading_error_rad": "heading", "time_error_s": "time stamp",
             "speed_mm_s": "time stamp", "finding_mm": "finding"}  # fmt: skip
    assert error_budget("lever", NO_DOUBT, **whole).missing == ()
    assert error_budget("lever", NO_DOUBT, **{**whole, "scale_error": 0.0}).missing == ()
    for key, name in names.items():
        lacking = error_budget("lever", NO_DOUBT, **{**whole, key: None})
        (source,) = lacking.missing
        assert source.startswith(name)
        assert (source, "not given", "") in lacking.rows()
        assert lacking.total.within_mm < error_budget("lever", NO_DOUBT, **whole).total.within_mm


def test_the_yaw_of_a_round_part_is_not_judged():
    asked = {"finding_mm": 0.01, "finding_rad": np.pi, "tolerance_mm": 1.0, "tolerance_deg": 1.0}
    assert not error_budget("lever", NO_DOUBT, **asked).met
    dome = error_budget("dome", NO_DOUBT, round_part=True, **asked)
    assert dome.met
    assert {deg for _, _, deg in dome.rows()} <= {"-", ""}
    assert dome.document()["sum"]["within_deg"] is None


def test_the_document_holds_every_line_the_sum_and_the_verdict():
    met = error_budget("lever", NO_DOUBT, finding_mm=0.1, carry_mm=400.0, scale_error=1e-4, tolerance_mm=0.3)
    told = met.document()
    assert [line["source"] for line in told["lines"]] == [line.source for line in met.lines]
    assert told["sum"]["within_mm"] == pytest.approx(met.total.within_mm, abs=1e-4)
    assert (told["tolerance_mm"], told["met"]) == (0.3, True)
    assert [line["within_mm"] for line in told["lines"] if line["source"].startswith("time")] == [None]
    assert error_budget("lever", NO_DOUBT, finding_mm=0.1).document()["met"] is None


def test_a_cell_s_own_errors_come_into_its_budgets():
    """Each key of the cell file changes its line and no other; a tray has none of them."""
    camera = made_camera()
    touched = made_touches(camera)
    maps = {"": fit_plane(touched.pixels, touched.points, Lens(MILD, SIZE))}
    plain = {"parts__lever__grip_tolerance_mm": 0.5}
    given = {"belt__mm_per_count_error": 1e-5, "belt__heading_error_deg": 0.02,
             "cameras": [{"name": "overhead", "time_error_s": 0.001}]}  # fmt: skip
    (bare,) = budgets_of(changed(**plain), maps, None, 200.0)
    assert bare.tolerance_mm == 0.5
    assert len(bare.missing) == 4
    for key, value in given.items():
        (one,) = budgets_of(changed(**plain, **{key: value}), maps, None, 200.0)
        assert len(one.missing) == 3
        assert one.total.within_mm > bare.total.within_mm
    tray = changed(belt=None, tray={"surface_mm": -50.0})
    assert [line.source for line in budgets_of(tray, maps)[0].lines] == ["lens", "plane map", "finding"]
    assert budgets_of(changed(), {}) == []
