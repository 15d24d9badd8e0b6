"""All defensible analyses together: the headline number under every combination of choices that could be defended."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.histograms.results import ConductanceHistogram, Grid, Resampling
from meseta.peaks.fitting import Fitted, fit_model, refit
from meseta.peaks.intervals import percentile_interval
from meseta.peaks.modelling import is_logarithmic, model_of
from meseta.peaks.results import PeakTable
from meseta.peaks.verdicts import fit_verdicts
from meseta.peaks.windows import Start, rebinned
from meseta.recipe.peaks import PeakSettings
from meseta.tables import Table
from meseta.work import Work

__all__ = ["AnalysisSpread", "DefensibleAnalyses", "PeakAnalyses", "defensible_analyses"]

Floats = npt.NDArray[np.float64]
Texts = npt.NDArray[np.str_]

_SHAPES = ("gaussian", "pseudo_voigt", "skewed_gaussian")
_BACKGROUNDS = ("constant", "linear", "exponential")
_RANGES = (0.85, 1.0, 1.15)
_MERGES = (1, 2)
_MUCH_WORSE = 2.0
_DRAWS = 40
_NORMAL = 1.959963984540054


@dataclass(frozen=True)
class AnalysisSpread(Table):
    """One row a peak: the position as chosen, and over all analyses.

    ``low_g0`` and ``high_g0`` hold nine tenths of the analyses, ``lowest_g0`` and ``highest_g0`` all of them;
    ``analyses`` is how many gave this peak.
    """

    peak: Texts
    chosen_g0: Floats
    median_g0: Floats
    low_g0: Floats
    high_g0: Floats
    lowest_g0: Floats
    highest_g0: Floats
    analyses: npt.NDArray[np.int64]


@dataclass(frozen=True)
class PeakAnalyses:
    """One peak under all analyses: what ``figures.analyses_figure`` draws.

    Attributes
    ----------
    position_g0, position_low_g0, position_high_g0 : (analyses,) float64
        NaN where the analysis cannot be defended or has no interval.
    choices : dict of str to tuple of str
        Name of a choice -> what each analysis chose.
    chosen : int
        Row of the analysis that is reported; -1 where it is not among them.
    """

    position_g0: Floats
    position_low_g0: Floats
    position_high_g0: Floats
    choices: dict[str, tuple[str, ...]]
    chosen: int


@dataclass(frozen=True)
class DefensibleAnalyses(Table):
    """One row a peak and analysis.

    ``histogram`` names which traces and samples were counted, ``range_factor`` the length of the fit range over the
    chosen one, ``merged_bins`` how many bins were summed; ``position_g0`` is NaN, and ``defensible`` false, where the
    fit failed, sits on a bound, or has more than twice the deviance of the chosen model on these counts; ``chosen``
    marks the analysis that is reported.
    """

    analysis: npt.NDArray[np.int64]
    histogram: Texts
    shape: Texts
    background: Texts
    range_factor: Floats
    merged_bins: npt.NDArray[np.int64]
    peak: Texts
    position_g0: Floats
    position_low_g0: Floats
    position_high_g0: Floats
    defensible: npt.NDArray[np.bool_]
    chosen: npt.NDArray[np.bool_]

    def of_peak(self, peak: str) -> PeakAnalyses:
        """Return all analyses of one peak as plain arrays, for drawing; not defensible ones have no position."""
        rows = self.take(self.peak == peak)
        if not len(rows):
            raise CallError(
                f"there is no peak '{peak}'", "all analyses", f"there are {', '.join(dict.fromkeys(self.peak))}"
            )
        marked = np.flatnonzero(rows.chosen)
        kept = rows.defensible
        return PeakAnalyses(
            position_g0=np.where(kept, rows.position_g0, np.nan),
            position_low_g0=np.where(kept, rows.position_low_g0, np.nan),
            position_high_g0=np.where(kept, rows.position_high_g0, np.nan),
            choices={
                "histogram": tuple(map(str, rows.histogram)),
                "line shape": tuple(str(name).replace("_", " ") for name in rows.shape),
                "background": tuple(str(name).replace("_", " ") for name in rows.background),
                "fit range": tuple(f"{factor:g} times" for factor in rows.range_factor),
                "bin width": tuple(f"{merge} times" for merge in rows.merged_bins),
            },
            chosen=int(marked[0]) if len(marked) else -1,
        )

    def spread(self) -> AnalysisSpread:
        """Return the spread of every peak over the defensible analyses."""
        names = list(dict.fromkeys(self.peak))
        rows = []
        for name in names:
            values = self.position_g0[(self.peak == name) & self.defensible]
            chosen = self.position_g0[(self.peak == name) & self.chosen]
            ends = np.quantile(values, [0.0, 0.05, 0.5, 0.95, 1.0]) if len(values) else np.full(5, np.nan)
            rows.append((chosen[0] if len(chosen) else np.nan, *ends, len(values)))
        table = np.array(rows, float).reshape(len(names), 7)
        return AnalysisSpread(
            peak=np.array(names),
            chosen_g0=table[:, 0],
            median_g0=table[:, 3],
            low_g0=table[:, 2],
            high_g0=table[:, 4],
            lowest_g0=table[:, 1],
            highest_g0=table[:, 5],
            analyses=table[:, 6].astype(np.int64),
        )


@dataclass(frozen=True)
class _Choice:
    histogram: str
    shape: str
    background: str
    range_factor: float
    merge: int


@dataclass(frozen=True)
class _Outcome:
    choice: _Choice
    names: tuple[str, ...]
    position_g0: Floats
    low_g0: Floats
    high_g0: Floats
    sound: npt.NDArray[np.bool_]
    deviance: float


def defensible_analyses(
    histograms: Mapping[str, ConductanceHistogram],
    table: PeakTable,
    settings: PeakSettings,
    work: Work | None = None,
    resamplings: Mapping[str, Resampling] | None = None,
) -> DefensibleAnalyses:
    """Fit every peak under all combinations of histogram, line shape, background, fit range and bin width.

    Parameters
    ----------
    histograms : mapping of str to ConductanceHistogram
        The histogram as chosen first, then others that could be defended (another region, zero of displacement,
        selection), each with a name.
    table : PeakTable
        The peaks as chosen: they give positions and widths to begin with, and the fit range.
    settings : PeakSettings
        The settings as chosen; their shape and background take part even if they are none of the usual ones.
    work : Work, optional
    resamplings : mapping of str to Resampling, optional
        Of the histograms of the same names: 40 draws of each give every analysis its 95 % interval (1.96
        standard errors).

    Returns
    -------
    DefensibleAnalyses
        54 analyses a histogram (3 shapes, 3 backgrounds, 3 ranges, 2 bin widths) or more.

    Raises
    ------
    CallError
        Where there is no peak, or no histogram.

    Notes
    -----
    The idea of showing all reasonable analyses rather than one: Steegen, Tuerlinckx, Gelman, Vanpaemel, Perspect.
    Psychol. Sci. 11, 702 (2016).  The spread is no confidence interval: the analyses share their data.
    """
    work = work or Work()
    rows = np.flatnonzero(np.isfinite(table.position_g0) & np.isfinite(table.fit_low_g0))
    if not len(rows) or not histograms:
        raise CallError("there is no fitted peak", "all analyses", "fit peaks first")
    peaks, first = table.take(rows), next(iter(histograms))
    choices = list(_choices(list(histograms), settings))

    drawn = resamplings or {}

    def one(choice: _Choice) -> list[_Outcome]:
        made, draws = histograms[choice.histogram], drawn.get(choice.histogram)
        return [_outcome(made, peaks.take(group), settings, choice, draws) for group in _groups(peaks)]

    outcomes = list(work.each(one, choices, "trying all analyses", unit="analyses"))
    chosen = _Choice(first, settings.shape, settings.background, 1.0, 1)
    return _table(outcomes, chosen)


def _choices(names: list[str], settings: PeakSettings) -> Iterator[_Choice]:
    shapes = tuple(dict.fromkeys((settings.shape, *_SHAPES)))
    usual = _BACKGROUNDS if settings.background in ("template", "tunnelling") else (settings.background, *_BACKGROUNDS)
    for parts in product(names, shapes, tuple(dict.fromkeys(usual)), _RANGES, _MERGES):
        yield _Choice(*parts)


def _groups(peaks: PeakTable) -> list[npt.NDArray[np.int64]]:
    """Return the rows that share a fit range."""
    ranges = np.stack([peaks.fit_low_g0, peaks.fit_high_g0], axis=1)
    _, group = np.unique(ranges, axis=0, return_inverse=True)
    return [np.flatnonzero(group.ravel() == number) for number in range(int(group.max()) + 1)]


def _outcome(
    histogram: ConductanceHistogram,
    peaks: PeakTable,
    settings: PeakSettings,
    choice: _Choice,
    draws: Resampling | None,
) -> _Outcome:
    """Return the positions of the peaks of one fit range under one choice."""
    grid, names = histogram.grid, tuple(str(name) for name in peaks.peak)
    nothing = np.full(len(names), np.nan)
    failed = _Outcome(choice, names, nothing, nothing, nothing, np.zeros(len(names), bool), np.inf)
    bins = _bins(grid, float(peaks.fit_low_g0[0]), float(peaks.fit_high_g0[0]), choice.range_factor)
    if bins[1] - bins[0] < (4 + 3 * len(names)) * choice.merge:
        return failed
    changed = settings.model_copy(update={"shape": choice.shape})
    starts = tuple(_start(peaks, row, is_logarithmic(grid, settings), grid) for row in range(len(names)))
    model = model_of(grid, changed, starts, bins, choice.merge, choice.background, np.empty(0))
    counts = rebinned(histogram.counts[bins[0] : bins[1]].astype(float), choice.merge)[: len(model.low)]
    if not counts.any():
        return failed
    fitted = fit_model(model, counts)
    sound = np.array([not _disqualifying(said) for said in fit_verdicts(fitted, counts)])
    low, high = _ends(fitted, draws, bins, choice.merge)
    places = [fitted.peaks[:, 1], low, high]
    position, below, above = (10.0**place if model.logarithmic else place for place in places)
    deviance = fitted.score / fitted.degrees_of_freedom
    return _Outcome(choice, names, np.where(sound, position, np.nan), below, above, sound, deviance)


def _disqualifying(said: list[str]) -> list[str]:
    """Return the verdicts that make a position worthless; an overlap does not."""
    return [text for text in said if not text.startswith("overlaps")]


def _ends(fitted: Fitted, draws: Resampling | None, bins: tuple[int, int], merge: int) -> tuple[Floats, Floats]:
    """Return the 95 % interval of every position on the axis; NaN without draws."""
    if draws is None or not fitted.converged:
        nothing = np.full(fitted.model.peaks, np.nan)
        return nothing, nothing
    many = rebinned(draws.counts[:_DRAWS, bins[0] : bins[1]], merge)[:, : len(fitted.model.low)]
    again = refit(fitted, many, Work(threads=1))
    half = _NORMAL * draws.widen * percentile_interval(fitted.peaks[:, 1], again.peaks[:, :, 1]).sigma
    return fitted.peaks[:, 1] - half, fitted.peaks[:, 1] + half


def _bins(grid: Grid, low_g0: float, high_g0: float, factor: float) -> tuple[int, int]:
    """Return the bins of a fit range stretched about its middle on the axis."""
    low, high = (np.log10([low_g0, high_g0]) if grid.axis == "logarithmic" else np.array([low_g0, high_g0])).tolist()
    middle, half = (low + high) / 2, factor * (high - low) / 2
    edges = np.searchsorted(grid.u_edges, [middle - half - 1e-9, middle + half + 1e-9])
    return int(edges[0]), int(max(edges[1] - 1, edges[0]))


def _start(peaks: PeakTable, row: int, logarithmic: bool, grid: Grid) -> Start:
    """Return a start on the axis of the histogram from a row of the table (whose width is on the axis of the fit)."""
    position, width = float(peaks.position_g0[row]), float(peaks.fwhm[row]) / 2.3548
    on_grid = grid.axis == "logarithmic"
    if logarithmic and not on_grid:
        width *= position * np.log(10)
    elif on_grid and not logarithmic:
        width /= position * np.log(10)
    return Start(float(np.log10(position)) if on_grid else position, width)


def _table(outcomes: list[list[_Outcome]], chosen: _Choice) -> DefensibleAnalyses:
    reference = {
        (outcome.choice.histogram, outcome.choice.merge, outcome.names): outcome.deviance
        for group in outcomes
        for outcome in group
        if replace(outcome.choice, histogram=chosen.histogram, merge=1) == chosen
    }
    rows = []
    for number, group in enumerate(outcomes):
        for outcome in group:
            choice = outcome.choice
            good = outcome.deviance <= _MUCH_WORSE * reference[choice.histogram, choice.merge, outcome.names]
            parts = zip(outcome.names, outcome.position_g0, outcome.low_g0, outcome.high_g0, outcome.sound, strict=True)
            for name, position, low, high, sound in parts:
                rows.append((number, choice, name, position, low, high, bool(sound and (good or choice == chosen))))
    return DefensibleAnalyses(
        analysis=np.array([row[0] for row in rows], np.int64),
        histogram=np.array([row[1].histogram for row in rows]),
        shape=np.array([row[1].shape for row in rows]),
        background=np.array([row[1].background for row in rows]),
        range_factor=np.array([row[1].range_factor for row in rows]),
        merged_bins=np.array([row[1].merge for row in rows], np.int64),
        peak=np.array([row[2] for row in rows]),
        position_g0=np.array([row[3] for row in rows], float),
        position_low_g0=np.array([row[4] for row in rows], float),
        position_high_g0=np.array([row[5] for row in rows], float),
        defensible=np.array([row[6] for row in rows], bool),
        chosen=np.array([row[1] == chosen for row in rows], bool),
    )
