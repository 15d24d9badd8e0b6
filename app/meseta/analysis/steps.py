"""The table of steps: what each step needs, which settings it may see, and how its blocks are worked and put together.

The functions here are adapters, from the table to the functions of the rooms.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from meseta import histograms, intake, peaks, segmentation, selection
from meseta.analysis.choices import calibration_errors, other_counts
from meseta.histograms import CountMatrix, DisplacementHistogram
from meseta.intake import Alignment
from meseta.recipe import Recipe, Section
from meseta.recipe.calibration import CalibrationSettings
from meseta.recipe.selection import SelectionSettings
from meseta.segmentation import NoiseModel, PlateauTable, TraceMeasures
from meseta.selection import Decisions, Selection
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["STEPS", "Inputs", "SettingsView", "Step", "phases_of", "sliced"]


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
    sometimes : mapping of str to callable
        Further steps that it takes where the callable says so of the recipe.
    """

    name: str
    title: str
    version: int
    needs: tuple[str, ...]
    settings: tuple[str, ...]
    combine: Combine
    block: Block | None = None
    channels: tuple[str, ...] = ("conductance",)
    sometimes: Mapping[str, Callable[[Recipe], bool]] = field(default_factory=dict)

    def needed(self, recipe: Recipe) -> tuple[str, ...]:
        """Return the steps whose results it takes under a recipe."""
        return (*self.needs, *(name for name, wanted in self.sometimes.items() if wanted(recipe)))


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
    return CountMatrix.joined(parts)


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
        inputs["displacement_zero"],
    )


def _displacement_zero(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, __: Work) -> Any:
    return histograms.displacement_zero(
        traces, settings.displacement_histogram, inputs["alignment"], inputs.get("plateaus")
    )


def _displacement_edges(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, __: Work) -> Any:
    return histograms.displacement_edges(traces, settings.displacement_histogram, inputs["displacement_zero"])


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
        return _displacement_counts(block, settings, sliced(inputs, *span), chosen[span[0] : span[1]])

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
    counts = histograms.with_bins(CountMatrix.joined(parts), settings.histogram, inputs["noise"])
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


def _slope_histogram(_: Iterator[Any], traces: TraceSet, __: SettingsView, inputs: Inputs, ___: Work) -> Any:
    return histograms.slope_histogram(inputs["measures"].tunnelling_slope, inputs["selection"].kept, traces.drive.unit)


def _plateau_histogram(_: Iterator[Any], __: TraceSet, settings: SettingsView, inputs: Inputs, ___: Work) -> Any:
    return histograms.plateau_histogram(
        inputs["plateaus"],
        inputs["counts"].shown,
        inputs["resampling"],
        settings.histogram.plateaus_by_length,
        settings.histogram.weak_traces,
    )


def _other_counts(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, work: Work) -> Any:
    return other_counts(traces, settings, inputs, phases_of(settings.histogram.direction), work)


def _blank(traces: TraceSet, settings: SettingsView, inputs: Inputs) -> Any:
    """Return which traces are a blank's, for a background made of them; None where that is not asked for."""
    if settings.peaks.background != "template" or not settings.peaks.blank.strip():
        return None
    rule = SelectionSettings(rules=[settings.peaks.blank])
    return selection.select(
        traces, rule, inputs["measures"], inputs["plateaus"], Decisions(), settings.histogram.direction
    ).kept


def _peaks(_: Iterator[Any], traces: TraceSet, settings: SettingsView, inputs: Inputs, work: Work) -> Any:
    return peaks.fit_histogram(
        inputs["histogram"],
        settings.peaks,
        inputs["resampling"],
        inputs["counts"],
        inputs["plateaus"].take(inputs["selection"].kept[inputs["plateaus"].trace]),
        work,
        floor=peaks.Floor.of(inputs["noise"]),
        blank=_blank(traces, settings, inputs),
        others=inputs["other_counts"],
        calibration=calibration_errors(settings.calibration, traces),
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
        Step("alignment", "finding the rupture", 2, (), ("alignment", _PHASE), _alignment, _alignment_block),
        Step(
            "plateaus", "finding plateaus", 5, ("noise", "alignment"), ("plateaus", _PHASE), _plateaus, _plateaus_block
        ),
        Step(
            "measures",
            "measuring traces",
            3,
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
            "displacement_zero",
            "aligning the 2D histogram",
            1,
            ("alignment",),
            tuple(f"displacement_histogram.{name}" for name in ("aligned_at", "event_low_g0", "event_high_g0")),
            _displacement_zero,
            sometimes={"plateaus": lambda recipe: recipe.displacement_histogram.aligned_at != "zero"},
        ),
        Step(
            "displacement_edges",
            "choosing the displacement axis",
            1,
            ("displacement_zero",),
            ("displacement_histogram",),
            _displacement_edges,
        ),
        Step(
            "displacement_all",
            "building the 2D histogram",
            1,
            ("noise", "alignment", "displacement_zero", "displacement_edges"),
            ("displacement_histogram", *_STORED, "histogram.low_g0", "histogram.high_g0"),
            _displacement_all,
            _displacement_all_block,
        ),
        Step(
            "displacement_histogram",
            "selecting in the 2D histogram",
            1,
            ("noise", "alignment", "displacement_zero", "selection", "displacement_edges", "displacement_all"),
            ("displacement_histogram", *_STORED, "histogram.low_g0", "histogram.high_g0"),
            _displacement,
        ),
        Step(
            "correlation_histogram",
            "correlating",
            2,
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
        Step("slope_histogram", "measuring slopes", 1, ("measures", "selection"), (), _slope_histogram),
        Step(
            "plateau_histogram",
            "counting plateaus",
            1,
            ("plateaus", "counts", "resampling"),
            ("histogram.plateaus_by_length", "histogram.weak_traces"),
            _plateau_histogram,
        ),
        Step(
            "other_counts",
            "trying other choices",
            1,
            ("counts", "selection", "measures", "plateaus", "noise", "alignment", "decisions"),
            ("histogram", "alignment", "plateaus", "selection"),
            _other_counts,
        ),
        Step(
            "peaks",
            "fitting peaks",
            4,
            ("histogram", "resampling", "counts", "plateaus", "measures", "selection", "noise", "other_counts"),
            (
                "peaks",
                _PHASE,
                "calibration.bias_volt",
                *(f"calibration.{name}" for name in CalibrationSettings.errors),
            ),
            _peaks,
        ),
    )
}
"""Every step, in an order in which each comes after what it needs."""


def sliced(inputs: Inputs, first: int, last: int) -> dict[str, Any]:
    """Return the inputs with those that have one row a trace cut to a block."""
    return {name: value.block(first, last) if hasattr(value, "block") else value for name, value in inputs.items()}
