"""The functions of a notebook: one call from traces to a result."""

from __future__ import annotations

from meseta import peaks
from meseta.analysis.core import Analysis
from meseta.histograms import ConductanceHistogram, CorrelationHistogram, DisplacementHistogram
from meseta.peaks import PeakTable
from meseta.recipe import Recipe
from meseta.segmentation import PlateauTable
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = [
    "conductance_histogram",
    "correlation_histogram",
    "defensible_analyses",
    "displacement_histogram",
    "find_plateaus",
    "fit_peaks",
]

_MOST_RULES = 4


def find_plateaus(traces: TraceSet, recipe: Recipe | None = None, work: Work | None = None) -> PlateauTable:
    """Find the plateaus of every trace.

    Returns
    -------
    PlateauTable
        The columns of ``plateaus.csv`` as arrays; see there for units.

    Notes
    -----
    Exact penalised change points (Maidstone et al., Stat. Comput. 27, 519 (2017), doi 10.1007/s11222-016-9636-3) in a
    variance-stabilised variable; see :mod:`meseta.segmentation`.
    """
    return Analysis(traces, recipe or Recipe()).plateaus(work)


def conductance_histogram(
    traces: TraceSet, recipe: Recipe | None = None, work: Work | None = None
) -> ConductanceHistogram:
    """Build the 1D conductance histogram of the selected traces, with ``edges_g0``, ``counts`` and ``density``."""
    return Analysis(traces, recipe or Recipe()).histogram(work)


def displacement_histogram(
    traces: TraceSet, recipe: Recipe | None = None, work: Work | None = None
) -> DisplacementHistogram:
    """Build the 2D conductance-displacement histogram of the selected, aligned traces."""
    result: DisplacementHistogram = Analysis(traces, recipe or Recipe()).result("displacement_histogram", work)
    return result


def correlation_histogram(
    traces: TraceSet, recipe: Recipe | None = None, work: Work | None = None
) -> CorrelationHistogram:
    """Build the 2D correlation histogram (Makk et al., ACS Nano 6, 3411 (2012)) of the selected traces."""
    result: CorrelationHistogram = Analysis(traces, recipe or Recipe()).result("correlation_histogram", work)
    return result


def fit_peaks(
    histogram: ConductanceHistogram | TraceSet, recipe: Recipe | None = None, work: Work | None = None
) -> PeakTable:
    """Fit the peaks of a histogram.

    Parameters
    ----------
    histogram : ConductanceHistogram or TraceSet
        From traces, intervals come from resampling traces; a bare histogram does not know its traces, so its intervals
        are NaN and ``status`` says so.

    Returns
    -------
    PeakTable
        The columns of ``peaks.csv`` as arrays.
    """
    recipe = recipe or Recipe()
    if isinstance(histogram, TraceSet):
        fit: peaks.PeakFit = Analysis(histogram, recipe).result("peaks", work)
        return fit.table
    return peaks.fit_histogram(histogram, recipe.peaks, None, None, None, work or Work()).table


def defensible_analyses(analysis: Analysis, work: Work | None = None) -> peaks.DefensibleAnalyses:
    """Fit the peaks of an analysis under all combinations of choices that could be defended as well.

    To line shape, background, fit range and bin width come other histograms: without each rule of the selection,
    plateaus found more or less eagerly where rules may ask for them, another region, another zero of displacement.

    Returns
    -------
    DefensibleAnalyses
        One row a peak and analysis, with 95 % intervals, the chosen one marked.

    Raises
    ------
    CallError
        Where no peak is fitted.
    """
    fit: peaks.PeakFit = analysis.result("peaks", work)
    made, drawn = {}, {}
    for name, recipe in _other_recipes(analysis.recipe).items():
        other = analysis.with_recipe(recipe)
        made[name], drawn[name] = other.histogram(work), other.result("resampling", work)
    return peaks.defensible_analyses(made, fit.table, analysis.recipe.peaks, work, drawn)


def _other_recipes(recipe: Recipe) -> dict[str, Recipe]:
    """Return the recipe as chosen, then others that could be defended, each with a name."""
    others = {"as chosen": recipe}
    rules = [rule for rule in recipe.selection.rules if rule.strip()]
    for rule in rules[:_MOST_RULES]:
        rest = [other for other in rules if other != rule]
        others[f"without {rule.strip()}"] = recipe.with_values("selection", rules=rest)
    if rules:
        for step in (-1.0, 1.0):
            value = min(max(recipe.plateaus.sensitivity + step, 0.0), 10.0)
            others[f"sensitivity {value:g}"] = recipe.with_values("plateaus", sensitivity=value)
    if recipe.histogram.region == "phase":
        others["after the zero"] = recipe.with_values("histogram", region="after_zero")
        others["up to the zero"] = recipe.with_values("histogram", region="before_zero")
        return others
    others["whole phase"] = recipe.with_values("histogram", region="phase")
    for factor in (0.6, 1.4):
        level = recipe.alignment.zero_at_g0 * factor
        others[f"zero at {level:.2g} G0"] = recipe.with_values("alignment", zero_at_g0=level)
    return others
