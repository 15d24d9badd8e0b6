"""Peaks asked for one by one: fixed, bounded and tied to one another, and how an editor's peaks become settings."""

from __future__ import annotations

import numpy as np
import pytest
from peaks_synthetic import bootstrap, count_matrix, counts_histogram, histogram_of, linear
from scipy import stats

from meseta import Recipe
from meseta.errors import CallError, RecipeError
from meseta.figures import analyses_figure
from meseta.peaks import defensible_analyses, editable_peaks, edited_peaks, fit_histogram
from meseta.quantities import R0_OHM, remove_series_resistance
from meseta.recipe.peaks import PeakStart

EDGES = np.linspace(0.1, 4.4, 216)


def drawn(*peaks, background=30.0, edges=EDGES):
    expected = sum(area * np.diff(stats.norm.cdf(edges, place, width)) for place, width, area in peaks)
    return np.random.default_rng(1).poisson(expected + background)


def fit(counts, peaks, edges=EDGES, **values):
    settings = Recipe().with_values("peaks", peaks=peaks, **values).peaks
    return fit_histogram(counts_histogram(counts, edges), settings).table


def test_a_peak_that_is_not_tied_stays_out_of_the_multiples():
    counts = drawn((0.4, 0.05, 2e4), (0.97, 0.08, 3e4), (1.94, 0.12, 2e4), (2.91, 0.2, 1e4))
    peaks = [{"position_g0": value} for value in (1.0, 2.0, 3.0)] + [{"position_g0": 0.42, "tied": False}]
    table = fit(counts, peaks, tie="multiples")
    assert table.position_g0[0] == pytest.approx(0.4, abs=0.003)
    np.testing.assert_allclose(table.position_g0[1:], table.position_g0[1] * np.array([1, 2, 3]), rtol=1e-9)
    assert table.position_g0[1] == pytest.approx(0.97, abs=0.004)
    assert [str(text) for text in table.held] == ["", *(f"position tied as multiple {n}" for n in (1, 2, 3))]


def test_multiples_need_not_be_one_two_three():
    counts = drawn((0.97, 0.08, 3e4), (2.91, 0.2, 2e4))
    peaks = [{"position_g0": 1.0}, {"position_g0": 3.0, "multiple": 3}]
    table = fit(counts, peaks, tie="multiples")
    assert table.position_g0[1] == pytest.approx(3 * table.position_g0[0], rel=1e-9)
    assert table.position_g0[0] == pytest.approx(0.97, abs=0.005)


@pytest.mark.parametrize("axis", ["linear", "logarithmic"])
def test_a_ladder_with_its_unit_held_is_the_ladder_of_one_resistance(axis):
    """True 1, 2, 3 G0 behind 400 ohm are read as 0.9699392858, 1.883266243, 2.744796756 G0 (computed reference)."""
    places = (0.9699392858, 1.883266243, 2.744796756)
    edges = EDGES if axis == "linear" else 10 ** np.linspace(-0.8, 0.8, 321)
    if axis == "linear":
        counts = drawn(*((place, 0.06, 8e4) for place in places))
    else:
        u = [(float(np.log10(place)), 0.02, 8e4) for place in places]
        counts = drawn(*u, edges=np.log10(edges))
    peaks = [{"position_g0": float(n), "fixed": n == 1} for n in (1, 2, 3)]
    settings = Recipe().with_values("peaks", peaks=peaks, tie="ladder").peaks
    table = fit_histogram(counts_histogram(counts, edges, axis), settings).table
    np.testing.assert_allclose(table.position_g0, places, atol=0.005)
    true = remove_series_resistance(table.position_g0, R0_OHM * (1 / table.position_g0[0] - 1))
    np.testing.assert_allclose(true, [1, 2, 3], rtol=1e-6)


def test_relative_widths_are_equal_among_those_that_are_tied():
    counts = drawn((0.5, 0.1, 2e4), (1.0, 0.08, 3e4), (2.0, 0.16, 3e4))
    peaks = [{"position_g0": 0.5, "tied_width": False}, {"position_g0": 1.0}, {"position_g0": 2.0}]
    table = fit(counts, peaks, equal_relative_widths=True)
    relative = table.fwhm / table.position_g0
    assert relative[1] == pytest.approx(relative[2], rel=1e-9)
    assert relative[1] == pytest.approx(0.08 * 2.3548, rel=0.05)
    assert table.fwhm[0] == pytest.approx(0.1 * 2.3548, rel=0.08)


def test_a_tie_of_one_peak_is_none():
    counts = drawn((1.0, 0.1, 3e4))
    free, tied = (fit(counts, [{"position_g0": 1.0}], tie=tie) for tie in ("none", "ladder"))
    np.testing.assert_array_equal(free.position_g0, tied.position_g0)


def test_bounds_hold_and_a_peak_on_its_bound_is_called_so():
    counts = drawn((1.0, 0.1, 3e4))
    table = fit(counts, [{"position_g0": 1.2, "low_g0": 1.1, "high_g0": 1.5}])
    assert table.position_g0[0] == pytest.approx(1.1)
    assert "position on its bound" in table.status[0]
    pair = [{"position_g0": 1.05, "low_g0": 1.02}, {"position_g0": 2.1}]
    tied = fit(drawn((1.0, 0.1, 3e4), (2.0, 0.15, 2e4)), pair, tie="multiples")
    assert tied.position_g0[0] == pytest.approx(1.02)


