"""What other choices of the analysis would have counted: the systematic part of peak positions.

Each other choice is compared with the one that was made on the same traces, so that the difference is no chance.
Region and zero of displacement, which need the samples again, are tried on at most 2,000 traces spread over the record.
"""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta import histograms, intake, segmentation, selection
from meseta.histograms import CountMatrix
from meseta.histograms.resampling import replicate_counts
from meseta.intake import Alignment
from meseta.peaks import CalibrationErrors, OtherCounts
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["calibration_errors", "other_counts"]

Rows = npt.NDArray[np.int64]
Floats = npt.NDArray[np.float64]
Inputs = Mapping[str, Any]

_MOST_TRACES: Final = 2000
_BATCH: Final = 250
_ZERO_FACTORS: Final = (0.6, 1.4)
_MOST_RULES: Final = 8


def other_counts(traces: TraceSet, settings: Any, inputs: Inputs, phases: tuple[str, ...], work: Work) -> Any:
    """Return the counts under other regions, zeros of displacement, selections and sensitivities.

    Parameters
    ----------
    traces : TraceSet
    settings : SettingsView
        Sections ``histogram``, ``alignment``, ``plateaus``, ``selection``.
    inputs : mapping
        ``counts``, ``selection``, ``measures``, ``plateaus``, ``noise``, ``alignment``, ``decisions``.
    phases : tuple of str
        Phases that take part.
    work : Work

    Returns
    -------
    tuple of OtherCounts
    """
    counts, kept = inputs["counts"], inputs["selection"].kept
    if counts.grid.given or not (kept & counts.used).any():
        return ()
    rows = _spread(np.flatnonzero(kept & counts.used))
    made: list[OtherCounts] = []
    variants = _variants(settings)
    reference = _summed(counts, rows, work)
    parts = list(
        work.each(
            lambda span: _counted(traces, settings, inputs, rows[span[0] : span[1]], variants, phases, work.quiet()),
            _spans(len(rows)),
            "trying other regions",
            unit="batches",
        )
    )
    for number, (name, _) in enumerate(variants):
        made.append(OtherCounts(name, np.sum([part[number] for part in parts], axis=0), reference))
    made += _other_selections(traces, settings, inputs, work)
    return tuple(made + _other_sensitivities(traces, settings, inputs, phases, work))


def _spread(rows: Rows) -> Rows:
    """Return at most :data:`_MOST_TRACES` of the rows, evenly spread."""
    if len(rows) <= _MOST_TRACES:
        return rows
    return rows[np.linspace(0, len(rows) - 1, _MOST_TRACES).round().astype(np.int64)]


