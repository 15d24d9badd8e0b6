"""Analysis: runs the steps of a Recipe over a TraceSet and recomputes only what a change touches.

One table of steps (:data:`STEPS`) says everything: what each step needs, which settings it may see, how one block of
traces is worked, and how the blocks are put together in trace order.  A result's key is the hash of the traces, the
step's version, the settings it may see and the keys of what it needs; so an edit leaves every other key alone, undo is
a cache hit, and any number of threads gives the same bits.
"""

from __future__ import annotations

import hashlib
import threading
from collections import OrderedDict
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from meseta import histograms, intake, peaks, segmentation, selection
from meseta.errors import CallError, nearest
from meseta.histograms import (
    Comparison,
    ConductanceHistogram,
    CorrelationHistogram,
    CountMatrix,
    DisplacementHistogram,
    Yield,
)
from meseta.intake import Alignment
from meseta.peaks import PeakTable
from meseta.recipe import Recipe, Section
from meseta.segmentation import NoiseModel, PlateauTable, TraceMeasures
from meseta.selection import Decisions, Selection
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = [
    "STEPS",
    "Analysis",
    "Step",
    "compare_parts",
    "compare_recordings",
    "conductance_histogram",
    "correlation_histogram",
    "defensible_analyses",
    "displacement_histogram",
    "find_plateaus",
    "fit_peaks",
    "phases_of",
    "yield_in_window",
]


class SettingsView:
    """The part of a recipe that a step declared, and nothing else."""

    def __init__(self, recipe: Recipe, names: Sequence[str]) -> None:
        self._recipe, self._names = recipe, frozenset(names)

    def __getattr__(self, name: str) -> Any:
        if name in self._names:
            return getattr(self._recipe, name)
        fields = [entry.partition(".")[2] for entry in self._names if entry.startswith(f"{name}.")]
        if not fields:
            raise AttributeError(f"this step did not declare the settings section '{name}'")
        return _FieldView(getattr(self._recipe, name), frozenset(fields))


class _FieldView:
    def __init__(self, section: Section, fields: frozenset[str]) -> None:
        self._section, self._fields = section, fields

    def __getattr__(self, name: str) -> Any:
        if name not in self._fields:
            raise AttributeError(f"this step did not declare the setting '{name}'")
        return getattr(self._section, name)


Inputs = Mapping[str, Any]
Block = Callable[[TraceSet, SettingsView, Inputs], Any]
Combine = Callable[[Iterator[Any], TraceSet, SettingsView, Inputs, Work], Any]


@dataclass(frozen=True)
class Step:
    """One step of the analysis.

    Attributes
    ----------
    name, title : str
        Key, and name as users read it ("finding plateaus").
    version : int
        Raised when the method changes, so that kept results are not mistaken for new ones.
    needs : tuple of str
        Steps whose results it takes; ``"decisions"`` stands for the decisions by hand.
    settings : tuple of str
        ``section`` or ``section.field`` that it may see.
    combine : callable
        Puts the blocks' results together, in trace order; does the whole work where ``block`` is None.
    block : callable, optional
        Pure function of one block of traces.
    channels : tuple of str
        Channels that ``block`` reads.
    """

    name: str
    title: str
    version: int
    needs: tuple[str, ...]
    settings: tuple[str, ...]
    combine: Combine
    block: Block | None = None
    channels: tuple[str, ...] = ("conductance",)


# -- adapters: from the table of steps to the functions of the rooms ------------------------------------------------


def phases_of(direction: str) -> tuple[str, ...]:
    """Return the phases in which traces of this direction are analysed."""
    return ("push",) if direction == "closing" else ("pull",)


def _noise_block(traces: TraceSet, settings: SettingsView, _: Inputs) -> Any:
    return segmentation.noise_block(traces, settings.noise, phases_of(settings.histogram.direction))


