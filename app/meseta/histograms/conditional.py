"""Conditional histograms: traces that satisfy a condition, against those that do not, against all."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta import typeset
from meseta.histograms.distribution import conductance_histogram
from meseta.histograms.pairing import Partners
from meseta.histograms.resampling import restricted
from meseta.histograms.results import ConductanceHistogram, CountMatrix, Resampling
from meseta.recipe.histogram import HistogramSettings
from meseta.work import Work

__all__ = [
    "ConditionalHistogram",
    "PairHistograms",
    "conditional_histogram",
    "pair_histograms",
    "passes_more_than_usual",
    "samples_between",
]

Truths = npt.NDArray[np.bool_]
Range = tuple[float, float]


@dataclass(frozen=True)
class ConditionalHistogram:
    """Histograms of the kept traces that satisfy a condition, of those that do not, and of all of them.

    With R traces each, R_yes H(yes) + R_no H(no) = R H(all), bin by bin.
    """

    condition: str
    yes: ConductanceHistogram
    no: ConductanceHistogram
    everything: ConductanceHistogram


def samples_between(counts: CountMatrix, low_g0: float, high_g0: float) -> npt.NDArray[np.int64]:
    """Return the samples of every trace in the fine bins whose middle lies in a range: (traces,) int64."""
    inside = (counts.grid.centres_g0 >= low_g0) & (counts.grid.centres_g0 < high_g0)
    return counts.counts[:, inside].sum(1, dtype=np.int64)


def passes_more_than_usual(counts: CountMatrix, kept: Truths, low_g0: float, high_g0: float) -> Truths:
    """Return which traces spend more samples between two conductances than the kept traces do on average.

    Fine bins whose middle lies in the range count.
    """
    return _more_than_usual(samples_between(counts, low_g0, high_g0), kept & counts.used)


def _more_than_usual(samples: npt.NDArray[np.int64], kept: Truths) -> Truths:
    usual = samples[kept].mean() if kept.any() else np.inf
    result: Truths = samples > usual
    return result


def conditional_histogram(
    counts: CountMatrix,
    kept: Truths,
    condition: Truths,
    name: str,
    settings: HistogramSettings,
    resampling: Resampling | None = None,
    work: Work | None = None,
) -> ConditionalHistogram:
    """Split the kept traces by a condition (traces,) bool.

    Parameters
    ----------
    counts : CountMatrix
    kept, condition : (traces,) bool
    name : str
        The condition in words.
    settings : HistogramSettings
    resampling : Resampling, optional
        Of the kept traces; gives all three histograms bands from the same draws.
    work : Work, optional

    Notes
    -----
    Shown together so that a difference is seen against what all traces do; used by Balogh et al., Nanoscale, doi
    10.1039/c4nr04645e.
    """
    yes, no, everything = (
        _histogram(counts, rows, settings, resampling, work) for rows in (kept & condition, kept & ~condition, kept)
    )
    return ConditionalHistogram(name, yes, no, everything)


def _histogram(
    counts: CountMatrix, rows: Truths, settings: HistogramSettings, resampling: Resampling | None, work: Work | None
) -> ConductanceHistogram:
    drawn = None if resampling is None else restricted(resampling, counts, rows, work or Work(threads=1))
    return conductance_histogram(counts, rows, settings, drawn)


@dataclass(frozen=True)
class PairHistograms:
    """What goes with a pair of bins of the correlation histogram: histograms of traces that are rich in them.

    A trace is rich in a range where it spends more samples there than the kept traces do on average.

    Attributes
    ----------
    first_g0, second_g0 : (low, high)
        The two ranges.
    correlation : float
        Pearson's correlation over traces of the samples in the two ranges; NaN where one does not vary.
    chance : float
        1.96 / sqrt(traces): 95 % of independent pairs of bins lie within it (of this one pair, not of a whole map).
    first, second : ConditionalHistogram
        Traces rich in the first (second) range, and the rest.
    both, neither : ConductanceHistogram
    share_both, share_expected : float
        Share of traces rich in both; what it would be if the two were unrelated.
    text : str
        One sentence.
    """

    first_g0: Range
    second_g0: Range
    correlation: float
    chance: float
    first: ConditionalHistogram
    second: ConditionalHistogram
    both: ConductanceHistogram
    neither: ConductanceHistogram
    share_both: float
    share_expected: float
    text: str


def pair_histograms(
    counts: CountMatrix,
    kept: Truths,
    first_g0: Range,
    second_g0: Range,
    settings: HistogramSettings,
    resampling: Resampling | None = None,
    partners: Partners | None = None,
    work: Work | None = None,
) -> PairHistograms:
    """Return the histograms of traces that are rich in either, both or neither of two conductance ranges.

    Parameters
    ----------
    counts : CountMatrix
    kept : (traces,) bool
    first_g0, second_g0 : (low, high)
        The ranges in G0, such as :meth:`CorrelationHistogram.range_g0` of two bins.
    settings : HistogramSettings
    resampling : Resampling, optional
        Of the kept traces, for bands.
    partners : Partners, optional
        Where the pair comes from the opening-closing correlation: the first range is then that of the opening, the
        second that of the closing of the same cycle, traces without a partner are left out, and the histograms are of
        the chosen direction.
    work : Work, optional
    """
    kept = kept & counts.used
    first, second = samples_between(counts, *first_g0), samples_between(counts, *second_g0)
    if partners is not None:
        kept = kept & (partners.row >= 0)
        other = samples_between(partners.counts, *(second_g0 if partners.direction == "opening" else first_g0))
        other = other[np.maximum(partners.row, 0)]
        first, second = (first, other) if partners.direction == "opening" else (other, second)
    rich = [_more_than_usual(samples, kept) for samples in (first, second)]
    words = [f"rich from {low:.3g} to {high:.3g} G0" for low, high in (first_g0, second_g0)]
    split = [
        conditional_histogram(counts, kept, one, name, settings, resampling, work)
        for one, name in zip(rich, words, strict=True)
    ]
    both, neither = (
        _histogram(counts, kept & rows, settings, resampling, work) for rows in (rich[0] & rich[1], ~rich[0] & ~rich[1])
    )
    traces = int(kept.sum())
    shares = [float(one[kept].mean()) if traces else np.nan for one in (*rich, rich[0] & rich[1])]
    correlation = _pearson(first[kept], second[kept])
    chance = 1.96 / np.sqrt(traces) if traces else np.nan
    return PairHistograms(
        first_g0, second_g0, correlation, chance, split[0], split[1], both, neither, shares[2], shares[0] * shares[1],
        _pair_sentence(traces, shares, correlation, chance),
    )  # fmt: skip


def _pearson(one: npt.NDArray[np.int64], other: npt.NDArray[np.int64]) -> float:
    if len(one) < 3 or np.ptp(one) == 0 or np.ptp(other) == 0:
        return np.nan
    return float(np.corrcoef(one, other)[0, 1])


def _pair_sentence(traces: int, shares: list[float], correlation: float, chance: float) -> str:
    if not traces:
        return "no trace is kept"
    if not np.isfinite(correlation):
        return "one of the two ranges does not vary over the traces"
    seen = f"{100 * shares[2]:.3g} % of {typeset.integer(traces)} traces are rich in both"
    expected = f"{100 * shares[0] * shares[1]:.3g} % would be if the two were unrelated"
    limit = "beyond" if abs(correlation) > chance else "within"
    return f"{seen}; {expected}; correlation {correlation:+.3f}, {limit} ±{chance:.2g} of a single pair by chance"
