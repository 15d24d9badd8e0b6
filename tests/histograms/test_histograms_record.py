"""Time order, lengths, plateau histogram, comparisons and yields, against known answers and reference libraries."""

from __future__ import annotations

import warnings
from dataclasses import replace

import numpy as np
import pytest
from coverage_experiments import SCENARIOS, Scenario, experiment
from scipy import stats
from small_recordings import counted, log_uniform, matrix_of, recording

from meseta.errors import CallError
from meseta.histograms import (
    Grid,
    conductance_histogram,
    difference,
    drift_of,
    hits_in_window,
    molecular_yield,
    plateau_histogram,
    plateau_lengths,
    record_memory,
    resample,
    slope_histogram,
    spacing_of,
    temporal_histogram,
)
from meseta.histograms.grids import logarithmic_edges
from meseta.histograms.lengths import kaplan_meier, length_histogram
from meseta.histograms.yields import share_interval
from meseta.recipe import Recipe
from meseta.segmentation.results import PlateauTable, TraceMeasures
from meseta.traces import trace_table
from meseta.work import Work

WORK = Work(threads=1)


# -- time order ------------------------------------------------------------------------------------------------------


def test_temporal_histogram_sums_consecutive_kept_traces() -> None:
    recipe = Recipe().with_values("temporal", traces_a_column=7)
    matrix = counted(recording(log_uniform(30, 200, 3)), recipe)
    kept = np.arange(30) % 4 > 0
    found = temporal_histogram(matrix, kept, recipe.temporal)
    assert found.first_trace.tolist() == [0, 7, 14, 21, 28]
    assert found.traces.tolist() == [kept[k : k + 7].sum() for k in range(0, 30, 7)]
    whole = conductance_histogram(matrix, kept, recipe.histogram, None)
    assert np.array_equal(found.counts.sum(0), whole.counts)
    assert np.array_equal(found.counts[1], matrix.shown_counts(matrix.counts[7:14][kept[7:14]].astype(np.int64)).sum(0))


def test_drift_statement_measures_a_known_drift() -> None:
    """0.3 decade from end to end: the means of first and last third are 0.2 decade apart."""
    matrix, _ = experiment(Scenario(traces=1500, drift_decades=0.3), 3)
    found = drift_of(matrix, np.ones(1500, bool))
    assert found.moved_low < 0.2 < found.moved_high
    assert found.p_peak < 1e-3
    assert "differ" in found.text
    assert "decades" in found.text


def test_drift_is_claimed_at_its_level_on_steady_records() -> None:
    claims = []
    for seed in range(60):
        matrix, _ = experiment(Scenario(traces=300), seed)
        found = drift_of(matrix, np.ones(300, bool))
        claims.append((found.p_peak < 0.05, found.p_shape < 0.05))
    # 60 records at 5 %: 0 to 8 (3 sigma)
    assert np.sum(claims, axis=0).max() <= 8


def test_memory_along_the_record_is_found_with_its_length() -> None:
    scenario = replace(SCENARIOS["memory of 20 traces"], traces=4000, memory_share=1.0)
    matrix, _ = experiment(scenario, 1)
    found = record_memory(matrix, np.ones(4000, bool))
    assert found.inflation > 4
    assert 2 < found.decay_traces < 20
    assert found.correlation[0] > 5 * found.chance
    steady, _ = experiment(replace(scenario, memory_traces=0.0), 1)
    none = record_memory(steady, np.ones(4000, bool))
    assert none.inflation == 1.0
    assert "not more alike" in none.text


def test_too_few_traces_are_said_to_be_too_few() -> None:
    matrix, _ = experiment(Scenario(traces=10), 1)
    assert "too few" in drift_of(matrix, np.ones(10, bool)).text
    assert "too few" in record_memory(matrix, np.ones(10, bool)).text


# -- lengths ---------------------------------------------------------------------------------------------------------


def test_kaplan_meier_equals_scipy() -> None:
    random = np.random.default_rng(2)
    true, cut = random.exponential(1.0, 300).round(1), random.exponential(1.5, 300).round(1)
    length, censored = np.minimum(true, cut), cut < true
    found = kaplan_meier(length, censored)
    reference = stats.ecdf(stats.CensoredData.right_censored(length, censored)).sf
    ends = np.isin(reference.quantiles, found.length)
    assert np.allclose(found.survival, reference.probabilities[ends], rtol=1e-12)
    with warnings.catch_warnings():
        # of the last length, where the estimate is 0
        warnings.filterwarnings("ignore", "The confidence interval is undefined", RuntimeWarning)
        band = reference.confidence_interval(method="log-log")
    inner = found.survival > 0
    assert np.allclose(found.low[inner], band.low.probabilities[ends][inner], rtol=1e-9)
    assert np.allclose(found.high[inner], band.high.probabilities[ends][inner], rtol=1e-9)
    assert found.median == found.length[np.flatnonzero(found.survival <= 0.5)[0]]


