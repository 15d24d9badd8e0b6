"""Resampling: exact draws, memory of known processes, and intervals that cover as often as they say."""

from __future__ import annotations

import numpy as np
import pytest
from coverage_experiments import SCENARIOS, experiment, measure
from scipy import stats
from small_recordings import matrix_of

from meseta.histograms import Grid, Resampling, resample, resampling
from meseta.histograms.grids import logarithmic_edges
from meseta.histograms.memory import block_length, memory_of
from meseta.histograms.resampling import block_traces_for, replicate_counts, t_factor
from meseta.recipe import Recipe
from meseta.traces import trace_table
from meseta.work import Work

WORK = Work(threads=1)


def drawn(counts: np.ndarray, scheme: str = "auto", replicates: int = 300, **columns) -> Resampling:
    recipe = Recipe().with_values(
        "resampling", scheme=scheme, replicates=replicates, block_traces=columns.pop("block_traces", None)
    )
    matrix = matrix_of(counts, Grid(logarithmic_edges(-40, -40 + counts.shape[1], 10), "logarithmic"))
    kept = np.ones(len(counts), bool)
    return resample(matrix, kept, trace_table(len(counts), **columns), recipe.histogram, recipe.resampling, WORK)


def poisson(traces: int, seed: int = 1, mean: float = 3.0) -> np.ndarray:
    return np.random.default_rng(seed).poisson(mean, (traces, 12))


def autoregressive(traces: int, keep: float, columns: int, seed: int) -> np.ndarray:
    random = np.random.default_rng(seed)
    values = np.empty((traces, columns))
    values[0] = random.standard_normal(columns)
    for row in range(1, traces):
        values[row] = keep * values[row - 1] + np.sqrt(1 - keep**2) * random.standard_normal(columns)
    return values


