"""The 2D correlation histogram."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.histograms import kernels
from meseta.histograms.grids import histogram_grid
from meseta.histograms.results import CorrelationHistogram, CountMatrix
from meseta.recipe.histogram import CorrelationSettings
from meseta.segmentation.results import NoiseModel
from meseta.work import Work

__all__ = ["correlation_counts", "correlation_histogram", "correlation_of"]

Floats = npt.NDArray[np.float64]
_CHUNK = 2048
_EXACT_FLOAT32 = 1 << 23
"""Half of where float32 stops to be exact, because the test itself is rounded."""
_ABOVE_FLOOR_SIGMA = 6.0


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
    values = np.asarray(counts)
    traces = len(values)
    total = values.sum(0, dtype=np.float64)
    covariance = traces * products(values)
    covariance -= np.outer(total, total)
    scale = np.sqrt(np.diag(covariance))
    with np.errstate(invalid="ignore", divide="ignore"):
        result: Floats = covariance / np.outer(scale, scale)
    varies = scale > 0
    np.fill_diagonal(result, np.where(varies, 1.0, np.nan))
    return np.clip(result, -1.0, 1.0, out=result)


def products(values: npt.NDArray[np.number]) -> Floats:
    """Return the sums over traces of the products of every two columns, exact for integers.

    A chunk of traces whose sums of squares stay below 2**24 is multiplied in float32, where all its partial sums are
    exact (by Cauchy and Schwarz no product's sum is larger); any other in float64.
    """
    bins = values.shape[1]
    total = np.zeros((bins, bins))
    for first in range(0, len(values), _CHUNK):
        chunk = values[first : first + _CHUNK]
        part = np.asarray(chunk, np.float32)
        if np.einsum("ij,ij->j", part, part).max(initial=0.0) < _EXACT_FLOAT32:
            total += part.T @ part
        else:
            exact = chunk.astype(np.float64)
            total += exact.T @ exact
    return total


def correlation_counts(
    counts: CountMatrix, kept: npt.NDArray[np.bool_], settings: CorrelationSettings, noise: NoiseModel
) -> CountMatrix:
    """Return the kept rows of the count matrix with the coarser bins of the correlation histogram chosen."""
    low = settings.low_g0
    if low is None:
        low = max(noise.floor_g0 + _ABOVE_FLOOR_SIGMA * noise.floor_sigma_g0, counts.shown.edges_g0[0])
    high = min(settings.high_g0, counts.shown.edges_g0[-1])
    first, last, merge = histogram_grid(counts.grid, low, high, settings.bins_per_decade, settings.bin_width_g0)
    rows = np.flatnonzero(kept & counts.used)
    return counts.take(rows).trimmed(first, last, merge)


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
    Makk et al., ACS Nano 6, 3411 (2012).
    """
    chosen = correlation_counts(counts, kept, settings, noise)
    values = np.empty((len(chosen.counts), chosen.shown.bins))
    kernels.merge_rows(chosen.counts, np.arange(len(chosen.counts)), chosen.merge, values)
    return CorrelationHistogram(chosen.shown, correlation_of(values), len(values), np.nan)