def _noise(parts: Iterator[Any], _: TraceSet, settings: SettingsView, __: Inputs, ___: Work) -> NoiseModel:
    return segmentation.noise_model(list(parts), settings.noise)


def _alignment_block(traces: TraceSet, settings: SettingsView, _: Inputs) -> Alignment:
    return intake.align(traces, settings.alignment, phases_of(settings.histogram.direction))


def _alignment(parts: Iterator[Any], _: TraceSet, __: SettingsView, ___: Inputs, ____: Work) -> Alignment:
    return Alignment.joined(list(parts))


def _plateaus_block(traces: TraceSet, settings: SettingsView, inputs: Inputs) -> PlateauTable:
    return segmentation.find_plateaus(
        traces, settings.plateaus, inputs["noise"], inputs["alignment"], phases_of(settings.histogram.direction)
    )


def _plateaus(parts: Iterator[Any], traces: TraceSet, _: SettingsView, __: Inputs, work: Work) -> PlateauTable:
    firsts = [first for first, _ in traces.blocks(work)]
    return PlateauTable.joined(list(parts), firsts)


def _measures_block(traces: TraceSet, settings: SettingsView, inputs: Inputs) -> TraceMeasures:
    return segmentation.measure_traces(
        traces,
        settings.lengths,
        inputs["noise"],
        inputs["alignment"],
        phases_of(settings.histogram.direction),
        settings.calibration.displacement_from,
    )


def _measures(parts: Iterator[Any], _: TraceSet, __: SettingsView, ___: Inputs, ____: Work) -> TraceMeasures:
    return TraceMeasures.concatenate(list(parts))


def _selection(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, __: Work) -> Selection:
    return selection.select(
        traces,
        settings.selection,
        inputs["measures"],
        inputs["plateaus"],
        inputs["decisions"],
        settings.histogram.direction,
    )


def _counts_block(traces: TraceSet, settings: SettingsView, inputs: Inputs) -> CountMatrix:
    return histograms.count_traces(
        traces,
        settings.histogram,
        inputs["noise"],
        inputs["alignment"],
        phases_of(settings.histogram.direction),
    )


def _fine_counts(parts: Iterator[Any], _: TraceSet, __: SettingsView, ___: Inputs, ____: Work) -> CountMatrix:
    return CountMatrix.joined(list(parts))


def _counts(_: Iterator[Any], __: TraceSet, settings: SettingsView, inputs: Inputs, ___: Work) -> CountMatrix:
    return histograms.with_bins(inputs["fine_counts"], settings.histogram, inputs["noise"])


def _resampling(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, work: Work) -> Any:
    return histograms.resample(
        inputs["counts"], inputs["selection"].kept, traces.table, settings.histogram, settings.resampling, work
    )


def _histogram(_: Iterator[Any], __: TraceSet, settings: SettingsView, inputs: Inputs, ___: Work) -> Any:
    result = histograms.conductance_histogram(
        inputs["counts"], inputs["selection"].kept, settings.histogram, inputs["resampling"]
    )
    return replace(result, notes=histograms.bin_notes(result.grid, inputs["noise"]))


def _displacement_counts(traces: TraceSet, settings: SettingsView, inputs: Inputs, kept: Any) -> DisplacementHistogram:
    return histograms.displacement_counts(
        traces,
        settings.displacement_histogram,
        settings.histogram,
        inputs["noise"],
        inputs["alignment"],
        kept,
        phases_of(settings.histogram.direction),
        inputs["displacement_edges"],
    )


def _displacement_edges(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, __: Work) -> Any:
    return histograms.displacement_edges(traces, settings.displacement_histogram, inputs["alignment"])


def _displacement_all_block(traces: TraceSet, settings: SettingsView, inputs: Inputs) -> DisplacementHistogram:
    return _displacement_counts(traces, settings, inputs, np.ones(traces.traces, bool))


