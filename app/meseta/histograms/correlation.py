"""The 2D correlation histogram."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import numpy.typing as npt

from meseta.histograms import correlation_kernels, counting_kernels
from meseta.histograms.grids import histogram_grid
from meseta.histograms.memory import without_line
from meseta.histograms.results import CorrelationHistogram, CountMatrix, Grid
from meseta.recipe.histogram import CorrelationSettings
from meseta.segmentation.results import NoiseModel
from meseta.work import Work

__all__ = [
    "WEAK_TRACES",
    "block_traces",
    "correlation_band",
    "correlation_counts",
    "correlation_histogram",
    "correlation_notes",
    "correlation_of",
    "largest_by_chance",
    "products",
]

Floats = npt.NDArray[np.float64]
_CHUNK = 4096
_EXACT_FLOAT32 = 1 << 24
_FEW_LOUD = 0.25
WEAK_TRACES = 20
"""Bins that fewer traces reach take no part in the significance."""
_BLOCK_TRACES = 100
_FIXED_SHARE = 0.2
_DRIFT_SHARE = 0.02
_ABOVE_FLOOR_SIGMA = 6.0
_PARTS = 20
_FEWEST_A_PART = 10
_STUDENT = 2.0930240544
"""97.5 % quantile of Student's t with 19 degrees of freedom."""


def correlation_of(counts: npt.NDArray[np.number]) -> Floats:
    """Return Pearson's correlation over traces between the counts of every two bins.

    Parameters
    ----------
    counts : (traces, bins) array
        Integers; sums of products are exact below 2**53.

    Returns
    -------
    (bins, bins) float64
        Symmetric, 1 on the diagonal, in [-1, 1]; NaN where a bin does not vary.

    Notes
    -----
    C_ij = <dN_i dN_j> / sqrt(<dN_i^2><dN_j^2>), Makk et al., ACS Nano 6, 3411 (2012).
    """
    values = np.ascontiguousarray(counts)
    total = np.zeros(values.shape[1])
    result = np.empty((values.shape[1], values.shape[1]))
    correlation_kernels.correlate_products(products(values, total), total, len(values), result)
    return result


def products(values: npt.NDArray[np.number], total: Floats | None = None) -> Floats:
    """Return the sums over traces of the products of every two columns, exact for integers.

    Columns whose sum of squares over a chunk of traces stays below 2**24 are multiplied in float32, where all partial
    sums are exact (by Cauchy and Schwarz no product's sum is larger); the others in float64.  ``total`` gets the
    columns' sums.
    """
    bins = values.shape[1]
    result = np.zeros((bins, bins))
    total = np.zeros(bins) if total is None else total
    narrow = np.empty((min(_CHUNK, len(values)), bins), np.float32)
    for first in range(0, len(values), _CHUNK):
        chunk = np.ascontiguousarray(values[first : first + _CHUNK])
        part, squares = narrow[: len(chunk)], np.zeros(bins)
        correlation_kernels.narrow_rows(chunk, part, total, squares)
        loud = squares >= _EXACT_FLOAT32
        if not loud.any():
            result += part.T @ part
            continue
        exact = chunk.astype(np.float64, copy=False)
        if loud.sum() > _FEW_LOUD * bins:
            result += exact.T @ exact
            continue
        part[:, loud] = 0.0
        result += part.T @ part
        beside = np.ascontiguousarray(exact[:, loud].T) @ exact
        result[loud] += beside
        result[np.ix_(~loud, loud)] += beside[:, ~loud].T
    return result


def correlation_band(values: npt.NDArray[np.number], correlation: Floats, work: Work) -> tuple[Floats, Floats]:
    """Return the pointwise 95 % band of a correlation histogram.

    Parameters
    ----------
    values : (traces, bins) array
        Counts, whole numbers, in the order of the record.
    correlation : (bins, bins) float64
        Of these counts.
    work : Work
        Cancel.

    Returns
    -------
    low, high : (bins, bins) float64
        NaN where the correlation is, where a bin varies within one part of the record only, and everywhere with fewer
        than 200 traces.

    Notes
    -----
    Delete-a-group jackknife over 20 consecutive parts of the record (Kuensch, Annals of Statistics 17, 1217 (1989)
    for the jackknife of dependent data), on Fisher's z = atanh(C) (Metron 1, 3 (1921)).  Memory along the record
    that is short against a twentieth of it is in the band.
    """
    if len(values) < _PARTS * _FEWEST_A_PART:
        return np.full_like(correlation, np.nan), np.full_like(correlation, np.nan)
    total = np.zeros(len(correlation))
    everything = products(values, total)
    deviation, squares = np.zeros_like(correlation), np.zeros_like(correlation)
    without = np.empty_like(correlation)
    cuts = np.linspace(0, len(values), _PARTS + 1).astype(np.int64).tolist()
    for first, last in pairwise(cuts):
        work.check()
        part = np.zeros_like(total)
        rest = everything - products(values[first:last], part)
        correlation_kernels.correlate_products(rest, total - part, len(values) - (last - first), without)
        correlation_kernels.add_deviations(without, correlation, deviation, squares)
    low, high = np.empty_like(correlation), np.empty_like(correlation)
    correlation_kernels.band_about(correlation, deviation, squares, _PARTS, _STUDENT, low, high)
    return low, high


