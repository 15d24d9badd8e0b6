"""Comparisons: parts of a recording or several recordings on one axis, and the molecular yield against a blank."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from meseta import histograms
from meseta.analysis.core import Analysis
from meseta.errors import CallError, nearest
from meseta.histograms import Comparison, Yield
from meseta.selection import Selection
from meseta.work import Work

__all__ = ["compare_parts", "compare_recordings", "yield_in_window"]


def compare_parts(
    analysis: Analysis, masks: str | Mapping[str, Any] = "selection", work: Work | None = None
) -> Comparison:
    """Put parts of one recording on one axis, each with its band.

    Parameters
    ----------
    analysis : Analysis
    masks : str or mapping of str to (traces,) bool
        "selection": the kept traces and the others of the same direction; "group": groups of traces; the name of a
        column of the trace table ("specimen", "session", "molecule" ...): its values; or the parts themselves, by name
        (kept traces and :data:`~meseta.selection` masks; nothing is taken off them).

    Returns
    -------
    meseta.histograms.Comparison
        ``comparison.difference(0, 1)`` is the difference of two parts with its band.
    """
    work = work or Work()
    counts, selection, table = analysis.result("counts", work), analysis.selection(work), analysis.traces.table
    if isinstance(masks, str):
        masks = _named_masks(masks, selection, counts.used, table)
    settings = analysis.recipe.histogram
    members, shared = histograms.members_of(counts, masks, table, settings, analysis.recipe.resampling, work)
    return histograms.compared(members, settings, shared)


def _named_masks(name: str, selection: Selection, used: Any, table: Mapping[str, Any]) -> dict[str, Any]:
    if name == "selection":
        return {"kept": selection.kept & used, "not kept": ~selection.kept & used}
    if name == "group":
        return histograms.parts_by(selection.group, selection.kept & used)
    if name not in table:
        raise CallError(f"the trace table has no column '{name}'", "comparison", nearest(name, table))
    return histograms.parts_by(table[name], selection.kept & used)


def compare_recordings(analyses: Mapping[str, Analysis], work: Work | None = None) -> Comparison:
    """Put several recordings on one axis, each with its own selection and band.

    Parameters
    ----------
    analyses : mapping of str to Analysis
        By the name that the comparison shows.  The first one's normalisation is used for all; bins must have the same
        width.

    Returns
    -------
    meseta.histograms.Comparison
    """
    work = work or Work()
    members = [
        histograms.Member(name, one.result("counts", work), one.selection(work).kept, one.result("resampling", work))
        for name, one in analyses.items()
    ]
    if not members:
        raise CallError("there is nothing to compare", "comparison", "give at least one recording")
    first = next(iter(analyses.values()))
    return histograms.compared(members, first.recipe.histogram)


def yield_in_window(
    analysis: Analysis,
    window_g0: tuple[float, float],
    blank: Analysis | None = None,
    efficiency: float = 1.0,
    efficiency_error: float = 0.0,
    work: Work | None = None,
) -> Yield:
    """Return the share of kept traces with a molecule: those with a plateau in a window, less what a blank shows.

    Parameters
    ----------
    analysis : Analysis
    window_g0 : (low, high)
        Conductance of the molecule's plateaus.
    blank : Analysis, optional
        Of a recording without the molecule; its plateaus must be found with the same ``[plateaus]`` settings.
    efficiency, efficiency_error : float
        See :func:`meseta.histograms.molecular_yield` and :func:`meseta.histograms.window_efficiency`.

    Raises
    ------
    CallError
        Where the blank's plateaus are found with other settings.
    """
    if blank is not None and blank.recipe.key(("plateaus",)) != analysis.recipe.key(("plateaus",)):
        raise CallError(
            "plateaus of the blank are found with other settings", "molecular yield", "use one recipe for both"
        )
    hit, specimen = _hits(analysis, window_g0, work)
    blank_hit, blank_specimen = (None, None) if blank is None else _hits(blank, window_g0, work)
    return histograms.molecular_yield(hit, blank_hit, efficiency, efficiency_error, specimen, blank_specimen)


def _hits(analysis: Analysis, window_g0: tuple[float, float], work: Work | None) -> tuple[Any, Any]:
    """Return of every kept trace whether it has a plateau in the window, and its specimen."""
    kept = analysis.selection(work).kept
    hit = histograms.hits_in_window(analysis.plateaus(work), analysis.traces.traces, window_g0)
    return hit[kept], analysis.traces.table["specimen"][kept]