def _displacement_all(
    parts: Iterator[Any], _: TraceSet, __: SettingsView, ___: Inputs, ____: Work
) -> DisplacementHistogram:
    return DisplacementHistogram.summed(parts)


def _displacement(
    _: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, work: Work
) -> DisplacementHistogram:
    """Count the smaller of the selection and its complement, and take the rest from the whole."""

    def count(span: tuple[int, int], chosen: Any) -> DisplacementHistogram:
        block = traces.only("conductance").block(*span)
        return _displacement_counts(block, settings, _sliced(inputs, *span), chosen[span[0] : span[1]])

    return histograms.displacement_of_selection(
        inputs["displacement_all"], inputs["selection"].kept, count, traces.blocks(work), work
    )


def _correlation(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, work: Work) -> Any:
    return histograms.correlation_histogram(
        inputs["counts"],
        inputs["selection"].kept,
        settings.correlation,
        inputs["noise"],
        settings.resampling.seed,
        work,
    )


def _partner_block(traces: TraceSet, settings: SettingsView, inputs: Inputs) -> CountMatrix:
    other = phases_of("opening" if settings.histogram.direction == "closing" else "closing")
    alignment = intake.align(traces, settings.alignment, other)
    return histograms.count_traces(traces, settings.histogram, inputs["noise"], alignment, other)


def _partners(parts: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, __: Work) -> Any:
    counts = histograms.with_bins(CountMatrix.joined(list(parts)), settings.histogram, inputs["noise"])
    row = histograms.partner_rows(traces.table, counts.used)
    return histograms.Partners(counts, row, settings.histogram.direction)


def _opening_closing(_: Iterator[Any], __: TraceSet, settings: SettingsView, inputs: Inputs, work: Work) -> Any:
    return histograms.opening_closing_correlation(
        inputs["counts"],
        inputs["partners"],
        inputs["selection"].kept,
        settings.correlation,
        inputs["noise"],
        settings.resampling.seed,
        work,
    )


def _shifted(_: Iterator[Any], __: TraceSet, settings: SettingsView, inputs: Inputs, ___: Work) -> Any:
    return histograms.shifted_correlations(
        inputs["counts"], inputs["selection"].kept, settings.correlation, inputs["noise"]
    )


def _temporal(_: Iterator[Any], __: TraceSet, settings: SettingsView, inputs: Inputs, ___: Work) -> Any:
    return histograms.temporal_histogram(inputs["counts"], inputs["selection"].kept, settings.temporal)


def _record_memory(_: Iterator[Any], __: TraceSet, ___: SettingsView, inputs: Inputs, ____: Work) -> Any:
    return histograms.record_memory(inputs["counts"], inputs["selection"].kept)


def _drift(_: Iterator[Any], __: TraceSet, ___: SettingsView, inputs: Inputs, ____: Work) -> Any:
    noise = inputs["noise"]
    return histograms.drift_of(inputs["counts"], inputs["selection"].kept, noise.floor_g0 + 6 * noise.floor_sigma_g0)


def _length_histograms(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, __: Work) -> Any:
    return histograms.plateau_lengths(
        inputs["plateaus"], inputs["measures"], inputs["selection"].kept, traces.drive.unit, settings.lengths
    )


def _plateau_histogram(_: Iterator[Any], __: TraceSet, settings: SettingsView, inputs: Inputs, ___: Work) -> Any:
    return histograms.plateau_histogram(
        inputs["plateaus"],
        inputs["counts"].shown,
        inputs["resampling"],
        settings.histogram.plateaus_by_length,
        settings.histogram.weak_traces,
    )


def _peaks(_: Iterator[Any], __: TraceSet, settings: SettingsView, inputs: Inputs, work: Work) -> Any:
    return peaks.fit_histogram(
        inputs["histogram"],
        settings.peaks,
        inputs["resampling"],
        inputs["counts"],
        inputs["plateaus"].take(inputs["selection"].kept[inputs["plateaus"].trace]),
        work,
        floor=peaks.Floor.of(inputs["noise"]),
    )


