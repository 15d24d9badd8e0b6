"""Time order: temporal histogram, correlation between successive traces, and whether the record drifted.

Temporal histogram and shifted correlation after Magyarkuti et al., arXiv 1612.01439, and Balogh et al., Nanoscale,
doi 10.1039/c4nr04645e.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms import counting_kernels
from meseta.histograms.memory import autocovariance, memory_of, record_features, without_line
from meseta.histograms.results import CountMatrix, Grid
from meseta.recipe.histogram import TemporalSettings

__all__ = [
    "Drift",
    "RecordMemory",
    "TemporalHistogram",
    "drift_of",
    "record_memory",
    "shifted_correlation",
    "temporal_histogram",
]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

_BLOCKS_A_THIRD = 6
_NEAR_DECADES = 0.25
_NEAR_G0 = 0.15
_ROUNDS = 60


@dataclass(frozen=True)
class TemporalHistogram:
    """Histograms of consecutive traces, side by side.

    Attributes
    ----------
    grid : Grid
    first_trace : (columns,) int64
        Row of the first trace that belongs to each column, all traces counted, kept or not.
    traces_a_column : int
    traces : (columns,) int64
        Kept traces in each column.
    counts : (columns, bins) int64
    counts_per_trace : (columns, bins) float64
        NaN where a column has no kept trace.
    """

    grid: Grid
    first_trace: Integers
    traces_a_column: int
    traces: Integers
    counts: Integers

    @property
    def counts_per_trace(self) -> Floats:
        """(columns, bins) samples a kept trace."""
        number = np.where(self.traces > 0, self.traces, np.nan)
        result: Floats = self.counts / number[:, None]
        return result


def temporal_histogram(
    counts: CountMatrix, kept: npt.NDArray[np.bool_], settings: TemporalSettings
) -> TemporalHistogram:
    """Sum the histograms of every ``traces_a_column`` consecutive traces; only kept ones count."""
    step, used = settings.traces_a_column, kept & counts.used
    first = np.arange(0, len(used), step, dtype=np.int64)
    total = np.zeros((len(first), counts.grid.bins), np.int64)
    reached = np.zeros(counts.shown.bins, np.int64)
    for column, start in enumerate(first):
        rows = start + np.flatnonzero(used[start : start + step])
        counting_kernels.sum_rows(counts.counts, rows, counts.merge, total[column], reached)
    traces = np.add.reduceat(used.astype(np.int64), first) if len(first) else np.zeros(0, np.int64)
    return TemporalHistogram(counts.shown, first, step, traces, counts.shown_counts(total))


def shifted_correlation(values: npt.NDArray[np.number], later: npt.NDArray[np.number], shift: int) -> Floats:
    """Return Pearson's correlation of bin i of trace r with bin j of trace r + shift, over all such pairs.

    Parameters
    ----------
    values, later : (traces, bins) array
        The same matrix twice for successive traces; opening and closing counts, row by row of the same cycle, for the
        correlation of opening with closing (Balogh et al.).
    shift : int
        0 or more.

    Returns
    -------
    (bins, bins) float64
        Not symmetric for ``shift`` > 0; NaN where a bin does not vary over the pairs.  Means are taken over each side
        of the pairs.
    """
    pairs = len(values) - shift
    left, right = np.asarray(values, np.float64)[:pairs], np.asarray(later, np.float64)[shift:]
    left, right = left - left.mean(0), right - right.mean(0)
    scale = np.outer(np.sqrt((left**2).sum(0)), np.sqrt((right**2).sum(0)))
    with np.errstate(invalid="ignore", divide="ignore"):
        result: Floats = np.where(scale > 0, (left.T @ right) / scale, np.nan)
    return np.clip(result, -1.0, 1.0)


@dataclass(frozen=True)
class RecordMemory:
    """How alike successive traces are, against the shift between them.

    Attributes
    ----------
    shift : (k,) int64
    correlation : (k,) float64
        Correlation of the traces' histograms (leading components, weighted by variance, drift taken off).
    chance : float
        Half width of the 95 % range of a correlation of independent traces, 1.96 / sqrt(traces).
    decay_traces : float
        Correlation length: half the sum of the correlation over all shifts of both signs; 0 where none stands out.
    inflation : float
        Variance of a mean over that of independent traces.
    text : str
        One sentence.
    """

    shift: Integers
    correlation: Floats
    chance: float
    decay_traces: float
    inflation: float
    text: str


def record_memory(counts: CountMatrix, kept: npt.NDArray[np.bool_]) -> RecordMemory:
    """Return the correlation between the kept traces' histograms against the shift between them."""
    rows = np.flatnonzero(kept & counts.used)
    features = record_features(counts, rows)
    if len(rows) < 20 or features.shape[1] == 0:
        none = np.zeros(0)
        return RecordMemory(none.astype(np.int64), none, np.nan, np.nan, 1.0, "too few traces to look for memory")
    memory = memory_of(features)
    covariance = autocovariance(without_line(features)).sum(1)
    most = min(len(rows) // 4, 400)
    chance = 1.96 / np.sqrt(len(rows))
    length = memory.length_traces if memory.found else 0.0
    text = (
        f"successive traces are alike over about {max(length, 1):.0f} traces"
        if memory.inflation > 1.2
        else "successive traces are not more alike than distant ones"
    )
    shift = np.arange(1, most + 1, dtype=np.int64)
    return RecordMemory(
        shift, covariance[1 : most + 1] / covariance[0], chance, length, memory.inflation, text
    )  # fmt: skip


@dataclass(frozen=True)
class Drift:
    """Whether the first and the last third of the record differ.

    Attributes
    ----------
    peak_g0 : float
        Highest peak of the whole histogram above its lower tenth; NaN where there is none.
    moved, moved_low, moved_high : float
        Centre of that peak, last third minus first, and its 95 % interval; decades, or G0 on a linear axis.
    p_peak : float
        Probability of a shift as large by chance.
    p_shape : float
        The same for any change of the histogram's shape (largest of the leading components, Bonferroni).
    unit : str
    text : str
        The statement.
    """

    peak_g0: float
    moved: float
    moved_low: float
    moved_high: float
    p_peak: float
    p_shape: float
    unit: str
    text: str


def drift_of(counts: CountMatrix, kept: npt.NDArray[np.bool_], above_g0: float = 0.0) -> Drift:
    """Compare the first and the last third of the kept traces.

    Parameters
    ----------
    counts : CountMatrix
    kept : (traces,) bool
    above_g0 : float
        The peak looked at lies above this (the floor).

    Notes
    -----
    Each third is cut into 6 blocks; a Welch t test of the block values has memory within blocks in its error.
    """
    rows = np.flatnonzero(kept & counts.used)
    logarithmic = counts.grid.axis == "logarithmic"
    unit = "decades" if logarithmic else "G0"
    if len(rows) < 6 * _BLOCKS_A_THIRD:
        unknown = np.nan
        return Drift(
            unknown, unknown, unknown, unknown, unknown, unknown, unit,
            "too few traces to compare the first and the last third",
        )  # fmt: skip
    third = len(rows) // 3
    early = np.array_split(rows[:third], _BLOCKS_A_THIRD)
    late = np.array_split(rows[-third:], _BLOCKS_A_THIRD)
    blocks = np.stack([_block_counts(counts, block) for block in (*early, *late)])
    place = _peak(blocks.sum(0), counts.shown, above_g0)
    centres = np.array([_followed(block, counts.shown, place) for block in blocks])
    moved, error, degrees, p_peak = _welch(centres[:_BLOCKS_A_THIRD], centres[_BLOCKS_A_THIRD:])
    reach = _t_quantile(degrees) * error
    p_shape = _shape_p(counts, early, late)
    text = _sentence(moved, reach, p_peak, p_shape, unit)
    return Drift(place, moved, moved - reach, moved + reach, p_peak, p_shape, unit, text)


def _block_counts(counts: CountMatrix, rows: Integers) -> Floats:
    total, reached = np.zeros(counts.grid.bins, np.int64), np.zeros(counts.shown.bins, np.int64)
    counting_kernels.sum_rows(counts.counts, rows, counts.merge, total, reached)
    result: Floats = counts.shown_counts(total).astype(np.float64)
    return result


def _peak(total: Floats, grid: Grid, above_g0: float) -> float:
    """Return the highest place of the smoothed density above ``above_g0``; NaN where nothing is there."""
    density = np.where(grid.edges_g0[:-1] >= above_g0, total / grid.widths, 0.0)
    if not density.any():
        return np.nan
    u = (grid.u_edges[1:] + grid.u_edges[:-1]) / 2
    smooth = np.exp(-0.5 * ((u[:, None] - u) / (_reach(grid) / 2)) ** 2) @ density
    return float(grid.centres_g0[int(smooth.argmax())])


def _reach(grid: Grid) -> float:
    return _NEAR_DECADES if grid.axis == "logarithmic" else _NEAR_G0


def _followed(counts: Floats, grid: Grid, start_g0: float) -> float:
    """Return the mode of a smoothed histogram nearest a start, on the axis as drawn, by mean shift.

    Notes
    -----
    Fukunaga and Hostetler, IEEE Trans. Inf. Theory 21, 32 (1975): it moves exactly as the histogram moves.
    """
    u = (grid.u_edges[1:] + grid.u_edges[:-1]) / 2
    place = np.log10(start_g0) if grid.axis == "logarithmic" else start_g0
    for _ in range(_ROUNDS):
        weight = counts / grid.widths * np.exp(-0.5 * ((u - place) / (_reach(grid) / 2)) ** 2)
        total = weight.sum()
        if not total > 0:
            return np.nan
        place = float(weight @ u / total)
    return place


def _welch(first: Floats, last: Floats) -> tuple[float, float, float, float]:
    """Return difference, its standard error, degrees of freedom and two-sided p of Welch's t test."""
    from scipy import special

    variances = np.array([first.var(ddof=1) / len(first), last.var(ddof=1) / len(last)])
    error, moved = float(np.sqrt(variances.sum())), float(last.mean() - first.mean())
    if not error > 0:
        return moved, error, np.nan, np.nan
    spread = (variances**2 / [len(first) - 1, len(last) - 1]).sum()
    degrees = float(variances.sum() ** 2 / spread)
    return moved, error, degrees, float(2 * special.stdtr(degrees, -abs(moved) / error))


def _t_quantile(degrees: float) -> float:
    from scipy import special

    return float(special.stdtrit(degrees, 0.975))


def _shape_p(counts: CountMatrix, early: list[Integers], late: list[Integers]) -> float:
    rows = np.concatenate([*early, *late])
    features = record_features(counts, rows)
    cuts = np.cumsum([len(block) for block in (*early, *late)])[:-1]
    means = np.stack([part.mean(0) for part in np.split(features, cuts)])
    p = [_welch(column[: len(early)], column[len(early) :])[3] for column in means.T]
    usable = [value for value in p if np.isfinite(value)]
    return min(1.0, min(usable) * len(usable)) if usable else np.nan


def _sentence(moved: float, reach: float, p_peak: float, p_shape: float, unit: str) -> str:
    if not np.isfinite(p_peak):
        return "no peak to follow along the record"
    shift = f"the highest peak moved by {moved:+.3f} ± {reach:.3f} {unit} (p = {p_peak:.2g})"
    shape = f"any change of shape: p = {p_shape:.2g}"
    verdict = "differ" if min(p_peak, p_shape) < 0.05 else "do not differ measurably"
    return f"first and last third {verdict}: {shift}; {shape}"