def test_kaplan_meier_of_a_published_example() -> None:
    """Remission times of 21 patients, Freireich et al., Blood 21, 699 (1963), as in Kaplan-Meier teaching texts.

    Data and values from memory; the test above compares with a library.
    """
    length = [6, 6, 6, 6, 7, 9, 10, 10, 11, 13, 16, 17, 19, 20, 22, 23, 25, 32, 32, 34, 35]
    cut = [3, 5, 7, 8, 11, 12, 13, 16, 17, 18, 19, 20]
    censored = np.isin(np.arange(21), cut)
    found = kaplan_meier(np.array(length, float), censored)
    assert found.length.tolist() == [6, 7, 10, 13, 16, 22, 23]
    assert found.survival == pytest.approx([0.857, 0.807, 0.753, 0.690, 0.627, 0.538, 0.448], abs=5e-4)
    assert found.median == 23


def test_censored_lengths_do_not_pull_the_curve_down() -> None:
    """Lengths cut at random: the median of complete ones is short, the Kaplan-Meier median is right (ln 2)."""
    random = np.random.default_rng(8)
    true, cut = random.exponential(1.0, 20_000), random.exponential(0.7, 20_000)
    length, censored = np.minimum(true, cut), cut < true
    assert np.median(length[~censored]) < 0.4
    assert kaplan_meier(length, censored).median == pytest.approx(np.log(2), abs=0.03)


def test_length_histogram_counts_everything_once() -> None:
    settings = Recipe().lengths
    length = np.array([0.0, 0.01, 0.02, 0.31, 1.999, 2.0, 5.0, np.nan])
    censored = np.array([False, False, True, False, False, False, True, False])
    found = length_histogram("x", length, censored, 10, 3, "nm", settings)
    assert found.counts.sum() + found.censored_counts.sum() + found.over == 7
    assert found.counts[0] == 2  # half-open: 0.02 belongs to the second bin
    assert found.censored_counts[1] == 1
    assert found.over == 2
    assert (found.density * np.diff(found.edges)).sum() == pytest.approx(found.counts.sum() / 10)


def test_length_of_150_samples_at_20_nm_per_second() -> None:
    """Reference values 6.7: 150 samples at 20 nm/s and 10 kHz are 0.3 nm."""
    table = plateaus_at([1.0], [0], length=[150 * 20 / 1e4])
    segments, _, _ = plateau_lengths(table, measures(1), np.ones(1, bool), "nm", Recipe().lengths)
    place = int(np.flatnonzero(segments.counts)[0])
    assert segments.edges[place] <= 0.3 * (1 + 1e-12)
    assert segments.edges[place + 1] >= 0.3


def test_chain_lengths_are_spaced_as_planted() -> None:
    random = np.random.default_rng(4)
    length = 0.25 * random.choice([1, 2, 3], 6000, p=[0.5, 0.3, 0.2]) + random.normal(0, 0.03, 6000)
    found = spacing_of(length_histogram("chains", length, np.zeros(6000, bool), 6000, 0, "nm", Recipe().lengths))
    assert len(found.peaks) == 3
    assert found.spacing == pytest.approx(0.25, abs=0.01)


def chains(seed: int, share: tuple[float, ...], traces: int = 3000) -> np.ndarray:
    random = np.random.default_rng(seed)
    number = random.choice(np.arange(1, len(share) + 1), traces, p=share)
    return 0.25 * number + random.normal(0, 0.03, traces)


def test_interval_of_the_chain_spacing_holds_it() -> None:
    """Untiedt et al.: gold chains break 0.25 nm longer each time; 40 records, 95 % intervals (33 hold, p = 0.99)."""
    held, widths = 0, []
    for seed in range(40):
        length = chains(seed, (0.45, 0.3, 0.25))
        found = spacing_of(length_histogram("chains", length, np.zeros(3000, bool), 3000, 0, "nm", Recipe().lengths))
        held += found.low <= 0.25 <= found.high
        widths.append(found.high - found.low)
    assert held >= 33
    assert max(widths) < 0.02
    assert "apart" in found.text


def test_a_missing_peak_does_not_double_the_spacing() -> None:
    length = chains(3, (0.3, 0.3, 0.0, 0.4))
    found = spacing_of(length_histogram("chains", length, np.zeros(3000, bool), 3000, 0, "nm", Recipe().lengths))
    assert len(found.peaks) == 3
    assert found.spacing == pytest.approx(0.25, abs=0.01)


