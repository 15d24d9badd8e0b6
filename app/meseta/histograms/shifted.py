"""Correlation between a trace and later ones: bin with bin against the shift, and the length over which it decays.

After Magyarkuti et al., arXiv 1612.01439: the correlation of bin i of trace r with bin j of trace r + s.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms.correlation import WEAK_TRACES, correlation_counts
from meseta.histograms.memory import autocovariance, memory_of, record_features, without_line
from meseta.histograms.results import CorrelationHistogram, CountMatrix, Grid
from meseta.histograms.temporal import shifted_correlation
from meseta.recipe.histogram import CorrelationSettings
from meseta.segmentation.results import NoiseModel

__all__ = ["Decay", "ShiftedCorrelation", "decay_of", "shifted_correlations", "shifted_map"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]

_FEWEST_TRACES = 60
_GROUPS = 10
_MOST_SHIFT = 400
_COLUMNS = 16
_STANDS_OUT = 2.262
"""97.5 % quantile of Student's t with 9 degrees of freedom (10 groups)."""


@dataclass(frozen=True)
class Decay:
    """An exponential ``amplitude * exp(-shift / length_traces)`` through a correlation against the shift.

    Attributes
    ----------
    amplitude, length_traces : float
        Least squares; NaN where nothing stands out.
    length_low, length_high : float
        95 % interval of the length, from leaving out a tenth of the record in turn (jackknife of log length).
    found : bool
        Whether the amplitude exceeds 0 by more than its jackknife error allows (two-sided 5 %).
    """

    amplitude: float
    length_traces: float
    length_low: float
    length_high: float
    found: bool


@dataclass(frozen=True)
class ShiftedCorrelation:
    """How alike traces are, bin by bin, against the shift between them.

    Attributes
    ----------
    grid : Grid
    shift : (k,) int64
        From 1 trace on.
    same_bin : (k, bins) float64
        Pearson's correlation of bin i of trace r with bin i of trace r + shift; NaN where a bin does not vary.
    weak : (bins,) bool
        Bins that fewer than 20 traces reach.
    mean : (k,) float64
        The same over the traces' histograms as a whole (leading components, weighted by variance), drift taken off.
    chance : float
        95 % of the values of one bin of independent traces lie within this of 0.
    decay : Decay
        Of ``mean``.
    traces : int
    text : str
        One sentence.
    """

    grid: Grid
    shift: Integers
    same_bin: Floats
    weak: Truths
    mean: Floats
    chance: float
    decay: Decay
    traces: int
    text: str


