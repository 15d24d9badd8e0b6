"""What histograms hand on: the grid, the count matrix, and the distributions made of it."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field, replace
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta import typeset
from meseta.histograms.plottable import PlottableAxis, PlottableHistogram
from meseta.histograms.rows import stacked
from meseta.tables import Table

__all__ = [
    "EXCLUDED",
    "ConductanceHistogram",
    "CorrelationHistogram",
    "CountMatrix",
    "DisplacementHistogram",
    "Grid",
    "HistogramTable",
    "Resampling",
    "Ridge",
]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
_NORMAL = 1.959963984540054

EXCLUDED: Final = ("under", "over", "non_positive", "saturated", "untrusted", "nan", "outside", "floor")
"""Columns of ``CountMatrix.excluded``: every sample of the phase is in a bin or in exactly one of these.

"outside" are samples of the phase outside the chosen region; "floor" those after the trace has settled in the floor,
where the region ends there; "non_positive" (G <= 0) only on a logarithmic axis.
"""


@dataclass(frozen=True)
class Grid:
    """The conductance axis: half-open bins on float64 edges; the top edge counts as over.

    Attributes
    ----------
    edges_g0 : (bins + 1,) float64, G0
    axis : str
        "linear" or "logarithmic".
    given : bool
        Whether the edges were given one by one; else bins have equal widths, and merge to wider ones.
    """

    edges_g0: Floats
    axis: str
    given: bool = False

    def part(self, first: int, last: int, merge: int = 1) -> Grid:
        """Return bins ``first`` to ``last``, ``merge`` of them put together."""
        return replace(self, edges_g0=self.edges_g0[first : last + 1 : merge])

    @property
    def bins(self) -> int:
        """Number of bins."""
        return len(self.edges_g0) - 1

    @property
    def u_edges(self) -> Floats:
        """(bins + 1,) edges on the axis as drawn: log10 G or G."""
        return np.log10(self.edges_g0) if self.axis == "logarithmic" else self.edges_g0

    @property
    def widths(self) -> Floats:
        """(bins,) widths on the axis as drawn: decades or G0."""
        return np.diff(self.u_edges)

    @property
    def centres_g0(self) -> Floats:
        """(bins,) middle of each bin on the axis as drawn, as a conductance in G0."""
        middle = (self.u_edges[1:] + self.u_edges[:-1]) / 2
        return 10**middle if self.axis == "logarithmic" else middle


@dataclass(frozen=True)
class CountMatrix:
    """Samples of every trace in every fine bin: the source of all 1D results.

    Attributes
    ----------
    grid : Grid
        The fine (stored) grid.
    counts : (traces, bins) uint16 or uint32
    excluded : (traces, len(EXCLUDED)) int64
        Samples of the phase that are in no bin, by reason.
    nm_a_sample : (traces,) float64
        Mean displacement a sample of the phase in nm (positive); NaN where the drive is not in nm.
    used : (traces,) bool
        Traces that have samples in the chosen phase (direction).
    merge : int
        How many fine bins make one bin of the histogram.
    """

    grid: Grid
    counts: npt.NDArray[np.unsignedinteger]
    excluded: Integers
    nm_a_sample: Floats
    used: npt.NDArray[np.bool_]
    merge: int = 1

    @classmethod
    def joined(cls, parts: Iterable[CountMatrix]) -> CountMatrix:
        """Return the matrices of consecutive blocks of traces as one; a large one lies in a file (:func:`stacked`)."""
        rest: list[CountMatrix] = []

        def rows() -> Iterator[npt.NDArray[np.unsignedinteger]]:
            for part in parts:
                rest.append(replace(part, counts=part.counts[:0].copy()))  # a view would hold all of them
                yield part.counts

        counts = stacked(rows())
        return replace(
            rest[0],
            counts=counts,
            excluded=np.concatenate([part.excluded for part in rest]),
            nm_a_sample=np.concatenate([part.nm_a_sample for part in rest]),
            used=np.concatenate([part.used for part in rest]),
        )

    @property
    def shown(self) -> Grid:
        """The histogram's grid: fine bins, ``merge`` by ``merge``."""
        return self.grid.part(0, self.grid.bins, self.merge)

    def shown_counts(self, fine: npt.NDArray[Any]) -> npt.NDArray[Any]:
        """Return fine counts ``(..., fine bins)`` summed exactly to the histogram's bins ``(..., bins)``."""
        bins = self.grid.bins // self.merge
        return fine[..., : bins * self.merge].reshape(*fine.shape[:-1], bins, self.merge).sum(-1)

    def trimmed(self, first: int, last: int, merge: int) -> CountMatrix:
        """Return the matrix with fine bins ``first`` to ``last`` only ; what they leave out is under or over."""
        excluded = self.excluded.copy()
        excluded[:, EXCLUDED.index("under")] += self.counts[:, :first].sum(1, dtype=np.int64)
        excluded[:, EXCLUDED.index("over")] += self.counts[:, last:].sum(1, dtype=np.int64)
        return replace(
            self, grid=self.grid.part(first, last), counts=self.counts[:, first:last], excluded=excluded, merge=merge
        )

    def block(self, first: int, last: int) -> CountMatrix:
        """Return the rows of traces ``first`` to ``last``."""
        return self.take(slice(first, last))

    def take(self, rows: slice | npt.NDArray[Any]) -> CountMatrix:
        """Return the chosen rows (slice, indices or mask)."""
        return replace(
            self,
            counts=self.counts[rows],
            excluded=self.excluded[rows],
            nm_a_sample=self.nm_a_sample[rows],
            used=self.used[rows],
        )


