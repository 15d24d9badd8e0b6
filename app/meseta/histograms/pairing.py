"""Opening with closing: the counts of the other direction, and their correlation with those of the chosen one."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.histograms.correlation import WEAK_TRACES, block_traces, correlation_counts
from meseta.histograms.results import CorrelationHistogram, CountMatrix
from meseta.recipe.histogram import CorrelationSettings
from meseta.segmentation.results import NoiseModel
from meseta.work import Work

__all__ = ["Partners", "opening_closing_correlation", "partner_rows"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]
_FEWEST_PAIRS = 3


@dataclass(frozen=True)
class Partners:
    """Counts of the other direction, and which of its rows belongs to each trace.

    Attributes
    ----------
    counts : CountMatrix
        Of all traces, in the phase of the other direction, on the bins of the chosen one.
    row : (traces,) int64
        Row in ``counts`` of the same cycle; -1 where a trace has no partner, or the partner no samples.
    direction : str
        The chosen direction ("opening" or "closing"); ``counts`` are of the other.
    """

    counts: CountMatrix
    row: Integers
    direction: str


def partner_rows(table: Mapping[str, npt.NDArray[Any]], used: Truths) -> Integers:
    """Return the row of the other direction in the cycle of each trace: (traces,) int64, -1 where there is none.

    Parameters
    ----------
    table : mapping of str to (traces,) array
        Trace table; ``partner`` links an opening and the closing that follows it.
    used : (traces,) bool
        Traces that have samples in the phase of the other direction.  A trace that has both phases is its own partner.
    """
    linked = np.asarray(table["partner"], np.int64)
    own = np.arange(len(linked), dtype=np.int64)
    row = np.where(linked >= 0, linked, own)
    return np.where(used[row], row, -1)


def opening_closing_correlation(
    counts: CountMatrix,
    partners: Partners,
    kept: Truths,
    settings: CorrelationSettings,
    noise: NoiseModel,
    seed: int,
    work: Work,
) -> CorrelationHistogram:
    """Correlate the counts of every bin in openings with those of every bin in the closings that follow.

    Parameters
    ----------
    counts : CountMatrix
        Of the chosen direction.
    partners : Partners
    kept : (traces,) bool
        Traces of the chosen direction that take part; those without a partner are left out.
    settings : CorrelationSettings
    noise : NoiseModel
    seed : int
    work : Work

    Returns
    -------
    CorrelationHistogram
        ``correlation[i, j]``: bin i of the opening, bin j of the closing; not symmetric.

    Notes
    -----
    Pearson's correlation over pairs, Balogh et al., Nanoscale, doi 10.1039/c4nr04645e.  Significance: whole closings
    are permuted over the openings within blocks of the record, and the largest absolute value anywhere in the map is
    kept (maximum statistic: Westfall and Young, Resampling-Based Multiple Testing (1993)).
    """
    rows = np.flatnonzero(kept & counts.used & (partners.row >= 0))
    grid, mine = correlation_counts(counts, rows, settings, noise)
    _, other = correlation_counts(partners.counts, partners.row[rows], settings, noise)
    opening, closing = (mine, other) if partners.direction == "opening" else (other, mine)
    weak, weak_second = ((values > 0).sum(0) < WEAK_TRACES for values in (opening, closing))
    block = block_traces(len(rows))
    left, right = _scaled(opening), _scaled(closing)
    largest = _largest_by_chance(left[:, ~weak], right[:, ~weak_second], block, settings.permutations, seed, work)
    correlation = np.clip(left.T @ right, -1.0, 1.0)
    correlation[np.ix_(~_varies(opening), np.ones(right.shape[1], bool))] = np.nan
    correlation[:, ~_varies(closing)] = np.nan
    return CorrelationHistogram(
        grid=grid,
        correlation=correlation,
        traces=len(rows),
        threshold=float(np.quantile(largest, 0.95)) if len(largest) else np.nan,
        weak=weak,
        permutations=len(largest),
        block_traces=block,
        first_axis="opening",
        second_axis="closing",
        weak_second=weak_second,
        note="" if len(rows) >= _FEWEST_PAIRS else "no kept trace has a partner of the other direction",
    )


def _varies(values: Floats) -> Truths:
    if len(values) < _FEWEST_PAIRS:
        return np.zeros(values.shape[1], bool)
    varies: Truths = values.max(0) > values.min(0)
    return varies


def _scaled(values: Floats) -> Floats:
    """Return columns of mean 0 and norm 1; zeros where a column does not vary."""
    if len(values) < _FEWEST_PAIRS:
        return np.zeros_like(values)
    centred = values - values.mean(0)
    norm = np.sqrt((centred**2).sum(0))
    result: Floats = centred / np.where(_varies(values), norm, np.inf)
    return result


def _largest_by_chance(left: Floats, right: Floats, block: int, permutations: int, seed: int, work: Work) -> Floats:
    """Return the largest absolute correlation of two columns in each of many permutations of the rows of ``right``."""
    if permutations == 0 or len(left) < _FEWEST_PAIRS or left.shape[1] == 0 or right.shape[1] == 0:
        return np.zeros(0)
    random = np.random.default_rng(seed)
    one, other = np.ascontiguousarray(left.T, np.float32), np.ascontiguousarray(right, np.float32)
    largest = np.empty(permutations)
    cuts = list(range(block, len(left), block))
    for turn in range(permutations):
        work.tell("permuting", turn, permutations, "permutations")
        order = np.concatenate([random.permutation(part) for part in np.split(np.arange(len(left)), cuts)])
        largest[turn] = np.abs(one @ other[order]).max()
    return largest