_PHASE = "histogram.direction"
_AXIS = (
    "histogram.axis",
    "histogram.stored_bins_per_decade",
    "histogram.stored_bin_width_g0",
    "histogram.stored_low_g0",
    "histogram.stored_high_g0",
    "histogram.edges_g0",
)
_STORED = (
    *_AXIS,
    "histogram.region",
    "histogram.floor_tail_second",
    "histogram.region_low_nm",
    "histogram.region_high_nm",
    _PHASE,
)
_BINS = (*_AXIS, "histogram.low_g0", "histogram.high_g0", "histogram.bins_per_decade", "histogram.bin_width_g0")

STEPS: Mapping[str, Step] = {
    step.name: step
    for step in (
        Step("noise", "learning the noise", 2, (), ("noise", _PHASE), _noise, _noise_block),
        Step("alignment", "finding the rupture", 1, (), ("alignment", _PHASE), _alignment, _alignment_block),
        Step(
            "plateaus", "finding plateaus", 2, ("noise", "alignment"), ("plateaus", _PHASE), _plateaus, _plateaus_block
        ),
        Step(
            "measures",
            "measuring traces",
            2,
            ("noise", "alignment"),
            ("lengths", _PHASE, "calibration.displacement_from"),
            _measures,
            _measures_block,
        ),
        Step(
            "selection", "selecting traces", 1, ("measures", "plateaus", "decisions"), ("selection", _PHASE), _selection
        ),
        Step("fine_counts", "counting samples", 1, ("noise", "alignment"), _STORED, _fine_counts, _counts_block),
        Step("counts", "choosing bins", 1, ("fine_counts", "noise"), _BINS, _counts),
        Step("resampling", "resampling", 1, ("counts", "selection"), ("resampling", "histogram"), _resampling),
        Step(
            "histogram",
            "building the histogram",
            1,
            ("counts", "selection", "resampling", "noise"),
            ("histogram",),
            _histogram,
        ),
        Step(
            "displacement_edges",
            "choosing the displacement axis",
            1,
            ("alignment",),
            ("displacement_histogram",),
            _displacement_edges,
        ),
        Step(
            "displacement_all",
            "building the 2D histogram",
            1,
            ("noise", "alignment", "displacement_edges"),
            ("displacement_histogram", *_STORED, "histogram.low_g0", "histogram.high_g0"),
            _displacement_all,
            _displacement_all_block,
        ),
        Step(
            "displacement_histogram",
            "selecting in the 2D histogram",
            1,
            ("noise", "alignment", "selection", "displacement_edges", "displacement_all"),
            ("displacement_histogram", *_STORED, "histogram.low_g0", "histogram.high_g0"),
            _displacement,
        ),
        Step(
            "correlation_histogram",
            "correlating",
            1,
            ("counts", "selection", "noise"),
            ("correlation", "resampling.seed"),
            _correlation,
        ),
        Step(
            "partners",
            "counting the other direction",
            1,
            ("noise",),
            tuple(dict.fromkeys(("alignment", *_STORED, *_BINS))),
            _partners,
            _partner_block,
        ),
        Step(
            "opening_closing",
            "correlating opening with closing",
            1,
            ("counts", "partners", "selection", "noise"),
            ("correlation", "resampling.seed"),
            _opening_closing,
        ),
        Step(
            "shifted_correlation",
            "comparing traces with later ones",
            1,
            ("counts", "selection", "noise"),
            ("correlation",),
            _shifted,
        ),
        Step("temporal_histogram", "following the record", 1, ("counts", "selection"), ("temporal",), _temporal),
        Step("record_memory", "looking for memory", 1, ("counts", "selection"), (), _record_memory),
        Step("drift", "looking for drift", 1, ("counts", "selection", "noise"), (), _drift),
        Step(
            "length_histograms",
            "measuring lengths",
            1,
            ("plateaus", "measures", "selection"),
            ("lengths",),
            _length_histograms,
        ),
        Step(
            "plateau_histogram",
            "counting plateaus",
            1,
            ("plateaus", "counts", "resampling"),
            ("histogram.plateaus_by_length", "histogram.weak_traces"),
            _plateau_histogram,
        ),
        Step(
            "peaks",
            "fitting peaks",
            2,
            ("histogram", "resampling", "counts", "plateaus", "selection", "noise"),
            ("peaks",),
            _peaks,
        ),
    )
}
"""Every step, in an order in which each comes after what it needs."""