@dataclass(frozen=True)
class Resampling:
    """Resampled data sets: how often each trace was drawn in each replicate, and why so.

    Attributes
    ----------
    scheme : str
        In words ("moving blocks of 12 traces", "specimens, then blocks of 12 traces", "traces").
    rows : (kept,) int64
        Traces that take part.
    weights : (replicates, kept) uint16
        Draws of each trace in each replicate.
    block_traces : int
        Block length in traces; 1 means independent traces.
    effective_traces : float
        Number of independent traces that the kept ones are worth.
    reason : str
        Why they are worth fewer ("memory of about 12 traces along the record").
    counts : (replicates, bins) float64
        Histogram counts (exact integers) of every replicate on the histogram's grid.
    widen : float
        Factor for every deviation of a replicate's result from the estimate, before quantiles are taken: resampling few
        blocks or specimens shows too small a spread, and few degrees of freedom call for t quantiles.
        :meth:`interval` applies it.
    degrees : float
        Degrees of freedom behind ``widen``.
    specimens : int
        Specimens (or sessions) that were drawn as wholes; 0 where blocks or traces were drawn.
    held_fixed : str
        What is the same in every replicate, and therefore not in the intervals.
    """

    scheme: str
    rows: Integers
    weights: npt.NDArray[np.uint16]
    block_traces: int
    effective_traces: float
    reason: str
    counts: Floats
    widen: float = 1.0
    degrees: float = np.inf
    specimens: int = 0
    held_fixed: str = ""

    def statement(self) -> str:
        """Say how many independent traces the kept ones are worth, why, and what would halve the error."""
        traces, worth = len(self.rows), round(self.effective_traces)
        if traces == 0:
            return "no trace is kept"
        as_many = "as much as" if worth == traces else "worth"
        return (
            f"{typeset.integer(traces)} traces are {as_many} {typeset.integer(worth)} independent ones "
            f"({self.reason}); "
            f"half the error needs {self.to_halve_error()}"
        )

    def to_halve_error(self) -> str:
        """Say how much more would have to be measured for half the statistical error."""
        if self.specimens:
            return (
                f"{typeset.integer(3 * self.specimens)} more specimens; more traces of these {self.specimens} would not"
            )
        return f"{typeset.integer(3 * len(self.rows))} more traces like these"

    def interval(
        self, estimate: npt.ArrayLike, replicates: npt.ArrayLike, level: float = 0.95
    ) -> tuple[Floats, Floats]:
        """Return the interval of a result, from its values in the replicates.

        Parameters
        ----------
        estimate : (...) array_like
            The result of the traces as they are.
        replicates : (replicates, ...) array_like
            The result of each replicate; NaN where it failed (left out).
        level : float
            Nominal coverage.

        Returns
        -------
        low, high : (...) float64
            Percentiles of ``estimate + widen * (replicate - estimate)``; NaN where fewer than 20 replicates are
            finite.
        """
        centre, values = np.asarray(estimate, np.float64), np.asarray(replicates, np.float64)
        spread = centre + self.widen * (values - centre)
        enough = np.isfinite(spread).sum(0) >= 20
        with np.errstate(invalid="ignore"):
            usable = np.where(enough, np.where(np.isfinite(spread), spread, np.nan), 0.0)
        low, high = np.nanquantile(usable, [(1 - level) / 2, (1 + level) / 2], axis=0)
        return np.where(enough, low, np.nan), np.where(enough, high, np.nan)


