"""Comparisons: recordings or parts of one on a common axis, and their differences (molecule minus blank, say)."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.histograms.distribution import conductance_histogram
from meseta.histograms.resampling import resample, restricted
from meseta.histograms.results import ConductanceHistogram, CountMatrix, Grid, Resampling
from meseta.recipe.histogram import HistogramSettings
from meseta.recipe.resampling import ResamplingSettings
from meseta.work import Work

__all__ = ["Comparison", "Difference", "Member", "Part", "compared", "difference", "members_of", "parts_by"]

Floats = npt.NDArray[np.float64]
Truths = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Difference:
    """One recording minus a scaled other, per trace.

    Attributes
    ----------
    grid : Grid
    density, density_low, density_high : (bins,) float64
        Difference and its pointwise 95 % band.
    density_unit : str
    scale, scale_low, scale_high : float
        Factor of the second recording; fitted or fixed (its interval is then a point).
    scale_is_fitted : bool
    """

    grid: Grid
    density: Floats
    density_low: Floats
    density_high: Floats
    density_unit: str
    scale: float
    scale_low: float
    scale_high: float
    scale_is_fitted: bool


def difference(
    first: tuple[ConductanceHistogram, Resampling],
    second: tuple[ConductanceHistogram, Resampling],
    scale: float | None = 1.0,
    fit_range_g0: tuple[float, float] | None = None,
    shared_draws: bool = False,
) -> Difference:
    """Subtract one recording's histogram from another's, both per trace, with a band from resampling both.

    Parameters
    ----------
    first, second : (ConductanceHistogram, Resampling)
        On the same bins and in the same density unit (molecule and blank, say).
    scale : float, optional
        Factor of the second; None fits it.
    fit_range_g0 : (low, high), optional
        Where the two must agree when the scale is fitted (a range without molecular signal).
    shared_draws : bool
        Whether both histograms come from the same draws (parts of one recording, :func:`restricted`): replicates are
        then taken pair by pair, so that what moves both is in the band as what it is.

    Raises
    ------
    CallError
        Where bins or units differ, or the scale is to be fitted without a range.

    Notes
    -----
    The scale is the ratio of the two lengths (or counts) a trace within the range.  Replicates of two recordings are
    independent, and are paired at random.
    """
    (a, drawn_a), (b, drawn_b) = first, second
    if not np.array_equal(a.edges_g0, b.edges_g0) or a.density_unit != b.density_unit:
        raise CallError(
            f"the two histograms differ in bins or unit ({a.density_unit}; {b.density_unit})",
            "comparison",
            "use the same [histogram] settings for both",
        )
    if scale is None and fit_range_g0 is None:
        raise CallError("fitting the scale of the blank needs a range", "comparison", "give fit_range_g0")
    one, other = _replicates(a, drawn_a), _replicates(b, drawn_b)
    number = min(len(one), len(other))
    # two recordings of equal length and seed have the same draws: a common drift must not cancel in the band
    order = np.arange(number) if shared_draws else np.random.default_rng(number).permutation(number)
    one, other = one[:number], other[:number][order]
    if scale is None and fit_range_g0 is not None:
        near = (a.edges_g0[:-1] >= fit_range_g0[0]) & (a.edges_g0[1:] <= fit_range_g0[1])
        factor = float(_ratio(a.density, b.density, near, a.grid.widths))
        factors = _ratio(one, other, near, a.grid.widths)
    else:
        factor, factors = float(scale or 0.0), np.full(number, float(scale or 0.0))
    result = a.density - factor * b.density
    low, high = np.quantile(one - factors[:, None] * other, [0.025, 0.975], axis=0)
    scale_low, scale_high = np.quantile(factors, [0.025, 0.975])
    return Difference(
        a.grid, result, low, high, a.density_unit, factor, float(scale_low), float(scale_high), scale is None
    )


def _replicates(histogram: ConductanceHistogram, drawn: Resampling) -> Floats:
    """Return replicate densities, widened about the estimate."""
    size = drawn.weights.sum(1, dtype=np.int64)[:, None] / max(len(drawn.rows), 1)
    values = drawn.counts / np.maximum(size, np.finfo(float).tiny) * histogram.scale
    result: Floats = histogram.density + drawn.widen * (values - histogram.density)
    return result


def _ratio(a: Floats, b: Floats, near: Truths, widths: Floats) -> Floats:
    with np.errstate(divide="ignore", invalid="ignore"):
        result: Floats = (a[..., near] @ widths[near]) / (b[..., near] @ widths[near])
    return result


# -- several on one axis ----------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Member:
    """What is to be compared: a recording, or a part of one.

    Attributes
    ----------
    name : str
    counts : CountMatrix
    kept : (traces,) bool
    resampling : Resampling
        Of the same kept traces.
    """

    name: str
    counts: CountMatrix
    kept: Truths
    resampling: Resampling


@dataclass(frozen=True)
class Part:
    """One histogram of a comparison, with the draws behind its band."""

    name: str
    histogram: ConductanceHistogram
    resampling: Resampling


@dataclass(frozen=True)
class Comparison:
    """Histograms on one axis with one normalisation.

    Attributes
    ----------
    grid : Grid
        Bins that all of them have.
    density_unit : str
    parts : tuple of Part
        In the order given.
    shared_draws : bool
        Whether the parts come from the same draws of traces (parts of one recording).
    notes : tuple of str
        What had to be done to make them comparable.
    """

    grid: Grid
    density_unit: str
    parts: tuple[Part, ...]
    shared_draws: bool
    notes: tuple[str, ...] = ()

    def difference(
        self,
        first: int,
        second: int,
        scale: float | None = 1.0,
        fit_range_g0: tuple[float, float] | None = None,
    ) -> Difference:
        """Return part ``first`` minus ``scale`` times part ``second`` with its band; see :func:`difference`."""
        a, b = self.parts[first], self.parts[second]
        return difference(
            (a.histogram, a.resampling), (b.histogram, b.resampling), scale, fit_range_g0, self.shared_draws
        )


def compared(members: Sequence[Member], settings: HistogramSettings, shared_draws: bool = False) -> Comparison:
    """Put histograms on one axis with one normalisation.

    Parameters
    ----------
    members : sequence of Member
        On bins of the same width; bins that not all have (another floor) become under or over.  Those without a trace
        are left out with a note.
    settings : HistogramSettings
        Normalisation; where the displacement of any is unknown, samples are counted in all.
    shared_draws : bool
        Whether the members' draws are the same.

    Raises
    ------
    CallError
        Where there is nothing to compare, or bins differ in axis or width.
    """
    empty = [one.name for one in members if not (one.kept & one.counts.used).any()]
    members = [one for one in members if one.name not in empty]
    if not members:
        raise CallError("there is nothing to compare", "comparison", "give at least one recording or part with traces")
    notes = [f"no trace in '{name}'" for name in empty]
    lengths = [np.isfinite(one.counts.nm_a_sample[one.kept & one.counts.used]).all() for one in members]
    if settings.normalisation == "nm_per_trace" and not all(lengths):
        settings = settings.model_copy(update={"normalisation": "counts_per_trace"})
        if any(lengths):
            notes.append("displacement is not known everywhere: samples are counted instead of nm")
    edges = [one.counts.shown.edges_g0 for one in members]
    low, high = max(each[0] for each in edges), min(each[-1] for each in edges)
    parts = tuple(_part(one, low, high, settings) for one in members)
    grid = parts[0].histogram.grid
    if any(not np.array_equal(part.histogram.edges_g0, grid.edges_g0) for part in parts):
        raise CallError("the bins differ", "comparison", "use the same axis and width of bins for all")
    if any(len(each) != len(grid.edges_g0) for each in edges):
        notes.append(f"compared from {low:.3g} to {high:.3g} G0, where all have bins")
    return Comparison(grid, parts[0].histogram.density_unit, parts, shared_draws, tuple(notes))


def _part(member: Member, low_g0: float, high_g0: float, settings: HistogramSettings) -> Part:
    """Return a member's histogram on those of its bins that lie between two edges."""
    edges, merge = member.counts.shown.edges_g0, member.counts.merge
    first, last = int(np.searchsorted(edges, low_g0)), int(np.searchsorted(edges, high_g0, side="right")) - 1
    if last <= first:
        raise CallError(
            f"'{member.name}' has no bins where the others have theirs",
            "comparison",
            "set histogram.low_g0 and high_g0",
        )
    # the last bins of a matrix may be no whole bin of the histogram
    counts = member.counts.trimmed(first * merge, last * merge, merge)
    drawn = replace(member.resampling, counts=member.resampling.counts[:, first:last])
    return Part(member.name, conductance_histogram(counts, member.kept, settings, drawn), drawn)


