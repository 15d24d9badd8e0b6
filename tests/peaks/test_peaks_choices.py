"""The systematic part: other choices of the analysis on the same traces, and what the calibration leaves open."""

from __future__ import annotations

import numpy as np
import pytest
from peaks_synthetic import bootstrap, count_matrix, histogram_of, linear

from meseta import Recipe, TraceSet
from meseta.analysis import Analysis
from meseta.peaks import CalibrationErrors, OtherCounts, fit_histogram
from meseta.quantities import G0_SIEMENS
from meseta.simulate import SimulationSettings, simulate

FEW = SimulationSettings(samples=600, sampling_hertz=5000.0, bandwidth_hertz=2000.0)


def shifts(fit, kind):
    return {shift.choice: shift.moves_by_g0 for shift in fit.shifts if shift.kind == kind}


@pytest.fixture(scope="module")
def planted():
    matrix, _ = count_matrix(linear(2), 1500, np.random.default_rng(3))
    return matrix, histogram_of(matrix), bootstrap(matrix, 100, 1)


def test_counts_of_another_choice_move_the_peak_by_what_they_are_moved(planted):
    """All counts two bins (0.04 G0) higher: both positions move by 0.04 G0."""
    matrix, histogram, drawn = planted
    here = histogram.counts.astype(float)
    other = OtherCounts("two bins higher", np.roll(here, 2), here)
    fit = fit_histogram(histogram, Recipe().peaks, drawn, matrix, others=[other])
    np.testing.assert_allclose(shifts(fit, "analysis")["two bins higher"], 0.04, atol=0.002)
    assert (fit.table.position_choices_g0 > 0.019).all()


def test_what_is_only_shown_is_not_counted(planted):
    matrix, histogram, drawn = planted
    here = histogram.counts.astype(float)
    shown = OtherCounts("two bins higher", np.roll(here, 2), here, counted=False)
    without, beside = (
        fit_histogram(histogram, Recipe().peaks, drawn, matrix, others=others).table for others in ([], [shown])
    )
    np.testing.assert_array_equal(beside.position_systematic_g0, without.position_systematic_g0)


def test_a_choice_that_leaves_nothing_moves_nothing(planted):
    matrix, histogram, drawn = planted
    here = histogram.counts.astype(float)
    fit = fit_histogram(histogram, Recipe().peaks, drawn, matrix, others=[OtherCounts("nothing", 0.2 * here, here)])
    assert np.isnan(shifts(fit, "analysis")["nothing"]).all()


def test_calibration_stands_apart_and_is_added_in_quadrature(planted):
    """Errors of 1 % of gain, 0.01 G0 of offset: 0.01 g and 0.01; of 50 ohm: g² G0 50 (dg/dR of the series formula)."""
    matrix, histogram, drawn = planted
    errors = CalibrationErrors(gain_relative=0.01, offset_g0=0.01, series_resistance_ohm=50.0)
    fit = fit_histogram(histogram, Recipe().peaks, drawn, matrix, calibration=errors)
    table, moved = fit.table, shifts(fit, "calibration")
    assert set(moved) == {"gain", "offset", "series resistance"}
    g = table.position_g0
    np.testing.assert_allclose(
        table.position_calibration_g0**2, (0.01 * g) ** 2 + 0.01**2 + (g**2 * G0_SIEMENS * 50) ** 2
    )
    np.testing.assert_allclose(
        table.position_systematic_g0, np.hypot(table.position_choices_g0, table.position_calibration_g0)
    )


def test_a_run_tries_regions_zeros_rules_and_sensitivities_and_the_stated_calibration():
    recipe = Recipe.preset("metal").with_values("resampling", replicates=60)
    recipe = recipe.with_values("selection", rules=["highest_g0 > 0.9", "lowest_g0 < 0.5"])
    recipe = recipe.with_values("calibration", gain_relative_error=0.02, offset_error_ampere=1e-8, bias_volt=0.1)
    fit = Analysis(simulate("metal", 120, 4, FEW).traces, recipe).result("peaks")
    moved, own = shifts(fit, "analysis"), 0.1 * fit.table.position_g0[0]
    assert "region whole phase" in moved
    assert {"zero of displacement at 0.3 G0", "zero of displacement at 0.7 G0"} <= set(moved)
    assert {"without the rule highest_g0 > 0.9", "without the rule lowest_g0 < 0.5"} <= set(moved)
    assert {"sensitivity to plateaus 4", "sensitivity to plateaus 6"} <= set(moved)
    assert all(abs(values[0]) < own for values in moved.values() if np.isfinite(values[0]))
    stated = shifts(fit, "calibration")
    np.testing.assert_allclose(stated["gain"], 0.02 * fit.table.position_g0)
    np.testing.assert_allclose(stated["offset"], 1e-8 / (0.1 * G0_SIEMENS))


def test_a_zero_within_the_plateau_moves_the_peak():
    """Plateaus near 0.62 G0: with the zero at 0.63 G0 instead of 0.45 the lower half of them is not counted."""
    rng = np.random.default_rng(1)
    rows = []
    for _ in range(150):
        steps = [np.full(100, 2.0), np.full(150, 0.62 + 0.05 * rng.standard_normal()), np.full(120, 1e-5)]
        rows.append(np.concatenate(steps) * np.exp(rng.normal(0, 0.02, 370)) + rng.normal(0, 1e-6, 370))
    recipe = Recipe().with_values("histogram", axis="linear", high_g0=3.0, low_g0=0.1, region="before_zero")
    recipe = recipe.with_values("alignment", zero_at_g0=0.45).with_values("resampling", replicates=40)
    recipe = recipe.with_values("peaks", peaks=[{"position_g0": 0.62, "width": 0.05}], background="constant")
    fit = Analysis(TraceSet.from_arrays(rows, step_nm=0.002), recipe).result("peaks")
    moved = shifts(fit, "analysis")
    assert moved["zero of displacement at 0.27 G0"][0] == pytest.approx(0, abs=1e-3)
    assert moved["zero of displacement at 0.63 G0"][0] > 0.003
    assert fit.table.position_choices_g0[0] > 0.0015