def shifted_correlations(
    counts: CountMatrix, kept: Truths, settings: CorrelationSettings, noise: NoiseModel
) -> ShiftedCorrelation:
    """Return the correlation of every bin with itself some traces later, and its decay length.

    Parameters
    ----------
    counts : CountMatrix
    kept : (traces,) bool
        Shifts count kept traces only.
    settings : CorrelationSettings
        Bins of ``[correlation]``.
    noise : NoiseModel

    Notes
    -----
    Formula as in :func:`shifted_correlation`, for i = j.  Shifts run to a tenth of the record, at most 400 traces.
    """
    grid, values = correlation_counts(counts, np.flatnonzero(kept & counts.used), settings, noise)
    traces, weak = len(values), (values > 0).sum(0) < WEAK_TRACES
    most = min(_MOST_SHIFT, traces // _GROUPS)
    shift = np.arange(1, most + 1, dtype=np.int64) if traces >= _FEWEST_TRACES else np.zeros(0, np.int64)
    same = np.empty((len(shift), values.shape[1]))
    for first in range(0, values.shape[1] if len(shift) else 0, _COLUMNS):
        same[:, first : first + _COLUMNS] = _same_bin(values[:, first : first + _COLUMNS], shift)
    chance = 1.96 / np.sqrt(traces) if traces else np.nan
    unknown = Decay(np.nan, np.nan, np.nan, np.nan, False)
    if not len(shift):
        return ShiftedCorrelation(
            grid, shift, same, weak, np.zeros(0), chance, unknown, traces, "too few traces to compare shifts"
        )
    features = record_features(counts, np.flatnonzero(kept & counts.used))
    straight = without_line(features)
    covariance = autocovariance(straight).sum(1)
    mean = covariance[1 : most + 1] / covariance[0] if covariance[0] > 0 else np.zeros(most)
    decay = decay_of(straight, most) if memory_of(features).found else unknown
    return ShiftedCorrelation(grid, shift, same, weak, mean, chance, decay, traces, _sentence(decay))


def _same_bin(values: Floats, shift: Integers) -> Floats:
    """Return Pearson's correlation (shifts, bins) of every column with itself ``shift`` rows later, over the pairs."""
    rows = len(values)
    centred = values - values.mean(0)  # changes no correlation and keeps the sums small
    products = autocovariance(centred)[shift] * rows
    sums, squares = (
        np.concatenate([np.zeros((1, values.shape[1])), np.cumsum(one, 0)]) for one in (centred, centred**2)
    )
    pairs = (rows - shift)[:, None]
    early, late = sums[rows - shift], sums[-1] - sums[shift]
    one = squares[rows - shift] - early**2 / pairs
    other = squares[-1] - squares[shift] - late**2 / pairs
    smallest = 1e-12 * np.maximum(squares[-1], np.finfo(float).tiny)
    varies = (one > smallest) & (other > smallest)
    with np.errstate(invalid="ignore", divide="ignore"):
        result: Floats = np.where(varies, (products - early * late / pairs) / np.sqrt(one * other), np.nan)
    return np.clip(result, -1.0, 1.0)


def decay_of(series: Floats, most: int) -> Decay:
    """Return the exponential decay of the autocorrelation of centred series (traces, components) along the record.

    Parameters
    ----------
    series : (traces, components) float64
        Weighted by their variance, as they are.
    most : int
        Longest shift that takes part.
    """
    parts = np.array_split(series, _GROUPS)
    most = max(2, min(most, min(len(part) for part in parts) // 2))
    sums, numbers = [], []
    for part in parts:
        sums.append((autocovariance(part)[: most + 1] * len(part)).sum(1))
        numbers.append(len(part) - np.arange(most + 1))
    total, number = np.stack(sums), np.stack(numbers)
    whole = _exponential(total.sum(0) / number.sum(0))
    left = np.array(
        [_exponential((total.sum(0) - total[at]) / (number.sum(0) - number[at])) for at in range(len(parts))]
    )
    groups = len(parts)
    spread = np.sqrt((groups - 1) / groups * ((left - left.mean(0)) ** 2).sum(0))
    amplitude, log_length = whole
    found = bool(amplitude > _STANDS_OUT * spread[0])
    reach = _STANDS_OUT * spread[1]
    if not found:
        return Decay(float(amplitude), np.nan, np.nan, np.nan, False)
    low, length, high = np.exp([log_length - reach, log_length, log_length + reach])
    return Decay(float(amplitude), float(length), float(low), float(high), True)


def _exponential(covariance: Floats) -> tuple[float, float]:
    """Return amplitude (over the variance) and log of the length of the best exponential through lags from 1 on."""
    correlation = covariance[1:] / covariance[0]
    shift = np.arange(1, len(covariance))
    lengths = np.geomspace(0.3, 2.0 * len(shift), 200)
    shape = np.exp(-shift / lengths[:, None])
    norm = (shape**2).sum(1)
    amplitude = (shape @ correlation) / norm
    best = int((amplitude * np.abs(amplitude) * norm).argmax())  # what a positive exponential takes off the squares
    return float(amplitude[best]), float(np.log(lengths[best]))


def _sentence(decay: Decay) -> str:
    if not decay.found:
        return "traces do not resemble those after them more than any others"
    following = decay.amplitude * np.exp(-1 / decay.length_traces)
    return (
        f"traces resemble those after them (correlation {following:.2f} with the next one), "
        f"and the likeness falls to 1/e over {decay.length_traces:.3g} traces "
        f"({decay.length_low:.2g} to {decay.length_high:.2g})"
    )


def shifted_map(
    counts: CountMatrix, kept: Truths, settings: CorrelationSettings, noise: NoiseModel, shift: int
) -> CorrelationHistogram:
    """Return the map of :func:`shifted_correlation`: bin i of every kept trace with bin j ``shift`` kept traces later.

    No significance is worked out (``threshold`` is NaN); single values scatter by 1 / sqrt(traces).
    """
    grid, values = correlation_counts(counts, np.flatnonzero(kept & counts.used), settings, noise)
    enough = len(values) - shift >= 3
    found = shifted_correlation(values, values, shift) if enough else np.full((values.shape[1],) * 2, np.nan)
    return CorrelationHistogram(
        grid=grid,
        correlation=found,
        traces=max(len(values) - shift, 0),
        threshold=np.nan,
        weak=(values > 0).sum(0) < WEAK_TRACES,
        first_axis="trace",
        second_axis=f"{shift} traces later" if shift != 1 else "next trace",
        note="" if enough else "too few traces for this shift",
    )
