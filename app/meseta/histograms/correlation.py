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
_ABOVE_FLOOR_SIGMA = 6.0


def correlation_of(counts: npt.NDArray[np.number]) -> Floats:
    """Return Pearson's correlation over traces between the counts of every two bins.

    Parameters
    ----------
    counts : (traces, bins) array
        Integers below 2**26, so that the sums of products are exact in float64.

    Returns
    -------
    (bins, bins) float64
        Symmetric, 1 on the diagonal, in [-1, 1]; NaN where a bin does not vary.

    Notes
    -----
    C_ij = <dN_i dN_j> / sqrt(<dN_i^2><dN_j^2>), Makk et al., ACS Nano 6, 3411 (2012).
    """
    values = np.asarray(counts, np.float64)
    traces = len(values)
    total = values.sum(0)
    covariance = traces * (values.T @ values) - np.outer(total, total)
    scale = np.sqrt(np.diag(covariance))
    with np.errstate(invalid="ignore", divide="ignore"):
        result: Floats = covariance / scale / scale[:, None]
    varies = scale > 0
    result[~varies] = np.nan
    result[:, ~varies] = np.nan
    result[varies, varies] = 1.0
    return np.clip(result, -1.0, 1.0, out=result)


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
