"""The 1D conductance histogram, normalised, with its pointwise band."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.histograms import counting_kernels
from meseta.histograms.results import EXCLUDED, ConductanceHistogram, CountMatrix, Resampling
from meseta.recipe.histogram import HistogramSettings

__all__ = ["conductance_histogram", "summed"]

Floats = npt.NDArray[np.float64]
_EQUAL_STEPS = 1e-6
_ROWS_A_BLOCK = 2048


def conductance_histogram(
    counts: CountMatrix,
    kept: npt.NDArray[np.bool_],
    settings: HistogramSettings,
    resampling: Resampling | None,
) -> ConductanceHistogram:
    """Build the 1D histogram of the kept traces.

    Parameters
    ----------
    counts : CountMatrix
    kept : (traces,) bool
    settings : HistogramSettings
        Normalisation of ``[histogram]``.
    resampling : Resampling, optional
        Of the same kept traces; without it the band is NaN.

    Returns
    -------
    ConductanceHistogram

    Notes
    -----
    H_k = n_k / (R w_k) with R the traces that take part and w_k the bin's width in decades or G0; weighted by length
    every sample counts its displacement, so that neither sampling rate nor speed enters.  Where all traces are to weigh
    alike, a sample counts its share of the trace's samples on the axis: a long trace says no more than a short one.
    """
    rows = np.flatnonzero(kept & counts.used)
    fine, reached = summed(counts, rows)
    total = counts.shown_counts(fine)
    excluded = dict(zip(EXCLUDED, (int(n) for n in counts.excluded[rows].sum(0)), strict=True))
    grid, traces = counts.shown, len(rows)
    weight = _weight(counts, rows, settings.normalisation)
    weighted = _weighted(counts, rows, weight, total)
    norm, unit = _norm(settings.normalisation, weight, traces, weighted.sum(), grid.axis)
    density = weighted * norm / grid.widths
    low, high = _band(counts, rows, weight, resampling, density, norm, settings.normalisation)
    with np.errstate(invalid="ignore", divide="ignore"):
        scale = np.where(total > 0, density / total, _flat_scale(weight) * norm / grid.widths)
    return ConductanceHistogram(
        grid=grid,
        counts=total,
        traces=traces,
        traces_in_bin=reached,
        density=density,
        density_low=low,
        density_high=high,
        density_unit=unit,
        excluded=excluded,
        scheme=resampling.scheme if resampling is not None else "",
        scale=scale,
        weak_traces=settings.weak_traces,
    )


def summed(counts: CountMatrix, rows: npt.NDArray[np.int64]) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
    """Return the sums of the chosen rows in fine bins, and how many of them reach each bin of the histogram."""
    fine = np.zeros(counts.grid.bins, np.int64)
    reached = np.zeros(counts.shown.bins, np.int64)
    counting_kernels.sum_rows(counts.counts, rows, counts.merge, fine, reached)
    return fine, reached


def _weight(counts: CountMatrix, rows: npt.NDArray[np.int64], normalisation: str) -> Floats | None:
    """Return what a sample of each row counts: its length in nm, or its share of the row's samples on the axis.

    None where samples are counted.
    """
    if len(rows) == 0:
        return None
    if normalisation == "traces_alike":
        samples = np.concatenate([part.sum(1) for part in _merged(counts, rows)])
        return np.divide(1.0, samples, out=np.zeros(len(rows)), where=samples > 0)
    if normalisation != "nm_per_trace":
        return None
    length = counts.nm_a_sample[rows]
    return length if np.isfinite(length).all() else None


def _merged(counts: CountMatrix, rows: npt.NDArray[np.int64]) -> Iterator[Floats]:
    """Yield the counts of the chosen rows in the bins of the histogram, block by block; blocks share their memory."""
    part = np.empty((min(_ROWS_A_BLOCK, len(rows)), counts.shown.bins))
    for first in range(0, len(rows), _ROWS_A_BLOCK):
        chosen = rows[first : first + _ROWS_A_BLOCK]
        counting_kernels.merge_rows(counts.counts, chosen, counts.merge, part[: len(chosen)])
        yield part[: len(chosen)]


def _flat_scale(weight: Floats | None) -> float:
    return 1.0 if weight is None else float(weight.mean())


def _is_flat(weight: Floats | None) -> bool:
    return weight is None or float(np.ptp(weight)) <= _EQUAL_STEPS * float(weight.mean())


def _weighted(
    counts: CountMatrix, rows: npt.NDArray[np.int64], weight: Floats | None, total: npt.NDArray[np.int64]
) -> Floats:
    """Return the counts of each bin, each sample with its weight."""
    if weight is None or _is_flat(weight):
        flat: Floats = total.astype(np.float64) * _flat_scale(weight)
        return flat
    one = weight[None, :]
    return weighted_counts(counts, rows, one)[0]


def weighted_counts(
    counts: CountMatrix, rows: npt.NDArray[np.int64], draws: npt.NDArray[Any], length: Floats | None = None
) -> Floats:
    """Return the weighted sums (replicates, bins) of the chosen rows, block by block.

    Parameters
    ----------
    counts : CountMatrix
    rows : (traces,) int64
    draws : (replicates, traces) array
        Weight of every row in every replicate.
    length : (traces,) float64, optional
        Further weight of every row, the same in all replicates.
    """
    total, first = np.zeros((len(draws), counts.shown.bins)), 0
    for part in _merged(counts, rows):
        drawn = draws[:, first : first + len(part)].astype(np.float64)
        if length is not None:
            drawn *= length[first : first + len(part)]
        total += drawn @ part
        first += len(part)
    return total


def _norm(normalisation: str, weight: Floats | None, traces: int, total: float, axis: str) -> tuple[float, str]:
    per = "decade" if axis == "logarithmic" else "G0"
    if normalisation == "counts":
        return 1.0, f"counts / {per}"
    if normalisation == "probability":
        return (1 / total if total > 0 else np.nan), f"1 / {per}"
    if normalisation == "traces_alike":
        return 1 / max(traces, 1), f"1 / trace / {per}"
    return 1 / max(traces, 1), f"{'counts' if weight is None else 'nm'} / trace / {per}"


def _band(
    counts: CountMatrix,
    rows: npt.NDArray[np.int64],
    weight: Floats | None,
    resampling: Resampling | None,
    density: Floats,
    norm: float,
    normalisation: str,
) -> tuple[Floats, Floats]:
    """Return the pointwise band of the density."""
    if resampling is None or len(rows) == 0:
        return np.full_like(density, np.nan), np.full_like(density, np.nan)
    widths = counts.shown.widths
    if weight is None or _is_flat(weight):
        replicate = resampling.counts * _flat_scale(weight)
    else:
        replicate = weighted_counts(counts, rows, resampling.weights, weight)
    if normalisation == "probability":
        replicate = replicate / np.maximum(replicate.sum(1, keepdims=True), np.finfo(float).tiny)
        norm = 1.0
    elif normalisation != "counts":
        drawn = resampling.weights.sum(1, dtype=np.int64)[:, None]
        replicate = replicate * (len(rows) / np.maximum(drawn, 1))
    low, high = resampling.interval(density, replicate * norm / widths)
    return np.maximum(low, 0.0), high
