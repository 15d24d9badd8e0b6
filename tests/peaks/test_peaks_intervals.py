"""Intervals: against scipy's bootstrap, and do they hold the truth as often as they say."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest
from peaks_synthetic import bootstrap, count_matrix, histogram_of, linear
from scipy import stats

from meseta.peaks import fit_histogram
from meseta.peaks.intervals import bca_interval, percentile_interval
from meseta.peaks.model import Model
from meseta.peaks.proposal import block_counts, held_out_gain
from meseta.recipe import Recipe

sys.path.insert(0, str(Path(__file__).parents[1] / "campaigns"))
from coverage_peaks import campaign, verdict

SKEWED = np.random.default_rng(4).gamma(1.5, 1.0, 60)


def test_percentile_and_bca_intervals_agree_with_scipy():
    draws = np.random.default_rng(1).integers(0, 60, (8000, 60))
    replicates = SKEWED[draws].mean(axis=1)
    left_out = (SKEWED.sum() - SKEWED) / 59
    found = percentile_interval([SKEWED.mean()], replicates[:, None])
    corrected = bca_interval([SKEWED.mean()], replicates[:, None], left_out[:, None])
    for interval, method in ((found, "percentile"), (corrected, "BCa")):
        referee = stats.bootstrap((SKEWED,), np.mean, n_resamples=8000, method=method, rng=np.random.default_rng(2))
        width = referee.confidence_interval.high - referee.confidence_interval.low
        assert interval.low[0] == pytest.approx(referee.confidence_interval.low, abs=0.04 * width)
        assert interval.high[0] == pytest.approx(referee.confidence_interval.high, abs=0.04 * width)
    assert corrected.high[0] > found.high[0]


def test_a_factor_stretches_about_the_estimate():
    values = np.random.default_rng(1).standard_normal((4000, 1))
    plain, wide = percentile_interval([0.1], values), percentile_interval([0.1], values, 1.5)
    np.testing.assert_allclose(wide.low - 0.1, 1.5 * (plain.low - 0.1))
    np.testing.assert_allclose(wide.high - 0.1, 1.5 * (plain.high - 0.1))


def test_too_few_good_refits_give_no_interval():
    values = np.full((100, 1), np.nan)
    values[:19] = 1.0
    assert np.isnan(percentile_interval([1.0], values).low[0])


def test_bca_can_be_asked_for():
    matrix, _ = count_matrix(linear(1), 600, np.random.default_rng(1))
    drawn = bootstrap(matrix, 300, 1)
    plain, corrected = (
        fit_histogram(histogram_of(matrix), Recipe().with_values("peaks", intervals=kind).peaks, drawn, matrix).table
        for kind in ("percentile", "bca")
    )
    assert plain.position_low_g0[0] != corrected.position_low_g0[0]
    width = plain.position_high_g0[0] - plain.position_low_g0[0]
    assert corrected.position_low_g0[0] == pytest.approx(plain.position_low_g0[0], abs=0.3 * width)


def test_least_squares_agrees_with_the_likelihood_within_its_error():
    matrix, _ = count_matrix(linear(2), 1500, np.random.default_rng(5))
    drawn = bootstrap(matrix, 200, 1)
    likely, squares = (
        fit_histogram(histogram_of(matrix), Recipe().with_values("peaks", method=method).peaks, drawn, matrix).table
        for method in ("likelihood", "least_squares")
    )
    assert list(squares.status) == ["ok", "ok"]
    width = likely.position_high_g0 - likely.position_low_g0
    np.testing.assert_array_less(np.abs(squares.position_g0 - likely.position_g0), width)


def test_blocks_of_traces_add_up_to_all_kept_traces():
    matrix, _ = count_matrix(linear(1), 230, np.random.default_rng(1))
    rows = np.flatnonzero(np.arange(230) % 3 > 0)
    blocks = block_counts(matrix.counts, rows, 7)
    assert blocks.shape == (7, 200)
    np.testing.assert_array_equal(blocks.sum(axis=0), matrix.counts[rows].sum(axis=0))


def two_models(positions):
    edges = linear(1).grid.edges_g0
    models = []
    for chosen in (positions[:-1], positions):
        n = len(chosen)
        models.append(
            Model(
                "gaussian",
                "exponential",
                edges[:-1].copy(),
                edges[1:].copy(),
                False,
                np.array(chosen),
                np.full(n, 0.12),
                np.full(n, 0.4),
                np.full(n, 4.4),
                np.full(n, 0.02),
                np.full(n, 2.0),
                np.zeros(n, bool),
                np.zeros(n, bool),
            )
        )
    return models


def test_left_out_traces_ask_for_a_real_peak_and_not_for_more():
    real, spurious = 0, 0
    for seed in range(10):
        matrix, _ = count_matrix(linear(1), 500, np.random.default_rng(seed))
        blocks = block_counts(matrix.counts, np.arange(500), 10)
        gain = held_out_gain(blocks, *two_models([1.0]))
        real += gain.mean > gain.error
        gain = held_out_gain(blocks, *two_models([1.0, 2.2]))
        spurious += gain.mean > gain.error
    assert real == 10
    assert spurious <= 1


@pytest.mark.parametrize(("case", "low", "high"), [("independent", 0.90, 0.99), ("memory", 0.88, 0.995)])
def test_intervals_hold_the_truth_as_often_as_they_say(case, low, high):
    """The campaign tests/campaigns/coverage_peaks.py with 200 experiments instead of 2,000."""
    coverage, intervals, _ = verdict(campaign(case, 200, 500, 100, 1))
    assert intervals == 399  # one, two and three peaks take turns
    assert low <= coverage <= high