def test_slopes_are_counted_as_steepness() -> None:
    slopes = np.array([-10.0, -9.9, -11.0, np.nan, 0.5, -12.0])
    kept = np.array([True, True, True, True, True, False])
    found = slope_histogram(slopes, kept, "nm")
    assert (found.counts.sum(), found.none, found.traces) == (3, 2, 5)
    assert found.unit == "decades / nm"
    # 10 decades/nm is the median: the 30 bins below it end there
    assert found.edges[30] == pytest.approx(10.0)
    assert found.survival.median == 10.0
    assert slope_histogram(np.full(4, np.nan), np.ones(4, bool), "V").counts.sum() == 0


def test_one_broad_maximum_is_no_series_of_peaks() -> None:
    length = np.random.default_rng(4).gamma(4, 0.1, 3000)
    found = spacing_of(length_histogram("one", length, np.zeros(3000, bool), 3000, 0, "nm", Recipe().lengths))
    assert len(found.peaks) == 1
    assert np.isnan(found.spacing)


# -- plateaus --------------------------------------------------------------------------------------------------------


def plateaus_at(level: list[float], trace: list[int], length: list[float] | None = None) -> PlateauTable:
    number = len(level)
    columns = {
        name: np.zeros(number, kind.dtype) if kind.dtype.kind != "U" else np.full(number, "", "U12")
        for name, kind in PlateauTable.empty().columns().items()
    }
    columns["level_g0"] = np.array(level, float)
    columns["trace"] = np.array(trace, np.int64)
    columns["length_drive"] = np.array(length if length is not None else np.ones(number), float)
    columns["drive_unit"] = np.full(number, "nm")
    return PlateauTable(**columns)


def measures(traces: int) -> TraceMeasures:
    truth, number = np.zeros(traces, bool), np.zeros(traces, np.int64)
    nothing = np.full(traces, np.nan)
    return TraceMeasures(
        drive_span=np.ones(traces),
        rupture_drive=nothing,
        rupture_found=truth,
        reaches_floor=truth,
        reforms=truth,
        highest_g0=nothing,
        lowest_g0=nothing,
        crossing_length=nothing,
        tunnelling_slope=nothing,
        apparent_barrier_ev=nothing,
        barrier_refused=np.full(traces, "no tunnelling slope was seen"),
        floor_noise_g0=nothing,
        saturated_samples=number,
        missing_samples=number,
    )


def test_plateau_histogram_votes_and_weighs() -> None:
    grid = Grid(logarithmic_edges(-20, 5, 5), "logarithmic")
    table = plateaus_at([1.0, 1.0, 1e-2, 1e-9, 1e3, 0.5], [0, 1, 1, 2, 2, 3], [0.1, 0.3, 0.5, 1, 1, 1])
    matrix = matrix_of(np.ones((40, grid.bins)), grid)
    kept = np.arange(40) != 3
    recipe = Recipe().with_values("resampling", replicates=100, scheme="traces")
    drawn = resample(matrix, kept, trace_table(40), recipe.histogram, recipe.resampling, WORK)
    votes = plateau_histogram(table, grid, drawn, by_length=False)
    one, hundredth = np.searchsorted(grid.edges_g0, [1.0, 1e-2], side="right") - 1
    assert (votes.counts[one], votes.counts[hundredth], votes.counts.sum()) == (2, 1, 3)
    assert (votes.excluded["under"], votes.excluded["over"]) == (1, 1)
    assert votes.density[one] == pytest.approx(2 / 39 / 0.2)
    weighed = plateau_histogram(table, grid, drawn, by_length=True)
    assert weighed.density[one] == pytest.approx(0.4 / 39 / 0.2)
    assert weighed.density_unit == "nm / trace / decade"
    # replicates are sums over the drawn traces
    again = drawn.weights[:, np.flatnonzero(np.isin(drawn.rows, [0, 1]))].sum(1) / (39 * 0.2)
    low, high = drawn.interval(votes.density[one], again)
    assert votes.density_high[one] == pytest.approx(float(high))
    assert votes.density_low[one] == pytest.approx(max(float(low), 0.0))


# -- comparisons -----------------------------------------------------------------------------------------------------


def test_wilson_interval_equals_scipy() -> None:
    for hits, traces in ((0, 10), (3, 200), (57, 80), (12, 12)):
        reference = stats.binomtest(hits, traces).proportion_ci(0.95, "wilson")
        assert share_interval(hits, traces) == pytest.approx((reference.low, reference.high), abs=1e-12)