@dataclass(frozen=True)
class ConductanceHistogram:
    """A 1D conductance histogram over the selected traces.

    Attributes
    ----------
    grid : Grid
    counts : (bins,) int64
        Samples in each bin.
    traces : int
        Traces that take part, also those without a sample in range.
    traces_in_bin : (bins,) int64
        Traces that reach each bin; below ``weak_traces`` a bin is weak.
    density, density_low, density_high : (bins,) float64
        Normalised histogram and its pointwise 95 % band (NaN where not resampled).
    density_unit : str
        "nm / trace / decade" and the like.
    excluded : dict of str to int
        Samples in no bin, by reason (:data:`EXCLUDED`).
    scheme : str
        Which resampling made the band; empty where none.
    scale : (bins,) float64
        density = counts * scale on average; used by fits to go from counts to density.
    weak_traces : int
        Bins that fewer traces reach are weak.
    notes : tuple of str
        What a reader should know of the bins (finer than the converter's steps, say).
    """

    grid: Grid
    counts: Integers
    traces: int
    traces_in_bin: Integers
    density: Floats
    density_low: Floats
    density_high: Floats
    density_unit: str
    excluded: dict[str, int]
    scheme: str
    scale: Floats
    weak_traces: int = 20
    notes: tuple[str, ...] = ()

    @property
    def edges_g0(self) -> Floats:
        """(bins + 1,) float64, bin edges in G0."""
        return self.grid.edges_g0

    @property
    def counts_per_trace(self) -> Floats:
        """(bins,) float64, counts divided by the number of traces."""
        return self.counts / max(self.traces, 1)

    def plottable(self) -> PlottableHistogram:
        """Return the density as a histogram in the plottable-histogram protocol (UHI); variances from the band."""
        known = np.isfinite(self.density_high).all()
        sigma = (self.density_high - self.density_low) / (2 * _NORMAL)
        axis = PlottableAxis(self.edges_g0, "G / G0")
        return PlottableHistogram((axis,), self.density, sigma**2 if known else None, self.counts.astype(float))

    def table(self) -> HistogramTable:
        """Return the columns of ``histogram.csv``."""
        return HistogramTable(
            g_low_g0=self.edges_g0[:-1],
            g_high_g0=self.edges_g0[1:],
            counts=self.counts,
            counts_per_trace=self.counts_per_trace,
            density=self.density,
            density_low=self.density_low,
            density_high=self.density_high,
            density_unit=np.full(self.grid.bins, self.density_unit),
            traces_in_bin=self.traces_in_bin,
            weak=self.traces_in_bin < self.weak_traces,
            resampling=np.full(self.grid.bins, self.scheme),
        )


@dataclass(frozen=True)
class HistogramTable(Table):
    """The columns of ``histogram.csv``."""

    g_low_g0: Floats
    g_high_g0: Floats
    counts: Integers
    counts_per_trace: Floats
    density: Floats
    density_low: Floats
    density_high: Floats
    density_unit: npt.NDArray[np.str_]
    traces_in_bin: Integers
    weak: npt.NDArray[np.bool_]
    resampling: npt.NDArray[np.str_]


@dataclass(frozen=True)
class Ridge:
    """Median conductance against displacement, with the range of the middle 68.27 %.

    Attributes
    ----------
    drive : (columns,) float64
        Middle of each column.
    median_g0, low_g0, high_g0 : (columns,) float64
        NaN where a column has too few counts.
    """

    drive: Floats
    median_g0: Floats
    low_g0: Floats
    high_g0: Floats


