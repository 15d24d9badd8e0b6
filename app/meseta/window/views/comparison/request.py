"""What is compared, and the work of comparing: plain functions of frozen inputs, run off the window's thread."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from meseta.errors import CallError
from meseta.recipe import Recipe
from meseta.window.opening import open_paths
from meseta.window.subset import mask_of
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.histograms import Comparison, Difference, Yield

__all__ = ["MOST_PARTS", "SOURCES", "Compared", "Question", "answer", "read_beside"]

SOURCES = {
    "conditions": "selected traces and the others",
    "selection": "kept traces and those not kept",
    "group": "groups",
    "specimen": "specimens",
    "session": "sessions",
    "recording": "recordings",
}
"""What can be put on one axis, in words."""
MOST_PARTS = 8
Range = tuple[float, float]


@dataclass(frozen=True)
class Question:
    """What is to be compared.

    Attributes
    ----------
    source : str
        A key of :data:`SOURCES`.
    rule : str
        The conditions as a rule, for "conditions".
    window_g0 : (low, high) or None
        Conductance window of the molecule, for the yield and to fit the scale outside it.
    fit_scale : bool
        Whether the second one's scale is fitted where the molecule is not.
    """

    source: str
    rule: str = ""
    window_g0: Range | None = None
    fit_scale: bool = False


@dataclass(frozen=True)
class Compared:
    """What came of it; ``found`` is the yield of the first recording with the second as blank."""

    comparison: Comparison
    difference: Difference | None
    found: Yield | None


def read_beside(paths: Sequence[str], recipe: Recipe, work: Work) -> tuple[str, Analysis]:
    """Read another recording with the settings of the open one, or a study for reading only; return it with its name.

    A study has its own traces, and its own decisions by hand; nothing is written to it.
    """
    from meseta.analysis import Analysis
    from meseta.study import Study, is_study

    if len(paths) == 1 and Path(paths[0]).is_file() and is_study(paths[0]):
        study = Study.open(paths[0], read_only=True)
        traces, decisions = study.traces(work), study.decisions
        study.close()
        return Path(paths[0]).stem, Analysis(traces, recipe, decisions)
    opened = open_paths(paths, recipe, work)
    return opened.name, Analysis(opened.traces, recipe, opened.decisions)


def answer(analysis: Analysis, others: Mapping[str, Analysis], name: str, question: Question, work: Work) -> Compared:
    """Compare.

    Parameters
    ----------
    analysis : Analysis
        Of the open recording.
    others : mapping of str to Analysis
        Recordings opened beside it.
    name : str
        Of the open recording.
    question : Question
    work : Work

    Raises
    ------
    CallError
        Where there is nothing to compare, in words.
    """
    from meseta.analysis import compare_parts, compare_recordings, yield_in_window

    if question.source == "recording":
        comparison = compare_recordings({name: analysis, **others}, work)
    elif question.source == "conditions":
        comparison = _by_conditions(analysis, question.rule, work)
    else:
        _check_parts(analysis, question.source, work)
        comparison = compare_parts(analysis, question.source, work)
    if len(comparison.parts) < 2:
        raise CallError(
            f"there is only one part ({SOURCES[question.source]})", "comparison", _REMEDIES[question.source]
        )
    blank = next(iter(others.values()), None) if question.source == "recording" else None
    found = None
    if blank is not None and question.window_g0 is not None:
        found = yield_in_window(analysis, question.window_g0, blank, work=work)
    return Compared(comparison, _difference(comparison, question), found)


def _check_parts(analysis: Analysis, source: str, work: Work) -> None:
    """Say in words where there are no two parts of this kind."""
    from meseta.histograms import parts_by

    selection, counts = analysis.selection(work), analysis.result("counts", work)
    if source == "selection":
        several = bool((counts.used & ~selection.kept).any() and (counts.used & selection.kept).any())
    else:
        labels = selection.group if source == "group" else analysis.traces.table[source]
        several = len(parts_by(labels, selection.kept & counts.used)) > 1
    if not several:
        raise CallError(f"there are no two parts ({SOURCES[source]})", "comparison", _REMEDIES[source])


_REMEDIES = {
    "conditions": "draw a window that picks some traces and leaves others",
    "selection": "reject traces by a rule or by hand, or compare something else",
    "group": "make groups of traces, or compare something else",
    "specimen": "name specimens in the file check, or compare something else",
    "session": "name sessions in the file check, or compare something else",
    "recording": "open another recording to compare with",
}


def _by_conditions(analysis: Analysis, rule: str, work: Work) -> Comparison:
    from meseta.analysis import compare_parts

    kept = analysis.selection(work).kept
    picked = mask_of(analysis, rule, work)
    parts = {"selected": kept & picked, "others": kept & ~picked}
    return compare_parts(analysis, {key: mask for key, mask in parts.items() if mask.any()}, work)


def _difference(comparison: Comparison, question: Question) -> Difference | None:
    """Return the first part less the second, whose scale is 1 or fitted where the molecule is not."""
    if not question.fit_scale or question.window_g0 is None:
        return comparison.difference(0, 1)
    return comparison.difference(0, 1, scale=None, fit_range_g0=_beside(comparison, question.window_g0))


def _beside(comparison: Comparison, window_g0: Range) -> Range:
    """Return the part of the axis above the window, where no molecule is expected; below it where there is none."""
    low, high = float(comparison.grid.edges_g0[0]), float(comparison.grid.edges_g0[-1])
    return (window_g0[1], high) if window_g0[1] < high else (low, window_g0[0])