def _spans(number: int) -> list[tuple[int, int]]:
    edges = np.linspace(0, number, -(-number // _BATCH) + 1).round().astype(int)
    return [(int(a), int(b)) for a, b in pairwise(edges)]


def _aligned(alignment: Alignment, rows: Rows) -> Alignment:
    """Return the rows of some traces."""
    return Alignment(
        alignment.zero_drive[rows], alignment.zero_sample[rows], alignment.status[rows], alignment.level_g0
    )


def _summed(counts: CountMatrix, rows: Rows, work: Work) -> Floats:
    """Return the counts of some traces on the bins of the histogram."""
    summed: Floats = replicate_counts(counts, rows, np.ones((1, len(rows)), np.uint16), work)[0]
    return summed


def _variants(settings: Any) -> list[tuple[str, dict[str, dict[str, Any]]]]:
    """Return the other regions and zeros: name, and changed settings by section."""
    region, zero = settings.histogram.region, settings.alignment.zero_at_g0
    if region == "phase":
        others = {"after_zero": "region after the zero", "before_zero": "region up to the zero"}
    else:
        others = {"phase": "region whole phase"}
    found: list[tuple[str, dict[str, dict[str, Any]]]] = [
        (name, {"histogram": {"region": word}}) for word, name in others.items()
    ]
    if region != "phase":
        found += [
            (f"zero of displacement at {zero * factor:.2g} G0", {"alignment": {"zero_at_g0": zero * factor}})
            for factor in _ZERO_FACTORS
        ]
    return found


def _counted(
    traces: TraceSet,
    settings: Any,
    inputs: Inputs,
    rows: Rows,
    variants: list[tuple[str, dict[str, dict[str, Any]]]],
    phases: tuple[str, ...],
    work: Work,
) -> list[Floats]:
    """Return the counts of some traces under each variant."""
    some, aligned = traces.only("conductance").take(rows), _aligned(inputs["alignment"], rows)
    results = []
    for _, changed in variants:
        histogram = settings.histogram.model_copy(update=changed.get("histogram", {}))
        alignment = aligned
        if "alignment" in changed:
            alignment = intake.align(some, settings.alignment.model_copy(update=changed["alignment"]), phases)
        matrix = histograms.count_traces(some, histogram, inputs["noise"], alignment, phases)
        shown = histograms.with_bins(matrix, histogram, inputs["noise"])
        results.append(_summed(shown, np.flatnonzero(shown.used), work))
    return results


def _other_selections(traces: TraceSet, settings: Any, inputs: Inputs, work: Work) -> list[OtherCounts]:
    """Return the counts with each rule of the selection left out in turn."""
    counts, kept = inputs["counts"], inputs["selection"].kept
    rules = [rule for rule in settings.selection.rules if rule.strip()]
    reference = _summed(counts, np.flatnonzero(kept & counts.used), work) if rules else np.empty(0)
    made = []
    for rule in rules[:_MOST_RULES]:
        rest = settings.selection.model_copy(update={"rules": [other for other in rules if other != rule]})
        chosen = selection.select(
            traces, rest, inputs["measures"], inputs["plateaus"], inputs["decisions"], settings.histogram.direction
        )
        there = _summed(counts, np.flatnonzero(chosen.kept & counts.used), work)
        made.append(OtherCounts(f"without the rule {rule.strip()}", there, reference))
    return made


def _other_sensitivities(
    traces: TraceSet, settings: Any, inputs: Inputs, phases: tuple[str, ...], work: Work
) -> list[OtherCounts]:
    """Return the counts with plateaus found half and twice as eagerly, where a rule may ask for plateaus."""
    counts = inputs["counts"]
    if not any(rule.strip() for rule in settings.selection.rules):
        return []
    rows = _spread(np.flatnonzero(counts.used))
    some, aligned, measures = traces.take(rows), _aligned(inputs["alignment"], rows), inputs["measures"].take(rows)

    def kept_with(plateaus: Any) -> Rows:
        chosen = selection.select(
            some, settings.selection, measures, plateaus, inputs["decisions"], settings.histogram.direction
        )
        return rows[chosen.kept]

    made = []
    own = settings.plateaus.sensitivity
    reference: Floats | None = None
    for step in (0.0, -1.0, 1.0):
        value = float(np.clip(own + step, 0.0, 10.0))
        changed = settings.plateaus.model_copy(update={"sensitivity": value})
        spans = _spans(len(rows))

        def found(span: tuple[int, int], changed: Any = changed) -> Any:
            inside = aligned.block(*span)
            return segmentation.find_plateaus(some.block(*span), changed, inputs["noise"], inside, phases)

        parts = list(work.each(found, spans, "trying other sensitivities", unit="batches"))
        plateaus = segmentation.PlateauTable.joined(parts, [first for first, _ in spans])
        there = _summed(counts, kept_with(plateaus), work)
        if reference is None:
            reference = there
        elif value != own:
            made.append(OtherCounts(f"sensitivity to plateaus {value:g}", there, reference))
    return made


def calibration_errors(calibration: Any, traces: TraceSet) -> CalibrationErrors:
    """Return the standard errors of the calibration: as stated, else as the recording shows them, else 0."""
    return CalibrationErrors(**intake.calibration_errors(traces, calibration).of_positions())