@pytest.mark.parametrize("scheme", ["traces", "blocks", "specimens", "auto"])
def test_replicates_are_exact_sums_of_the_drawn_traces(scheme: str) -> None:
    counts = poisson(600)
    found = drawn(counts, scheme, specimen=np.arange(600) // 100)
    assert np.array_equal(found.counts, found.weights.astype(np.int64) @ counts)
    assert np.array_equal(found.weights.sum(1), np.full(300, 600))
    again = drawn(counts, scheme, specimen=np.arange(600) // 100)
    assert np.array_equal(found.weights, again.weights)


def test_large_counts_stay_exact() -> None:
    counts = np.random.default_rng(3).integers(0, 60_000, (500, 5)).astype(np.uint16)
    matrix = matrix_of(counts, Grid(logarithmic_edges(0, 5, 10), "logarithmic"))
    weights = np.random.default_rng(4).integers(0, 4, (30, 500)).astype(np.uint16)
    assert np.array_equal(
        replicate_counts(matrix, np.arange(500), weights, WORK), weights.astype(np.int64) @ counts.astype(np.int64)
    )


@pytest.mark.parametrize("block", [1, 40], ids=["trace by trace", "blocks"])
@pytest.mark.parametrize("bins", [60, 3])
def test_replicate_counts_are_the_matrix_product_whatever_was_drawn(block, bins, monkeypatch):
    """Weights that seldom change along the traces take another way, bins in parts; numpy's product of integers judges.

    The chosen rows are out of order, and the weights lie in memory as a choice of columns leaves them.
    """
    monkeypatch.setattr(resampling, "_RUNNING_CELLS", 700 * bins // 3 + 1)
    random = np.random.default_rng(6)
    counts = random.integers(0, 60_000, (900, bins))
    matrix = matrix_of(counts, Grid(logarithmic_edges(-bins, 0, 10), "logarithmic"))
    rows = np.concatenate([np.arange(300, 700), np.arange(300)])
    weights = np.repeat(random.integers(0, 9, (50, 900 // block + 1)), block, axis=1)[:, :900].astype(np.uint16)
    chosen = weights[:, np.arange(900) < 700]
    expected = chosen.astype(np.int64) @ counts[rows]
    assert np.array_equal(replicate_counts(matrix, rows, chosen, WORK), expected)
    assert np.array_equal(replicate_counts(matrix, rows[:0], chosen[:, :0], WORK), np.zeros((50, bins)))


def test_blocks_are_balanced_in_time_and_hit_every_trace_alike() -> None:
    found = drawn(poisson(1000), "blocks", 2000)
    at = np.arange(1000)
    means = found.weights @ at / 1000
    # unbalanced draws of 8 blocks scatter by about 1000/sqrt(12)/sqrt(8) = 102 traces
    assert np.abs(means - 499.5).max() < 15
    assert found.weights.mean(0) == pytest.approx(np.ones(1000), abs=5 * np.sqrt(8 / 2000))
    assert "balanced in time" in found.scheme


def test_specimens_are_drawn_as_wholes() -> None:
    specimen = np.repeat(["a", "b", "c", "d", "e", "f"], [50, 20, 30, 60, 10, 30])
    found = drawn(poisson(200), "auto", specimen=specimen)
    for name in "abcdef":
        assert (np.ptp(found.weights[:, specimen == name], axis=1) == 0).all()
    assert found.specimens == 6
    assert found.degrees == 5
    assert "6 specimens" in found.scheme or "(6)" in found.scheme
    assert "more specimens" in found.to_halve_error()


def test_blocks_do_not_cross_few_specimens_and_say_what_is_not_in_the_interval() -> None:
    found = drawn(poisson(400), "auto", specimen=np.repeat(["a", "b"], 200))
    assert np.array_equal(found.weights[:, :200].sum(1), np.full(300, 200))
    assert found.specimens == 0
    assert "differences between specimens (only 2)" in found.held_fixed


def test_independent_traces_are_worth_themselves() -> None:
    found = drawn(poisson(2000))
    assert found.effective_traces == 2000
    assert found.to_halve_error() == "6\u202f000 more traces like these"


@pytest.mark.parametrize("keep", [0.5, 0.8, 0.9])
def test_memory_of_a_known_process(keep: float) -> None:
    """First-order autoregression: long-run variance over variance (1 + a)/(1 - a); sum |k|R / sum R = 2a/(1 - a^2)."""
    memory = memory_of(autoregressive(30_000, keep, 6, 1))
    assert memory.found
    assert memory.inflation == pytest.approx((1 + keep) / (1 - keep), rel=0.12)
    lag = 2 * keep / (1 - keep**2)
    # both are the largest of six estimates
    assert 0.9 * lag < memory.lag_traces < 1.8 * lag
    ideal = (1.5 * lag**2 * 30_000) ** (1 / 3)
    assert 0.9 * ideal < memory.block_traces < 1.5 * ideal


def test_drift_is_not_taken_for_memory() -> None:
    values = np.random.default_rng(5).standard_normal((2000, 4)) + np.linspace(-2, 2, 2000)[:, None]
    assert memory_of(values).inflation < 1.2


def test_white_noise_has_no_memory() -> None:
    found = [memory_of(np.random.default_rng(seed).standard_normal((1000, 6))).found for seed in range(100)]
    assert np.mean(found) < 0.1


def test_automatic_block_length_in_bounds() -> None:
    assert block_length(1.0, 0.0, 1000) == 1.0
    assert block_length(1.0, 1e9, 1000) == np.ceil(3 * np.sqrt(1000))
    none = memory_of(np.random.default_rng(1).standard_normal((1000, 3)))
    assert block_traces_for(none, 400) == 50
    assert block_traces_for(none, 100_000) == 160


def test_t_factor_is_students() -> None:
    """Published table of Student's t: 2.776 at 4 and 2.262 at 9 degrees of freedom, two-sided 95 %."""
    assert t_factor(4) * 1.959964 == pytest.approx(2.776, abs=5e-4)
    assert t_factor(9) * 1.959964 == pytest.approx(2.262, abs=5e-4)


def test_spread_of_block_replicates_after_widening_is_that_of_the_mean() -> None:
    """Variance of a mean of independent Poisson counts: the widened normal-equivalent spread, averaged, matches it."""
    ratios = []
    for seed in range(30):
        found = drawn(poisson(800, seed), "blocks", 300)
        share = found.widen / t_factor(found.degrees)
        ratios.append((found.counts.std(0) * share) ** 2 / (800 * 3.0))
    assert np.mean(ratios) == pytest.approx(1.0, abs=0.08)


def test_interval_of_results_that_failed_in_some_replicates() -> None:
    found = drawn(poisson(100), "traces", 200)
    values = np.random.default_rng(1).normal(5, 1, (200, 2))
    values[:50, 0] = np.nan
    values[:190, 1] = np.nan
    low, high = found.interval(np.array([5.0, 5.0]), values)
    assert low[0] < 5 < high[0]
    assert np.isnan([low[1], high[1]]).all()


@pytest.mark.parametrize("name", list(SCENARIOS))
def test_intervals_cover_as_they_say(name: str) -> None:
    """Reduced form of ``tests/campaigns/coverage_histogram.py`` (2,000 experiments, 93.5 to 96.5 %)."""
    found = measure(SCENARIOS[name], experiments=100, replicates=200, seed=500)
    assert 0.90 <= found.band <= 0.99
    assert 0.88 <= found.position <= 0.995


def test_poisson_bars_would_fail_where_traces_contribute_plateaus() -> None:
    """Square-root-of-n bars of a bin cover far less than 95 %: samples of one trace come together."""
    scenario, inside = SCENARIOS["independent"], []
    from coverage_experiments import expected_counts

    truth = expected_counts(scenario) * scenario.traces
    for seed in range(40):
        counts = experiment(scenario, seed)[0].counts.sum(0)
        reach = stats.norm.ppf(0.975) * np.sqrt(counts)
        strong = truth > 2000
        inside.append((np.abs(counts - truth) <= reach)[strong].mean())
    assert np.mean(inside) < 0.6
