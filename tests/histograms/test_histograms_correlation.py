"""The 2D correlation histogram: Pearson's numbers, known patterns, and a significance that keeps its level."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from small_recordings import counted, log_uniform, matrix_of, noise_model, recording

from meseta.histograms import Grid, correlation_histogram, correlation_kernels, shifted_correlation
from meseta.histograms.correlation import (
    correlation_band,
    correlation_notes,
    correlation_of,
    largest_by_chance,
    products,
)
from meseta.histograms.grids import logarithmic_edges
from meseta.recipe import Recipe
from meseta.work import Work

EXAMPLE = np.array([[2, 1, 0], [1, 2, 1], [0, 2, 3], [3, 1, 1], [1, 0, 2]])
"""Reference values 6.4 and 6.5: five traces, three bins."""


def test_worked_example_of_the_correlation_histogram() -> None:
    found = correlation_of(EXAMPLE)
    assert found[0, 1] == pytest.approx(-0.3668996929, abs=5e-11)
    assert found[0, 2] == pytest.approx(-0.7307692308, abs=5e-11)
    assert found[1, 2] == pytest.approx(0.1572427255, abs=5e-11)


def test_worked_example_of_the_shifted_correlation() -> None:
    found = shifted_correlation(EXAMPLE, EXAMPLE, 1)
    assert found[0, 0] == pytest.approx(-0.5129891760, abs=5e-11)
    assert found[0, 1] == pytest.approx(-0.4045199175, abs=5e-11)
    assert found[2, 0] == pytest.approx(0.7894736842, abs=5e-11)
    assert np.allclose(shifted_correlation(EXAMPLE, EXAMPLE, 0), correlation_of(EXAMPLE), atol=1e-15)


@given(hnp.arrays(np.int64, st.tuples(st.integers(3, 40), st.integers(2, 8)), elements=st.integers(0, 60_000)))
def test_equal_to_numpy_corrcoef(counts: np.ndarray) -> None:
    found = correlation_of(counts)
    with np.errstate(invalid="ignore", divide="ignore"):
        expected = np.corrcoef(counts.astype(float), rowvar=False)
    varies = counts.std(0) > 0
    pair = np.ix_(varies, varies)
    assert np.allclose(found[pair], expected[pair], atol=1e-9)
    assert np.array_equal(np.isnan(found), ~(varies & varies[:, None]))
    assert np.array_equal(found[pair], found[pair].T)
    assert np.array_equal(np.diag(found)[varies], np.ones(varies.sum()))


def test_products_are_exact_small_and_large() -> None:
    random = np.random.default_rng(1)
    for most in (3, 300, 60_000):
        counts = random.integers(0, most, (5000, 12))
        assert np.array_equal(products(counts), (counts.T @ counts).astype(np.float64))


@pytest.mark.parametrize("kind", [np.uint16, np.uint32, np.int64, np.float64])
def test_products_are_exact_where_some_columns_are_large(kind: type) -> None:
    random = np.random.default_rng(1)
    counts = random.integers(0, 20, (5000, 12))
    counts[:, [3, 8]] *= 1000
    total = np.zeros(12)
    assert np.array_equal(products(counts.astype(kind), total), (counts.T @ counts).astype(np.float64))
    assert np.array_equal(total, counts.sum(0))


def test_a_bin_rescaled_changes_nothing() -> None:
    counts = np.random.default_rng(2).poisson(4, (200, 6))
    assert np.allclose(correlation_of(counts), correlation_of(counts * [1, 2, 3, 4, 5, 6]), atol=1e-12)


def test_two_alternating_kinds_give_the_known_pattern() -> None:
    """Even traces fill bin 0 and 1, odd ones bin 2: +1 within a kind, -1 between; shifted by one trace, the reverse."""
    counts = np.zeros((100, 3), int)
    counts[::2, :2], counts[1::2, 2] = [4, 2], 3
    assert correlation_of(counts) == pytest.approx(np.array([[1, 1, -1], [1, 1, -1], [-1, -1, 1]]), abs=1e-12)
    assert shifted_correlation(counts, counts, 1) == pytest.approx(
        np.array([[-1, -1, 1], [-1, -1, 1], [1, 1, -1]]), abs=1e-12
    )


def test_opening_and_following_closing_that_share_a_cause() -> None:
    random = np.random.default_rng(5)
    cause = random.poisson(5, 3000)
    opening = np.stack([cause + random.poisson(5, 3000), random.poisson(5, 3000)], 1)
    closing = np.stack([random.poisson(5, 3000), cause + random.poisson(5, 3000)], 1)
    found = shifted_correlation(opening, closing, 0)
    # var 10 each, covariance 5
    assert found[0, 1] == pytest.approx(0.5, abs=4 / np.sqrt(3000))
    assert np.abs([found[0, 0], found[1, 0], found[1, 1]]).max() < 4 / np.sqrt(3000)


def test_independent_bins_scatter_by_one_over_root_traces() -> None:
    counts = np.random.default_rng(7).poisson(3, (1000, 60))
    beside = correlation_of(counts)[np.triu_indices(60, 1)]
    assert beside.std() == pytest.approx(1 / np.sqrt(1000), rel=0.05)


def test_permutation_keeps_each_block_of_each_column() -> None:
    values = np.random.default_rng(3).random((95, 4)).astype(np.float32)
    permuted = np.empty_like(values)
    correlation_kernels.permute_within(values, 20, np.arange(4).astype(np.uint64), permuted)
    for first in range(0, 95, 20):
        assert np.array_equal(np.sort(permuted[first : first + 20], 0), np.sort(values[first : first + 20], 0))
    assert not np.array_equal(permuted, values)
    place = np.zeros((20, 20))
    ramp = np.tile(np.arange(20, dtype=np.float32)[:, None], (1, 2000))
    shuffled = np.empty_like(ramp)
    correlation_kernels.permute_within(
        ramp, 20, np.random.default_rng(1).integers(0, 1 << 62, 2000).astype(np.uint64), shuffled
    )
    np.add.at(place, (np.repeat(np.arange(20), 2000), shuffled.astype(int).ravel()), 1)
    # every value is as likely at every place: chi-square of 400 cells with 361 degrees of freedom
    assert ((place - 100) ** 2 / 100).sum() < 361 + 4 * np.sqrt(2 * 361)


def test_significance_rejects_at_its_level() -> None:
    """On independent bins the largest correlation exceeds the threshold in 5 % of records (60 records: 0 to 8)."""
    rejected, work = 0, Work(threads=1)
    for seed in range(60):
        counts = np.random.default_rng(seed).poisson(2, (150, 8)).astype(float)
        threshold = np.quantile(largest_by_chance(counts, 50, 99, seed, work), 0.95)
        largest = np.abs(correlation_of(counts) - np.eye(8)).max()
        rejected += largest > threshold
    assert rejected <= 8


def test_drift_alone_is_not_significant_when_permuted_within_time() -> None:
    """Two bins that only drift together: significant against the whole record, not within blocks of it."""
    random, work = np.random.default_rng(11), Work(threads=1)
    level = np.linspace(2, 8, 600)[:, None]
    counts = random.poisson(level, (600, 6)).astype(float)
    largest = np.abs(correlation_of(counts) - np.eye(6)).max()
    assert largest > np.quantile(largest_by_chance(counts, 600, 99, 1, work), 0.95)
    assert largest < np.quantile(largest_by_chance(counts, 50, 99, 1, work), 0.95) * 1.1


def test_a_fixed_record_length_makes_negative_correlations_of_its_own() -> None:
    counts = np.random.default_rng(13).multinomial(50, np.full(5, 0.2), size=4000)
    beside = correlation_of(counts)[np.triu_indices(5, 1)]
    # multinomial: -p/(1 - p) for equal shares p = 1/5
    assert beside == pytest.approx(np.full(10, -0.25), abs=4 / np.sqrt(4000))


def test_what_makes_correlations_of_its_own_is_said() -> None:
    random = np.random.default_rng(14)
    independent = random.poisson(20, (600, 12)).astype(float)
    assert correlation_notes(independent) == ""
    fixed = random.multinomial(240, np.full(12, 1 / 12), size=600).astype(float)
    assert "same number of samples" in correlation_notes(fixed)
    drifting = random.poisson(20 * np.linspace(0.7, 1.3, 600)[:, None] * np.ones(12)).astype(float)
    assert "drift along the record" in correlation_notes(drifting)
    # and it is said where the map is looked at
    matrix = matrix_of(fixed, Grid(logarithmic_edges(-8, 4, 4), "logarithmic"))
    recipe = Recipe().with_values("correlation", bins_per_decade=4, low_g0=0.01, permutations=0)
    found = correlation_histogram(matrix, matrix.used, recipe.correlation, noise_model(), 1, Work(threads=1))
    assert "same number of samples" in found.note


def test_planted_correlation_is_found_and_reported_on_coarse_bins() -> None:
    random = np.random.default_rng(17)
    grid = Grid(logarithmic_edges(-800, 200, 200), "logarithmic")
    counts = random.poisson(0.3, (400, 1000))
    together = random.poisson(6, 400)
    counts[:, 400] += together
    counts[:, 700] += together
    matrix = matrix_of(counts, grid)
    recipe = Recipe().with_values("correlation", permutations=60, low_g0=1e-4)
    kept = np.ones(400, bool)
    found = correlation_histogram(matrix, kept, recipe.correlation, noise_model(), 3, Work(threads=2))
    merged = counts.reshape(400, 125, 8).sum(-1)
    assert np.allclose(found.correlation, np.corrcoef(merged, rowvar=False), atol=1e-12)
    assert found.significant[50, 87]
    assert found.significant[87, 50]
    assert found.significant.sum() <= 6
    assert not np.diag(found.significant).any()
    again = correlation_histogram(matrix, kept, recipe.correlation, noise_model(), 3, Work(threads=1))
    assert found.threshold == again.threshold


def test_bins_start_six_sigma_above_the_floor() -> None:
    matrix = counted(recording(log_uniform(30, 200, 1)), Recipe())
    recipe = Recipe().with_values("correlation", permutations=0)
    found = correlation_histogram(matrix, np.ones(30, bool), recipe.correlation, noise_model(1e-5), 1, Work(threads=1))
    assert found.grid.edges_g0[0] <= 6e-5 < found.grid.edges_g0[1]
    assert np.isnan(found.threshold)
    assert len(found.weak) == found.grid.bins


@pytest.mark.parametrize("rows", [3, 4, 10, 101])
def test_largest_product_equals_the_plain_one(rows: int) -> None:
    values = np.random.default_rng(rows).normal(size=(rows, 7)).astype(np.float32)
    plain = np.abs(values.T @ values)
    np.fill_diagonal(plain, 0)
    assert correlation_kernels.largest_product(values) == pytest.approx(plain.max(), rel=1e-5)


def test_band_of_independent_traces_is_that_of_fisher() -> None:
    """1.96 / sqrt(n - 3) in z = atanh(C): R. A. Fisher, Metron 1, 3 (1921), for normal values."""
    random = np.random.default_rng(5)
    shared = random.normal(size=(3000, 1))
    counts = np.rint(1000 * (random.normal(size=(3000, 30)) + shared)).astype(np.int64)
    found = correlation_of(counts)
    low, high = correlation_band(counts, found, Work())
    pairs = np.triu_indices(30, 1)
    half = (np.arctanh(high[pairs]) - np.arctanh(low[pairs])) / 2
    assert np.median(half) == pytest.approx(1.96 / np.sqrt(2997), rel=0.15)
    assert 0.92 < ((low < 0.5) & (high > 0.5))[pairs].mean() <= 1.0  # half of the variance is shared
    assert (low[pairs] < found[pairs]).all() and (high[pairs] > found[pairs]).all()
    assert np.array_equal(np.diag(low), np.ones(30)) and np.array_equal(np.diag(high), np.ones(30))


def test_band_covers_where_traces_remember_those_before() -> None:
    """Independent columns with memory over ten traces: Fisher's interval is half as wide as it should be."""
    random = np.random.default_rng(6)
    steps, state = random.normal(size=(4000, 40)), np.zeros(40)
    values = np.empty((4000, 40))
    for row, step in enumerate(steps):
        state = 0.8 * state + step
        values[row] = state
    counts = np.rint(1000 * values).astype(np.int64)
    found = correlation_of(counts)
    low, high = correlation_band(counts, found, Work())
    pairs = np.triu_indices(40, 1)
    covered = ((low <= 0) & (high >= 0))[pairs].mean()
    naive = (np.abs(np.arctanh(found[pairs])) <= 1.96 / np.sqrt(3997)).mean()
    assert 0.91 < covered < 0.985
    assert naive < 0.8


def test_band_is_told_only_where_there_is_one() -> None:
    counts = np.random.default_rng(7).integers(0, 50, (400, 4))
    counts[:, 2] = 7
    counts[:, 3] = 0
    counts[5, 3] = 9
    low, high = correlation_band(counts, correlation_of(counts), Work())
    assert np.isfinite(low[:2, :2]).all() and np.isfinite(high[:2, :2]).all()
    for edge in (low, high):
        assert np.isnan(edge[2]).all() and np.isnan(edge[:3, 3]).all()
    few = counts[:150]
    assert np.isnan(correlation_band(few, correlation_of(few), Work())[0]).all()