# -- results kept -----------------------------------------------------------------------------------------------------


class _Store:
    """Results by key, a few a step; shared by all analyses made from one another."""

    def __init__(self, kept_a_step: int = 8) -> None:
        self._kept, self._lock = kept_a_step, threading.Lock()
        self._results: dict[str, OrderedDict[str, Any]] = {}

    def get(self, step: str, key: str) -> Any:
        with self._lock:
            results = self._results.get(step, OrderedDict())
            if key in results:
                results.move_to_end(key)
            return results.get(key)

    def put(self, step: str, key: str, result: Any) -> None:
        with self._lock:
            results = self._results.setdefault(step, OrderedDict())
            results[key] = result
            while len(results) > self._kept:
                results.popitem(last=False)


@dataclass(frozen=True)
class Analysis:
    """The steps of a recipe over a set of traces.  Immutable; results are computed when asked for, once.

    Parameters
    ----------
    traces : TraceSet
    recipe : Recipe
    decisions : Decisions
        What was decided by hand.
    """

    traces: TraceSet
    recipe: Recipe = field(default_factory=Recipe)
    decisions: Decisions = field(default_factory=Decisions)
    _store: _Store = field(default_factory=_Store, repr=False, compare=False)

    def with_recipe(self, recipe: Recipe) -> Analysis:
        """Return the analysis with another recipe; results whose settings did not change are kept."""
        return Analysis(self.traces, recipe, self.decisions, self._store)

    def with_decisions(self, decisions: Decisions) -> Analysis:
        """Return the analysis with other decisions by hand."""
        return Analysis(self.traces, self.recipe, decisions, self._store)

    def with_traces(self, traces: TraceSet) -> Analysis:
        """Return the analysis over other traces (a corrected calibration, more files)."""
        return Analysis(traces, self.recipe, self.decisions, self._store)

    def key(self, name: str) -> str:
        """Return the key of a step's result: equal keys mean equal results."""
        if name == "decisions":
            return self.decisions.key()
        step = _step(name)
        parts = [self.traces.key, name, str(step.version), self.recipe.key(step.settings)]
        parts += [self.key(needed) for needed in step.needs]
        return hashlib.sha256("\n".join(parts).encode()).hexdigest()

    def ready(self, name: str) -> bool:
        """Return whether a step's result is at hand."""
        return self._store.get(name, self.key(name)) is not None

    def result(self, name: str, work: Work | None = None) -> Any:
        """Return the result of a step, computing it and what it needs if they are not at hand.

        Parameters
        ----------
        name : str
            A name in :data:`STEPS`.
        work : Work, optional
            Threads, progress, cancel.

        Raises
        ------
        CallError
            Where there is no such step.
        Cancelled
            Where the user stopped the work.
        """
        if name == "decisions":
            return self.decisions
        step, key, work = _step(name), self.key(name), work or Work()
        found = self._store.get(name, key)
        if found is not None:
            return found
        inputs = {needed: self.result(needed, work) for needed in step.needs}
        work.check()
        view = SettingsView(self.recipe, step.settings)
        result = step.combine(self._parts(step, view, inputs, work), self.traces, view, inputs, work)
        self._store.put(name, key, result)
        return result

    def _parts(self, step: Step, view: SettingsView, inputs: Inputs, work: Work) -> Iterator[Any]:
        if step.block is None:
            return iter(())
        block, source = step.block, self.traces.only(*step.channels)
        spans = source.blocks(work)

        def one(span: tuple[int, int]) -> Any:
            return block(source.block(*span), view, _sliced(inputs, *span))

        return work.each(one, spans, step.title, sizes=[last - first for first, last in spans])

    def preview(self, name: str, trace: int, work: Work | None = None) -> Any:
        """Return a step's result for one trace alone, by the same ``block`` function that does all traces.

        What the step needs of the whole recording (the noise model, say) is taken as it stands or computed.
        """
        step, work = _step(name), work or Work()
        if step.block is None:
            raise CallError(f"'{step.title}' looks at all traces together", "preview", "ask for its result")
        inputs: dict[str, Any] = {}
        for needed in step.needs:
            per_trace = needed in STEPS and STEPS[needed].block is not None and needed != "noise"
            inputs[needed] = (
                self.preview(needed, trace, work)
                if per_trace and not self.ready(needed)
                else _sliced({needed: self.result(needed, work)}, trace, trace + 1)[needed]
            )
        view = SettingsView(self.recipe, step.settings)
        one = self.traces.only(*step.channels).block(trace, trace + 1)
        return step.combine(iter([step.block(one, view, inputs)]), one, view, inputs, work.quiet())

    # Typed shorthands for the results that users ask for by name.

    def noise(self, work: Work | None = None) -> NoiseModel:
        """Return the noise model of the recording."""
        result: NoiseModel = self.result("noise", work)
        return result

    def plateaus(self, work: Work | None = None) -> PlateauTable:
        """Return the plateaus of all traces."""
        result: PlateauTable = self.result("plateaus", work)
        return result

    def selection(self, work: Work | None = None) -> Selection:
        """Return which traces take part, and why others do not."""
        result: Selection = self.result("selection", work)
        return result

    def histogram(self, work: Work | None = None) -> ConductanceHistogram:
        """Return the 1D conductance histogram of the selected traces."""
        result: ConductanceHistogram = self.result("histogram", work)
        return result


