"""Shifts with choices and with the calibration; all defensible analyses together."""

from __future__ import annotations

import numpy as np
import pytest
from peaks_synthetic import count_matrix, counts_histogram, histogram_of, linear, logarithmic

from meseta.errors import CallError
from meseta.peaks import calibration_shifts, defensible_analyses, fit_histogram
from meseta.quantities import remove_series_resistance
from meseta.recipe import Recipe


def test_all_analyses_hold_the_chosen_one_and_the_truth():
    planted = logarithmic(2)
    matrix, _ = count_matrix(planted, 3000, np.random.default_rng(3))
    histogram = histogram_of(matrix)
    half = histogram_of(matrix, np.arange(0, 3000, 2))
    settings = Recipe().peaks
    table = fit_histogram(histogram, settings, None, matrix).table
    found = defensible_analyses({"as chosen": histogram, "every second trace": half}, table, settings)
    assert set(found.histogram) == {"as chosen", "every second trace"}
    assert found.analysis.max() + 1 == 2 * 3 * 3 * 3 * 2
    assert len(found) == 2 * 108
    spread = found.spread()
    np.testing.assert_allclose(spread.chosen_g0, table.position_g0, rtol=1e-6)
    assert (spread.analyses > 40).all()
    assert (spread.lowest_g0 <= spread.low_g0).all()
    assert (spread.low_g0 <= spread.median_g0).all()
    assert (spread.high_g0 <= spread.highest_g0).all()
    np.testing.assert_allclose(np.log10(spread.median_g0), np.sort(planted.position), atol=0.03)
    assert (found.chosen.sum(), found.defensible[found.chosen].all()) == (2, True)


def test_all_analyses_need_a_peak():
    histogram = counts_histogram(np.full(100, 50), np.linspace(0.1, 3, 101))
    settings = Recipe().peaks
    table = fit_histogram(histogram, settings).table
    with pytest.raises(CallError):
        defensible_analyses({"as chosen": histogram}, table, settings)


def test_a_background_that_cannot_be_defended_does_not_count():
    """A constant under an exponential that falls by e^5 doubles the deviance: no shift is given for it."""
    edges = np.linspace(0.4, 4.4, 201)
    middle = (edges[1:] + edges[:-1]) / 2
    expected = 4e3 * np.exp(-0.5 * ((middle - 2) / 0.2) ** 2) + 5e4 * np.exp(-1.25 * (middle - 0.4))
    counts = np.random.default_rng(1).poisson(expected)
    wanted = Recipe().with_values("peaks", peaks=[{"position_g0": 2.0}], fit_low_g0=0.4, fit_high_g0=4.4).peaks
    shifts = dict(fit_histogram(counts_histogram(counts, edges), wanted).systematic)
    assert np.isnan(shifts["background constant"][0])
    assert abs(shifts["bins twice as wide"][0]) < 0.01


def test_systematic_part_grows_with_a_background_that_is_hard_to_tell():
    matrix, _ = count_matrix(linear(1), 2000, np.random.default_rng(2))
    found = fit_histogram(histogram_of(matrix), Recipe().peaks)
    shifts = np.array([shift[0] for _, shift in found.systematic])
    half = (np.nanmax([*shifts, 0]) - np.nanmin([*shifts, 0])) / 2
    assert found.table.position_systematic_g0[0] == pytest.approx(half)


def test_calibration_shifts_are_those_of_small_changes():
    position = np.array([1.0, 2.0, 3.0])
    found = calibration_shifts(position, 0.01, 0.002, 1e-4, 50.0)
    np.testing.assert_allclose(found.gain_g0, 0.01 * position)
    np.testing.assert_allclose(found.bias_g0, 0.002 * position)
    np.testing.assert_allclose(found.offset_g0, 1e-4)
    moved = remove_series_resistance(position, 0.01) - position
    np.testing.assert_allclose(found.series_resistance_g0, moved * 50 / 0.01, rtol=1e-5)
    np.testing.assert_allclose(
        found.total_g0**2,
        found.gain_g0**2 + found.bias_g0**2 + found.offset_g0**2 + found.series_resistance_g0**2,
    )
