"""Warnings: what a careful reader of the result must know, drawn from the results themselves."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any, Final

import numpy as np

from meseta import typeset
from meseta.analysis import Analysis
from meseta.errors import MesetaError
from meseta.histograms import bin_notes
from meseta.work import Work

__all__ = ["cautions"]

_FEW_TRACES: Final = 500
"""Fewer traces than this need a warning (common practice, no source)."""
_SHARE: Final = 0.05
"""Share of samples or traces left out above which it is said aloud."""


def cautions(analysis: Analysis, bad_files: Sequence[MesetaError] = (), work: Work | None = None) -> list[str]:
    """Return warnings in words, the most general first; empty where there is nothing to warn of.

    Parameters
    ----------
    analysis : Analysis
    bad_files : sequence of MesetaError
        Files that could not be read.
    work : Work, optional
    """
    work = work or Work()
    texts = [*_files(analysis, bad_files), *_traces(analysis, work), *_samples(analysis, work), *_peaks(analysis, work)]
    return list(dict.fromkeys(texts))


def _files(analysis: Analysis, bad_files: Sequence[MesetaError]) -> Iterator[str]:
    if bad_files:
        yield f"{len(bad_files)} of the files given could not be read; the result is without them."
    yield from _texts(analysis.traces.notes.get("warnings", ()))
    assumed = _texts(analysis.traces.notes.get("assumptions", ()))
    if assumed:
        more = f" (and {len(assumed) - 1} more, in the report)" if len(assumed) > 1 else ""
        yield f"Assumed of the recordings: {assumed[0]}{more}."


def _texts(value: Any) -> list[str]:
    return [value] if isinstance(value, str) else [str(entry) for entry in value]


def _traces(analysis: Analysis, work: Work) -> Iterator[str]:
    selection, resampling = analysis.selection(work), analysis.result("resampling", work)
    kept, worth = int(np.sum(selection.kept)), resampling.effective_traces
    if not kept:
        yield "No trace takes part: no rule is met by any trace."
        return
    if kept < _FEW_TRACES:
        yield f"Only {typeset.integer(kept)} traces take part; results from fewer than {_FEW_TRACES} are rough."
    if np.isfinite(worth) and worth < kept / 2:
        reason = f" ({resampling.reason})" if resampling.reason else ""
        yield (
            f"The {typeset.integer(kept)} traces are worth {typeset.integer(round(worth))} independent ones{reason}; "
            "intervals that treat traces as independent would be too narrow."
        )
    if selection.unmatched:
        yield (
            f"{typeset.integer(len(selection.unmatched))} decisions by hand match no trace of this recording; "
            "they were left alone."
        )
    status = analysis.result("alignment", work).status[selection.kept]
    lost = int(np.sum(status != 0))
    if lost > _SHARE * kept:
        yield (
            f"{typeset.integer(lost)} of {typeset.integer(kept)} traces that take part have no zero of displacement "
            "and are missing in the 2D histogram."
        )


def _samples(analysis: Analysis, work: Work) -> Iterator[str]:
    histogram, noise = analysis.histogram(work), analysis.noise(work)
    counted = int(np.sum(histogram.counts))
    everything = counted + sum(histogram.excluded.values())
    words = {
        "saturated": "were left out because the amplifier was saturated",
        "untrusted": "were left out because they are not trusted (slewing, seam of two amplifiers)",
        "nan": "have no conductance",
    }
    for name, text in words.items():
        number = histogram.excluded.get(name, 0)
        if number > _SHARE * everything:
            yield f"{typeset.percent(number, everything)} of the samples {text}."
    if not counted:
        yield "No sample lies in the range of the histogram."
    plateaus = analysis.plateaus(work)
    gaps = int(np.sum(plateaus.missing_samples > 0))
    if gaps > _SHARE * len(plateaus):
        yield (
            f"{typeset.integer(gaps)} of {typeset.integer(len(plateaus))} plateaus have missing or untrusted samples "
            f"inside (at most {typeset.integer(int(plateaus.longest_gap_samples.max()))} in a row; column "
            "missing_samples of plateaus.csv)."
        )
    for note in bin_notes(histogram.grid, noise):
        yield f"{note[:1].upper()}{note[1:]}."


def _peaks(analysis: Analysis, work: Work) -> Iterator[str]:
    fit = analysis.result("peaks", work)
    table = fit.table
    yield from (f"{note[:1].upper()}{note[1:]}." for note in fit.notes)
    if not len(table):
        yield "No peak was fitted."
    for row in range(len(table)):
        if str(table.status[row]) not in ("ok", f"fewer than {_FEW_TRACES} traces"):
            name = str(table.peak[row])
            yield f"Peak {name}: {table.status[row]}." if name else f"Peaks: {table.status[row]}."