def _step(name: str) -> Step:
    try:
        return STEPS[name]
    except KeyError:
        raise CallError(f"there is no step '{name}'", "analysis", nearest(name, STEPS)) from None


def _sliced(inputs: Inputs, first: int, last: int) -> dict[str, Any]:
    """Return the inputs with those that have one row a trace cut to a block."""
    return {name: value.block(first, last) if hasattr(value, "block") else value for name, value in inputs.items()}


# -- the functions of a notebook ------------------------------------------------------------------------------------


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


def defensible_analyses(analysis: Analysis, work: Work | None = None) -> peaks.DefensibleAnalyses:
    """Fit the peaks of an analysis under all combinations of choices that could be defended as well.

    To line shape, background, fit range and bin width come other histograms: all traces instead of the selected ones,
    another zero of displacement, another region.  Returns one row a peak and analysis, the chosen one marked.
    """
    recipe = analysis.recipe
    others = {"as chosen": recipe}
    if recipe.selection.rules:
        others["no selection"] = recipe.with_values("selection", rules=[])
    if recipe.histogram.region == "phase":
        others["from the rupture on"] = recipe.with_values("histogram", region="after_zero")
        others["up to the rupture"] = recipe.with_values("histogram", region="before_zero")
    else:
        others["whole phase"] = recipe.with_values("histogram", region="phase")
        for factor in (0.6, 1.4):
            level = recipe.alignment.zero_at_g0 * factor
            others[f"zero at {level:.2g} G0"] = recipe.with_values("alignment", zero_at_g0=level)
    made = {name: analysis.with_recipe(other).histogram(work) for name, other in others.items()}
    fit: peaks.PeakFit = analysis.result("peaks", work)
    return peaks.defensible_analyses(made, fit.table, recipe.peaks, work)