def block_traces(traces: int) -> int:
    """Return within how many consecutive traces counts are permuted."""
    return max(2, min(_BLOCK_TRACES, traces))


def correlation_counts(
    counts: CountMatrix, rows: npt.NDArray[np.int64], settings: CorrelationSettings, noise: NoiseModel
) -> tuple[Grid, Floats]:
    """Return the coarser bins of the correlation histogram, and the counts of the chosen rows in them.

    Returns
    -------
    grid : Grid
    values : (rows, bins) float64
    """
    low = settings.low_g0
    if low is None:
        low = max(noise.floor_g0 + _ABOVE_FLOOR_SIGMA * noise.floor_sigma_g0, counts.shown.edges_g0[0])
    high = min(settings.high_g0, counts.shown.edges_g0[-1])
    first, last, merge = histogram_grid(counts.grid, low, high, settings.bins_per_decade, settings.bin_width_g0)
    grid = counts.grid.part(first, last, merge)
    values = np.empty((len(rows), grid.bins))
    counting_kernels.merge_rows(counts.counts[:, first:last], rows, merge, values)
    return grid, values


def correlation_histogram(
    counts: CountMatrix,
    kept: npt.NDArray[np.bool_],
    settings: CorrelationSettings,
    noise: NoiseModel,
    seed: int,
    work: Work,
) -> CorrelationHistogram:
    """Build the 2D correlation histogram of the kept traces.

    Returns
    -------
    CorrelationHistogram

    Notes
    -----
    Makk et al., ACS Nano 6, 3411 (2012).  Significance: every bin's counts are permuted over the traces, each bin on
    its own, within blocks of the record, and the largest absolute correlation of any two bins is kept; the threshold
    is its 95 % quantile (maximum statistic: Westfall and Young, Resampling-Based Multiple Testing (1993)).

    Permuting within blocks keeps what drift does to all bins at once, so drift alone is not significant.  A record of
    fixed length makes negative correlations of its own: a longer plateau leaves fewer samples for the rest.
    """
    grid, values = correlation_counts(counts, np.flatnonzero(kept & counts.used), settings, noise)
    traces = len(values)
    weak = (values > 0).sum(0) < WEAK_TRACES
    block = block_traces(traces)
    largest = largest_by_chance(values[:, ~weak], block, settings.permutations, seed, work)
    correlation = correlation_of(values)
    low, high = correlation_band(values, correlation, work)
    return CorrelationHistogram(
        grid=grid,
        correlation=correlation,
        correlation_low=low,
        correlation_high=high,
        traces=traces,
        threshold=float(np.quantile(largest, 0.95)) if len(largest) else np.nan,
        weak=weak,
        permutations=len(largest),
        block_traces=block,
        note=correlation_notes(values) if traces >= 3 else "too few traces are kept to correlate",
    )


def correlation_notes(values: Floats) -> str:
    """Return what makes correlations of its own in counts (traces, bins), in words; empty where nothing does.

    Notes
    -----
    Fixed record length: where every trace has about as many samples in these bins, who stays longer in one bin has
    fewer left for the others.  Seen from the variance of a trace's sum over the sum of the bins' variances: 1 for
    independent bins, 0 for a fixed sum.  Drift: seen from the share of the bins' variance that a straight line along
    the record explains.
    """
    spread = values.var(0)
    if len(values) < WEAK_TRACES or not spread.sum() > 0:
        return ""
    notes = []
    if values.sum(1).var() < _FIXED_SHARE * spread.sum():
        notes.append(
            "nearly all traces have the same number of samples in these bins: longer in one bin is shorter in the "
            "others, which makes negative correlations by itself"
        )
    rest = without_line(values).var(0).sum()
    explained = 1 - rest / spread.sum()
    if explained > max(_DRIFT_SHARE, 10 / len(values)):
        notes.append(
            f"counts drift along the record ({100 * explained:.2g} % of their variance): bins that grow and fade "
            "together correlate by that alone"
        )
    return "; ".join(notes)


def largest_by_chance(values: Floats, block: int, permutations: int, seed: int, work: Work) -> Floats:
    """Return the largest absolute correlation between two bins in each of many permutations of the traces.

    Parameters
    ----------
    values : (traces, bins) float64
    block : int
        Traces within which the counts of a bin are permuted.
    permutations : int
    seed : int
    work : Work
    """
    if permutations == 0 or len(values) < 3:
        return np.zeros(0)
    varies = values.max(0) > values.min(0)
    varying = values[:, varies] - values[:, varies].mean(0)
    if varying.shape[1] < 2:
        return np.zeros(0)
    scaled = np.ascontiguousarray(varying / np.sqrt((varying**2).sum(0)), np.float32)
    random = np.random.default_rng(seed)
    seeds = random.integers(0, 1 << 63, (permutations, scaled.shape[1]), dtype=np.uint64)

    def one(columns: npt.NDArray[np.uint64]) -> float:
        # a product of our own: threads of a matrix library inside threads of ours wait for each other
        permuted = np.empty_like(scaled)
        correlation_kernels.permute_within(scaled, block, columns, permuted)
        return correlation_kernels.largest_product(permuted)

    return np.array(list(work.each(one, list(seeds), "permuting", unit="permutations")))
