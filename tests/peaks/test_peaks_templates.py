"""Backgrounds that are a blank's or the bare traces' own histogram, and the noise of those."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from peaks_synthetic import Population, count_matrix, histogram_of

from meseta import Recipe
from meseta.analysis import Analysis
from meseta.errors import CallError
from meseta.histograms import CountMatrix, resample
from meseta.peaks import fit_histogram
from meseta.peaks.templates import background_template
from meseta.simulate import SimulationSettings, simulate
from meseta.traces import trace_table
from meseta.work import Work

MOLECULE = Population(
    "logarithmic", -5.0, -1.0, 100, (-3.0,), (0.18,), (0.5,), (60,), 0.06, 120, 4.0
)  # fmt: skip
BLANK = Population("logarithmic", -5.0, -1.0, 100, (), (), (), (), 0.06, 120, 4.0)


def with_blank(seed, blanks):
    """Return counts of 400 molecular traces, then of some blank ones, and which are the blank's."""
    rng = np.random.default_rng(seed)
    matrix, _ = count_matrix(MOLECULE, 400, rng)
    other, _ = count_matrix(BLANK, blanks, rng)
    counts = np.concatenate([matrix.counts, other.counts])
    number = len(counts)
    joined = CountMatrix(
        matrix.grid,
        counts,
        np.zeros((number, matrix.excluded.shape[1]), np.int64),
        np.full(number, np.nan),
        np.ones(number, bool),
    )
    return joined, np.arange(number) >= 400


def fitted(seed, blanks, **settings):
    matrix, blank = with_blank(seed, blanks)
    recipe = Recipe().with_values("resampling", replicates=150, seed=seed)
    drawn = resample(matrix, ~blank, trace_table(len(blank)), recipe.histogram, recipe.resampling, Work(threads=1))
    asked = Recipe().with_values(
        "peaks",
        background="template",
        peaks=[{"position_g0": 1e-3, "width": 0.19}],
        fit_low_g0=1.1e-5,
        fit_high_g0=0.09,
    )
    histogram = histogram_of(matrix, np.flatnonzero(~blank))
    return fit_histogram(histogram, asked.peaks, drawn, matrix, blank=blank, **settings).table


def test_blank_traces_scaled_are_the_background():
    table = fitted(1, 400)
    sigma = (np.log10(table.position_high_g0[0]) - np.log10(table.position_low_g0[0])) / 3.92
    assert np.log10(table.position_g0[0]) == pytest.approx(-3.0, abs=3 * sigma)
    assert table.area_per_trace[0] == pytest.approx(0.5 * 60, rel=0.1)
    assert table.background[0] == "template"


def test_a_small_blank_makes_the_area_less_certain():
    """The noise of the shape is in the interval: 12 blank traces tell less of the area than 1,200."""
    few, many = (np.median([np.ptp([t.area_low[0], t.area_high[0]]) for t in tables]) for tables in (
        [fitted(seed, 12) for seed in range(3)], [fitted(seed, 1200) for seed in range(3)]
    ))  # fmt: skip
    assert few > 1.15 * many


def test_a_blank_of_a_dozen_traces_is_smoothed_and_the_area_stays_right():
    """The true area is 0.5 x 60 samples a trace (the generator's); raw, such a blank takes 8 samples too few off."""
    tables = [fitted(seed, 12) for seed in range(40, 50)]
    areas = np.array([table.area_per_trace[0] for table in tables])
    assert abs(areas.mean() - 30.0) < 2.5
    assert sum(table.area_low[0] <= 30.0 <= table.area_high[0] for table in tables) >= 8


def test_a_blank_of_many_traces_is_taken_as_it_is():
    matrix, blank = with_blank(1, 400)
    asked = Recipe().with_values("peaks", background="template").peaks
    shape = background_template(histogram_of(matrix), asked, matrix, None, blank=blank).counts
    assert np.array_equal(shape, matrix.counts[blank].sum(axis=0))


def test_a_narrow_line_of_a_small_blank_is_not_smeared():
    """Two halves that share a sharp line foretell it: the width is taken from the traces, not from their number."""
    rng = np.random.default_rng(4)
    matrix, blank = with_blank(2, 40)
    expected = np.full(matrix.counts.shape[1], 0.2)
    expected[50] = 100.0
    counts = rng.poisson(expected, matrix.counts.shape)
    asked = Recipe().with_values("peaks", background="template").peaks
    lined = replace(matrix, counts=counts.astype(matrix.counts.dtype))
    shape = background_template(histogram_of(lined), asked, lined, None, blank=blank).counts
    assert shape[50] > 0.9 * counts[blank][:, 50].sum()


def test_a_template_without_traces_or_with_other_bins_is_refused():
    matrix, _ = with_blank(1, 10)
    asked = Recipe().with_values("peaks", background="template").peaks
    with pytest.raises(CallError, match="template"):
        fit_histogram(histogram_of(matrix), asked, None, matrix)
    with pytest.raises(CallError, match="template"):
        fit_histogram(histogram_of(matrix), asked, None, matrix, template=np.ones(7))


def test_a_rule_names_the_blank_and_bare_traces_are_the_tunnelling_background():
    settings = SimulationSettings(
        samples=1500, sampling_hertz=10_000.0, bandwidth_hertz=4000.0, specimens=2, yield_share=0.6
    )
    traces = simulate("molecule", 240, 3, settings).traces
    first = str(traces.table["specimen"][0])
    recipe = Recipe.preset("molecule").with_values("resampling", replicates=60)
    recipe = recipe.with_values("selection", rules=[f'specimen != "{first}"'])
    asked = [{"position_g0": 2e-4}]
    for values in ({"background": "template", "blank": f'specimen == "{first}"'}, {"background": "tunnelling"}):
        table = Analysis(traces, recipe.with_values("peaks", peaks=asked, **values)).result("peaks").table
        assert table.background[0] == values["background"]
        assert np.isfinite(table.position_g0[0])
        assert np.isfinite(table.position_low_g0[0])
