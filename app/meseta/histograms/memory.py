"""How much of the record is new in every trace: autocorrelation along the record, and what follows from it.

What is looked at are the leading principal components of the traces' own histograms (square roots of counts, which
have even variance), with a straight line along the record taken off: drift is no memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms import counting_kernels
from meseta.histograms.results import CountMatrix

__all__ = ["Memory", "autocovariance", "block_length", "long_run", "memory_of", "record_features"]

Floats = npt.NDArray[np.float64]

_COMPONENTS = 6
_GROUPS = 60


@dataclass(frozen=True)
class Memory:
    """Memory along the record.

    Attributes
    ----------
    block_traces : float
        Block length that the automatic rule asks for (the largest over the components).
    lag_traces : float
        Mean lag of the correlation, sum of k R(k) over the sum of R(k), both over all lags of both signs: a block of b
        traces misses about ``lag_traces / b`` of the long-run variance.
    inflation : float
        Variance of a mean along this record over that of independent traces, as an average over the components,
        weighted by their variance; at least 1.
    found : bool
        Whether any correlation stood out of chance.
    """

    block_traces: float
    lag_traces: float
    inflation: float
    found: bool

    @property
    def length_traces(self) -> float:
        """Correlation length along the record in traces, from the inflation: (inflation - 1) / 2."""
        return (self.inflation - 1) / 2


def record_features(counts: CountMatrix, rows: npt.NDArray[np.int64]) -> Floats:
    """Return the leading principal components of the chosen traces' histograms, sorted by variance.

    Returns
    -------
    (traces, components) float64
        Centred; at most 6 components, those without variance left out.
    """
    width = max(1, -(-counts.grid.bins // _GROUPS))
    values = np.empty((len(rows), -(-counts.grid.bins // width)))
    if len(rows) == 0:
        return np.empty((0, 0))
    counting_kernels.merge_rows(counts.counts, rows, width, values)
    np.sqrt(values, out=values)
    values -= values.mean(0)
    spread, axes = np.linalg.eigh(values.T @ values)
    largest = spread[-1] if len(spread) else 0.0
    chosen = np.flatnonzero(spread > 1e-9 * largest)[::-1][:_COMPONENTS]
    result: Floats = values @ axes[:, chosen]
    return result


def without_line(series: Floats) -> Floats:
    """Return series (traces, ...) minus their least-squares line along the record."""
    at = np.arange(len(series)) - (len(series) - 1) / 2
    norm = float(at @ at)
    slope = (at @ series) / norm if norm > 0 else np.zeros(series.shape[1:])
    result: Floats = series - series.mean(0) - at[:, None] * slope
    return result


def autocovariance(series: Floats) -> Floats:
    """Return the autocovariance (lags, ...) of centred series (traces, ...), divided by the number of traces."""
    traces = len(series)
    size = 1 << int(np.ceil(np.log2(max(2 * traces, 2))))
    power = np.abs(np.fft.rfft(series, size, axis=0)) ** 2
    result: Floats = np.fft.irfft(power, axis=0)[:traces] / traces
    return result


def long_run(covariance: Floats, traces: int) -> tuple[float, float, bool]:
    """Return long-run variance, sum of lags times covariance, and whether correlation stands out of chance.

    The lag window is flat at 1 up to half its width and falls to 0; the width is twice the smallest lag after which
    K autocorrelations in a row lie within 2 sqrt(log10(n)/n).

    Notes
    -----
    Politis and White, Econometric Reviews 23, 53 (2004), doi 10.1081/ETC-120028836, with the correction of Patton,
    Politis and White, Econometric Reviews 28, 372 (2009).
    """
    variance = float(covariance[0])
    run = max(5, int(np.ceil(np.sqrt(np.log10(traces)))))
    most = min(int(np.ceil(np.sqrt(traces))) + run, traces - 1)
    limit = 2 * np.sqrt(np.log10(traces) / traces) * variance
    small = np.abs(covariance[1 : most + 1]) < limit
    in_a_row = np.convolve(small, np.ones(run, int), "valid") == run if len(small) >= run else np.zeros(0, bool)
    quiet = int(np.argmax(in_a_row)) if in_a_row.any() else most
    width = min(2 * max(quiet, 1), most)
    lags = np.arange(1, width + 1)
    window = np.minimum(1.0, 2 * (1 - lags / width))
    weighted = window * covariance[1 : width + 1]
    return variance + 2 * float(weighted.sum()), 2 * float((lags * weighted).sum()), quiet > 0


def block_length(total: float, lagged: float, traces: int) -> float:
    """Return the block length that minimises the error of the variance of a mean, for circular blocks.

    Notes
    -----
    b = (2 G^2 / D)^(1/3) n^(1/3), D = 4/3 g(0)^2, G = sum of |k| R(k), g(0) = sum of R(k): Politis and White (2004) and
    the correction of 2009, see :func:`long_run`.  Bounded by min(3 sqrt(n), n/3).
    """
    if not total > 0:
        return 1.0
    length = (1.5 * (lagged / total) ** 2 * traces) ** (1 / 3)
    return float(min(max(length, 1.0), np.ceil(min(3 * np.sqrt(traces), traces / 3))))


def memory_of(features: Floats) -> Memory:
    """Return the memory along the record of the traces' leading components (traces, components)."""
    traces = len(features)
    if traces < 20 or features.shape[1] == 0:
        return Memory(1.0, 0.0, 1.0, False)
    covariance = autocovariance(without_line(features))
    blocks, lags, inflations, weights, found = [1.0], [0.0], [], [], False
    for column in covariance.T:
        total, lagged, stands_out = long_run(column, traces)
        variance = float(column[0])
        floor = 0.3 * variance  # a sum of few noisy terms may come out near zero
        weights.append(variance)
        inflations.append(max(total / variance, 1.0) if stands_out and variance > 0 else 1.0)
        if stands_out:
            found = True
            blocks.append(block_length(max(total, floor), lagged, traces))
            lags.append(max(0.0, lagged) / max(total, floor))
    return Memory(max(blocks), max(lags), float(np.average(inflations, weights=weights)), found)