@dataclass(frozen=True)
class DisplacementHistogram:
    """A 2D conductance-displacement histogram over the selected, aligned traces.

    Attributes
    ----------
    grid : Grid
        Conductance axis.
    drive_edges : (columns + 1,) float64
        Displacement from the zero, in ``drive_unit``.
    counts : (columns, bins) int64
    traces : int
        Selected traces that are aligned; ``not_aligned`` are left out.
    density : (columns, bins) float64
        counts / (traces x width x width): per trace per drive unit per decade (or per G0).
    """

    grid: Grid
    drive_edges: Floats
    drive_unit: str
    counts: Integers
    traces: int
    not_aligned: int
    density: Floats
    density_unit: str

    @classmethod
    def summed(cls, parts: Iterable[DisplacementHistogram]) -> DisplacementHistogram:
        """Return the sum of the histograms of several blocks of traces on the same axes."""
        head, counts, traces, lost = None, None, 0, 0
        for part in parts:
            head = part if head is None else head
            counts = part.counts.copy() if counts is None else np.add(counts, part.counts, out=counts)
            traces, lost = traces + part.traces, lost + part.not_aligned
        if head is None or counts is None:
            raise ValueError("a sum of no histograms")
        return head.with_counts(counts, traces, lost)

    def profile(self, column: int) -> Floats:
        """Return the distribution of conductance in one column, (bins,) per decade (or G0); NaN where it is empty."""
        total = self.counts[column].sum()
        with np.errstate(invalid="ignore"):
            result: Floats = (
                self.counts[column] / (total * self.grid.widths) if total else np.full(self.grid.bins, np.nan)
            )
        return result

    def ridge(self, least_counts: int = 20) -> Ridge:
        """Return the median conductance of every column with the range that holds the middle 68.27 %.

        Interpolated within bins on the axis as drawn; NaN for columns of fewer than ``least_counts`` counts.
        """
        total = self.counts.sum(1)
        below = np.concatenate([np.zeros((len(total), 1)), np.cumsum(self.counts, 1)], 1)
        found = np.full((3, len(total)), np.nan)
        for column in np.flatnonzero(total >= max(least_counts, 1)):
            shares = total[column] * np.array([0.1586552539, 0.5, 0.8413447461])
            rising = np.concatenate([[True], np.diff(below[column]) > 0])
            found[:, column] = np.interp(shares, below[column][rising], self.grid.u_edges[rising])
        values = 10**found if self.grid.axis == "logarithmic" else found
        return Ridge((self.drive_edges[1:] + self.drive_edges[:-1]) / 2, values[1], values[0], values[2])

    def plottable(self) -> PlottableHistogram:
        """Return the density as a histogram in the plottable-histogram protocol (UHI)."""
        axes = (PlottableAxis(self.drive_edges, self.drive_unit), PlottableAxis(self.grid.edges_g0, "G / G0"))
        return PlottableHistogram(axes, self.density, None, self.counts.astype(float))

    def with_counts(self, counts: Integers, traces: int, not_aligned: int) -> DisplacementHistogram:
        """Return a histogram on the same axes with other counts."""
        area = np.diff(self.drive_edges)[:, None] * self.grid.widths
        density = counts / (max(traces, 1) * area)
        return replace(self, counts=counts, traces=traces, not_aligned=not_aligned, density=density)


@dataclass(frozen=True)
class CorrelationHistogram:
    """A 2D correlation histogram: Pearson correlation over traces between the counts of two bins.

    Attributes
    ----------
    grid : Grid
    correlation : (bins, bins) float64
        NaN where a bin has no variance.
    traces : int
    threshold : float
        Absolute correlation that the largest chance value exceeds with probability 0.05 (permutation, maximum
        statistic); NaN where not computed.
    weak : (bins,) bool
        Bins that fewer than 20 traces reach: they take no part in the threshold and are never significant.
    permutations : int
    block_traces : int
        Traces within which counts were permuted.
    first_axis, second_axis : str
        Where the two axes show different things, what they show ("opening", "closing"; a shift); else empty.
    weak_second : (bins,) bool
        Weak bins of the second axis where it differs from the first; else empty.
    note : str
        What a reader should know; empty where there is nothing.
    correlation_low, correlation_high : (bins, bins) float64
        Pointwise 95 % band; NaN where it cannot be told, empty where it was not worked out.
    """

    grid: Grid
    correlation: Floats
    traces: int
    threshold: float
    weak: npt.NDArray[np.bool_] = field(default_factory=lambda: np.zeros(0, bool))
    permutations: int = 0
    block_traces: int = 0
    first_axis: str = ""
    second_axis: str = ""
    weak_second: npt.NDArray[np.bool_] = field(default_factory=lambda: np.zeros(0, bool))
    note: str = ""
    correlation_low: Floats = field(default_factory=lambda: np.empty((0, 0)))
    correlation_high: Floats = field(default_factory=lambda: np.empty((0, 0)))

    @property
    def crossed(self) -> bool:
        """Whether the two axes show different things, so that the map is not symmetric."""
        return bool(self.first_axis or self.second_axis)

    def bins_at(self, first_g0: float, second_g0: float) -> tuple[int, int] | None:
        """Return the bins that hold two conductances in G0; None where one lies outside the map."""
        found = [int(np.searchsorted(self.grid.edges_g0, at, side="right")) - 1 for at in (first_g0, second_g0)]
        return (found[0], found[1]) if all(0 <= at < self.grid.bins for at in found) else None

    def range_g0(self, place: int) -> tuple[float, float]:
        """Return the ends of a bin in G0."""
        return float(self.grid.edges_g0[place]), float(self.grid.edges_g0[place + 1])

    @property
    def significant(self) -> npt.NDArray[np.bool_]:
        """(bins, bins) where the correlation of two different bins exceeds what chance makes anywhere in the map."""
        strong = np.abs(np.nan_to_num(self.correlation)) > self.threshold
        second = self.weak_second if len(self.weak_second) else self.weak
        if len(self.weak):
            strong &= ~(second | self.weak[:, None])
        if not self.crossed:
            np.fill_diagonal(strong, False)
        return strong
