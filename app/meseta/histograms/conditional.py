"""Conditional histograms: traces that satisfy a condition, against those that do not, against all."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms.distribution import conductance_histogram
from meseta.histograms.results import ConductanceHistogram, CountMatrix
from meseta.recipe.histogram import HistogramSettings

__all__ = ["ConditionalHistogram", "conditional_histogram", "passes_more_than_usual"]

Truths = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class ConditionalHistogram:
    """Histograms of the kept traces that satisfy a condition, of those that do not, and of all of them.

    With R traces each, R_yes H(yes) + R_no H(no) = R H(all), bin by bin.
    """

    condition: str
    yes: ConductanceHistogram
    no: ConductanceHistogram
    everything: ConductanceHistogram


def passes_more_than_usual(counts: CountMatrix, kept: Truths, low_g0: float, high_g0: float) -> Truths:
    """Return which traces spend more samples between two conductances than the kept traces do on average.

    Fine bins whose middle lies in the range count.
    """
    inside = (counts.grid.centres_g0 >= low_g0) & (counts.grid.centres_g0 < high_g0)
    samples = counts.counts[:, inside].sum(1, dtype=np.int64)
    usual = samples[kept & counts.used].mean() if (kept & counts.used).any() else np.inf
    result: Truths = samples > usual
    return result


def conditional_histogram(
    counts: CountMatrix, kept: Truths, condition: Truths, name: str, settings: HistogramSettings
) -> ConditionalHistogram:
    """Split the kept traces by a condition (traces,) bool.

    Notes
    -----
    Shown together so that a difference is seen against what all traces do; used by Balogh et al., Nanoscale, doi
    10.1039/c4nr04645e.
    """
    yes, no, everything = (
        conductance_histogram(counts, rows, settings, None) for rows in (kept & condition, kept & ~condition, kept)
    )
    return ConditionalHistogram(name, yes, no, everything)