def test_a_fixed_position_has_no_interval():
    matrix, _ = count_matrix(linear(2), 600, np.random.default_rng(1))
    peaks = [{"position_g0": 1.0, "fixed": True}, {"position_g0": 1.93, "fixed_width": True, "width": 0.143}]
    settings = Recipe().with_values("peaks", peaks=peaks).peaks
    table = fit_histogram(histogram_of(matrix), settings, bootstrap(matrix, 100, 1), matrix).table
    assert np.isnan(table.position_low_g0[0])
    assert np.isfinite(table.position_low_g0[1])
    assert list(table.held) == ["position fixed", "width fixed"]
    assert table.fwhm[1] == pytest.approx(0.143 * 2.3548, rel=1e-4)


# -- an editor's peaks ------------------------------------------------------------------------------------------------


def test_fitted_peaks_come_back_as_starts_and_give_the_same_fit():
    matrix, _ = count_matrix(linear(3), 1500, np.random.default_rng(2))
    histogram, settings = histogram_of(matrix), Recipe().peaks
    found = fit_histogram(histogram, settings, None, matrix).table
    starts = editable_peaks(settings, found)
    assert [peak.multiple for peak in starts] == [1.0, 2.0, 3.0]
    again = fit_histogram(histogram, edited_peaks(settings, starts[::-1]), None, matrix).table
    np.testing.assert_allclose(again.position_g0, found.position_g0, rtol=1e-3)


def test_edited_peaks_are_sorted_and_leave_the_other_settings_alone():
    settings = Recipe().with_values("peaks", shape="lorentzian", most=7).peaks
    edited = edited_peaks(settings, [PeakStart(position_g0=2.0), PeakStart(position_g0=1.0)], tie="multiples")
    assert [peak.position_g0 for peak in edited.peaks] == [1.0, 2.0]
    assert (edited.tie, edited.shape, edited.most) == ("multiples", "lorentzian", 7)
    assert settings.peaks == []
    assert edited_peaks(edited, []).peaks == []


@pytest.mark.parametrize(
    ("peaks", "word"),
    [
        ([{"position_g0": 1.0}], "one peak alone"),
        ([{"position_g0": 1.0}, {"position_g0": 2.0, "tied": False}], "one peak alone"),
        ([{"position_g0": 1.0, "multiple": 2}, {"position_g0": 2.0, "multiple": 2}], "multiples 2, 2"),
        ([{"position_g0": 1.0, "fixed": True}, {"position_g0": 2.0, "fixed": True}], "two tied positions"),
        ([{"position_g0": 1.0, "name": "a"}, {"position_g0": 2.0, "name": "a"}], "called 'a'"),
    ],
)
def test_what_does_not_go_together_is_said(peaks, word):
    with pytest.raises(CallError, match=word):
        edited_peaks(Recipe().peaks, [PeakStart(**peak) for peak in peaks], tie="multiples")


@pytest.mark.parametrize(
    "peak",
    [
        {"position_g0": 0.0},
        {"position_g0": 1.0, "low_g0": 1.2},
        {"position_g0": 1.0, "low_g0": 0.9, "high_g0": 0.9},
        {"position_g0": 1.0, "fixed_width": True},
        {"position_g0": 1.0, "width": -0.1},
    ],
)
def test_a_peak_that_cannot_be_is_refused_by_the_recipe(peak):
    with pytest.raises(RecipeError):
        Recipe().with_values("peaks", peaks=[peak])


def test_a_recipe_with_tied_peaks_survives_its_file():
    peaks = [{"position_g0": 1.0, "tied": False, "low_g0": 0.5}, {"position_g0": 2.0, "multiple": 2.0}]
    recipe = Recipe().with_values("peaks", peaks=peaks, tie="multiples")
    assert Recipe.parse(recipe.text()).peaks == recipe.peaks


# -- what a window draws ----------------------------------------------------------------------------------------------


def test_residuals_are_of_the_size_of_the_scatter():
    matrix, _ = count_matrix(linear(2), 1500, np.random.default_rng(3))
    found = fit_histogram(histogram_of(matrix), Recipe().peaks, bootstrap(matrix, 100, 1), matrix)
    inside = np.isfinite(found.model)
    np.testing.assert_allclose(found.residuals[inside], (found.observed - found.model)[inside])
    assert np.isfinite(found.scaled_residuals[inside]).all()
    assert 0.2 < np.sqrt(np.mean(found.scaled_residuals[inside] ** 2)) < 1.5


def test_systematic_table_and_all_analyses_as_rows():
    matrix, _ = count_matrix(linear(2), 1500, np.random.default_rng(3))
    histogram, settings = histogram_of(matrix), Recipe().peaks
    found = fit_histogram(histogram, settings, bootstrap(matrix, 100, 1), matrix)
    table = found.systematic_table()
    assert set(table.peak) == {"1", "2"}
    assert len(table) == 2 * len(found.shifts)
    widths = table.moves_by_g0[(table.peak == "2") & (table.choice == "bins twice as wide")]
    np.testing.assert_array_equal(widths, dict(found.systematic)["bins twice as wide"][1:])
    every = defensible_analyses({"as chosen": histogram}, found.table, settings)
    one = every.of_peak("1")
    assert one.position_g0[one.chosen] == pytest.approx(found.table.position_g0[0])
    assert len(analyses_figure(**vars(one), settings=Recipe().figure).axes) == 2
    with pytest.raises(CallError):
        every.of_peak("no such peak")