def parts_by(labels: npt.NDArray[Any], kept: Truths) -> dict[str, Truths]:
    """Return the kept traces by label, (traces,) bool each, in the order of first appearance.

    A label may hold several names joined by ";" (groups): the trace is then in each.  Traces without a label are left
    out.
    """
    words = np.asarray(labels).astype(np.str_)
    found: dict[str, Truths] = {}
    for word in dict.fromkeys(words[kept].tolist()):
        for name in filter(None, word.split(";")):
            found.setdefault(name, np.zeros(len(words), bool))
            found[name] |= kept & (words == word)
    return found


def members_of(
    counts: CountMatrix,
    masks: Mapping[str, Truths],
    trace_table: Mapping[str, npt.NDArray[Any]],
    settings: HistogramSettings,
    resampling: ResamplingSettings,
    work: Work,
) -> tuple[list[Member], bool]:
    """Return parts of one recording with their draws, and whether the draws are shared.

    Parts of the same specimens see the same draws, so that what moves them together is told from what sets them
    apart.  Parts that share no specimen (specimens compared with one another, say) are drawn each on its own.

    Parameters
    ----------
    counts : CountMatrix
    masks : mapping of str to (traces,) bool
    trace_table : mapping of str to (traces,) array
    settings : HistogramSettings
    resampling : ResamplingSettings
    work : Work
    """
    masks = {name: mask & counts.used for name, mask in masks.items()}
    specimens = [set(np.unique(trace_table["specimen"][mask]).tolist()) for mask in masks.values()]
    apart = len(masks) > 1 and all(not one & other for at, one in enumerate(specimens) for other in specimens[:at])
    if apart:
        return [
            Member(name, counts, mask, resample(counts, mask, trace_table, settings, resampling, work))
            for name, mask in masks.items()
        ], False
    anyone = np.logical_or.reduce(list(masks.values())) if masks else np.zeros(len(counts.used), bool)
    drawn = resample(counts, anyone, trace_table, settings, resampling, work)
    return [Member(name, counts, mask, restricted(drawn, counts, mask, work)) for name, mask in masks.items()], True
