"""What every trace does to a position, and intervals where a position remembers more than the histogram."""

from __future__ import annotations

import numpy as np
from peaks_synthetic import Record, bootstrap, count_matrix, histogram_of, linear

from meseta import Recipe
from meseta.histograms import resample
from meseta.peaks.choosing import Chooser
from meseta.peaks.fitting import fit_model
from meseta.peaks.memory import extra_widening, influences
from meseta.peaks.windows import Window, starts_of
from meseta.traces import trace_table
from meseta.work import Work


def fitted_two(traces, record=None, seed=1):
    matrix, _ = count_matrix(linear(2), traces, np.random.default_rng(seed), record)
    histogram = histogram_of(matrix)
    peaks = [{"position_g0": 1.0, "width": 0.1}, {"position_g0": 1.93, "width": 0.14}]
    settings = Recipe().with_values("peaks", peaks=peaks).peaks
    chooser = Chooser(histogram, settings, None, matrix, (0.4, 4.4), np.empty(0))
    window = Window(0, histogram.grid.bins, tuple(starts_of(settings, histogram.grid)))
    return matrix, fit_model(chooser.model(window), histogram.counts), (0, histogram.grid.bins)


def test_influences_are_what_leaving_a_trace_out_does():
    matrix, fitted, bins = fitted_two(300)
    moved = influences(fitted, matrix, np.arange(300), bins)
    total = matrix.counts.sum(axis=0).astype(float)
    for trace in (3, 50, 200):
        without = fit_model(fitted.model, total - matrix.counts[trace], start=fitted.inner)
        np.testing.assert_allclose(fitted.peaks[:, 1] - without.peaks[:, 1], moved[trace], atol=3e-5, rtol=0.15)
    np.testing.assert_allclose(moved.sum(axis=0), 0, atol=1e-6)  # the sum of all scores is zero at the best fit


def test_their_scatter_is_that_of_resampled_fits():
    matrix, fitted, bins = fitted_two(600)
    moved = influences(fitted, matrix, np.arange(600), bins)
    drawn = bootstrap(matrix, 200, 1)
    again = [fit_model(fitted.model, row, start=fitted.inner).peaks[:, 1] for row in drawn.counts]
    np.testing.assert_allclose(np.sqrt((moved**2).sum(axis=0)), np.std(again, axis=0), rtol=0.2)


def widening(record, seed):
    matrix, fitted, bins = fitted_two(1500, record, seed)
    recipe = Recipe().with_values("resampling", replicates=20)
    kept, table = np.ones(1500, bool), trace_table(1500)
    drawn = resample(matrix, kept, table, recipe.histogram, recipe.resampling, Work(threads=1))
    return extra_widening(fitted, matrix, drawn, bins)


def test_memory_of_a_position_widens_its_interval_and_independent_traces_do_not():
    with_memory = [widening(Record(memory_traces=20.0), seed) for seed in range(4)]
    assert np.mean(with_memory) > 1.005
    assert np.max(with_memory) < 1.3
    assert all((widening(None, seed) < 1.01).all() for seed in range(3))