@pytest.mark.parametrize("share", [0.5, 0.2, 0.05, 0.0])
def test_planted_yields_are_returned_within_their_intervals(share: float) -> None:
    """300 experiments a yield, 3 % of blank traces with a false plateau: 95 % within 3 binomial sigma or above."""
    random, holds, limits = np.random.default_rng(int(1000 * share)), [], []
    for _ in range(300):
        blank = random.random(500) < 0.03
        hit = (random.random(1000) < share) | (random.random(1000) < 0.03)
        found = molecular_yield(hit, blank)
        holds.append(found.share_low <= share <= found.share_high)
        limits.append(share <= found.upper_limit)
    assert 0.912 <= np.mean(holds) <= 0.995
    assert np.mean(limits) >= 0.912


def test_nothing_found_gives_an_upper_limit_in_words() -> None:
    hit = np.zeros(1000, bool)
    hit[::40] = True
    found = molecular_yield(hit, hit.copy())
    assert not found.found
    assert found.share == 0.0
    assert 0 < found.upper_limit < 0.03
    assert "at most" in found.text
    assert molecular_yield(np.zeros(300, bool), np.zeros(300, bool)).upper_limit < 0.02


def test_false_discoveries_come_from_the_blank() -> None:
    hit, blank = np.arange(1000) % 5 == 0, np.arange(1000) % 20 == 0
    found = molecular_yield(hit, blank)
    # p = 0.2, q = 0.05: y = 0.15/0.95, false = q (1 - y)/p
    assert found.share == pytest.approx(0.15 / 0.95)
    assert found.false_discovery == pytest.approx(0.05 * (1 - 0.15 / 0.95) / 0.2)
    assert found.false_discovery < found.false_discovery_high < 0.5
    assert "no blank" in molecular_yield(hit).text


def test_yield_of_a_record_with_memory_has_a_wider_interval() -> None:
    random = np.random.default_rng(3)
    state = np.repeat(random.random(100) < 0.3, 20)
    shuffled = random.permutation(state)
    sticky, free = molecular_yield(state), molecular_yield(shuffled)
    assert free.effective_traces == 2000
    assert sticky.effective_traces < 400
    assert sticky.share_high - sticky.share_low > 2 * (free.share_high - free.share_low)


def test_hits_are_traces_with_a_plateau_in_the_window() -> None:
    table = plateaus_at([1e-3, 0.9, 2e-3, 5e-5], [0, 0, 2, 3])
    assert hits_in_window(table, 5, (1e-4, 1e-2)).tolist() == [True, False, True, False, False]


def two_recordings(share: float, seed: int = 1) -> tuple:
    random, recipe = np.random.default_rng(seed), Recipe().with_values("resampling", replicates=300)
    grid = Grid(logarithmic_edges(-100, 0, 20), "logarithmic")
    parts = []
    for signal, traces in ((share, 800), (0.0, 600)):
        counts = random.poisson(2.0, (traces, 100)) * (random.random((traces, 1)) < 0.8)
        counts[:, 40:44] += random.poisson(20, (traces, 4)) * (random.random((traces, 1)) < signal)
        matrix, kept = matrix_of(counts, grid), np.ones(traces, bool)
        drawn = resample(matrix, kept, trace_table(traces), recipe.histogram, recipe.resampling, WORK)
        parts.append((conductance_histogram(matrix, kept, recipe.histogram, drawn), drawn))
    return tuple(parts)


def test_molecule_minus_blank_leaves_the_molecule() -> None:
    molecule, blank = two_recordings(0.25)
    found = difference(molecule, blank)
    signal = 0.25 * 20 * 0.001 * 20  # share x counts x nm a sample x bins a decade
    assert (found.density_low[40:44] <= signal).all()
    assert (signal <= found.density_high[40:44]).all()
    rest = np.r_[0:40, 44:100]
    assert ((found.density_low <= 0) & (found.density_high >= 0))[rest].mean() > 0.85
    assert (found.scale_low, found.scale, found.scale_high) == (1, 1, 1)


def test_scale_of_the_blank_is_fitted_where_asked() -> None:
    """Both backgrounds are alike: the interval of the scale holds 1 in 95 % of 20 pairs (16 with probability 0.997)."""
    held, low, high = 0, 10**-2.79, 1.0  # above the molecule
    for seed in range(20):
        found = difference(*two_recordings(0.25, seed), None, (low, high))
        assert found.scale_is_fitted
        assert found.scale_high - found.scale_low < 0.2
        held += found.scale_low <= 1.0 <= found.scale_high
    assert held >= 16


def test_histograms_on_other_bins_are_not_subtracted() -> None:
    molecule, blank = two_recordings(0.1)
    other = replace(blank[0], grid=Grid(blank[0].grid.edges_g0 * 2, "logarithmic"))
    with pytest.raises(CallError, match="differ in bins or unit"):
        difference(molecule, (other, blank[1]))
    with pytest.raises(CallError, match="range"):
        difference(molecule, blank, None)
