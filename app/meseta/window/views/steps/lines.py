"""One line of result for every step, in words and numbers as printed."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from meseta import typeset
from meseta.window.session import Session

__all__ = ["STEP_OF", "StepLine", "line_of"]

STEP_OF = {
    "alignment": "alignment",
    "noise": "noise",
    "plateaus": "plateaus",
    "selection": "selection",
    "histogram": "histogram",
    "displacement_histogram": "displacement_histogram",
    "correlation": "correlation_histogram",
    "temporal": "counts",
    "lengths": "measures",
    "resampling": "resampling",
    "peaks": "peaks",
}
"""Section of the recipe -> step of the analysis whose state it shows."""


@dataclass(frozen=True)
class StepLine:
    """What a card says under its title, and its state."""

    text: str
    state: str


def line_of(session: Session, section: str) -> StepLine:
    """Return the line of a section."""
    step = STEP_OF.get(section, "")
    if session.traces is None:
        return StepLine("not yet", "none")
    state = session.state(step) if step else _state_of_traces(session, section)
    if state == "failed" and not step:
        return StepLine(session.errors["traces"].what, state)
    if step in session.errors:
        return StepLine(session.errors[step].what, "failed")
    writer = _WRITERS.get(section)
    text = writer(session) if writer is not None and (not step or session.result(step) is not None) else ""
    if not text:
        text = {"working": "working …", "none": "not yet"}.get(state, "")
    elif state == "out of date":
        text = f"out of date · {text}"
    return StepLine(text, state)


def _state_of_traces(session: Session, section: str) -> str:
    """Return whether the traces are made by a section's settings."""
    if section not in session.unmade:
        return "current"
    if "traces" in session.errors:
        return "failed"
    return "working" if session.pipeline.working else "out of date"


def _count(value: int, one: str, many: str | None = None) -> str:
    return f"{typeset.integer(value)} {one if value == 1 else many or one + 's'}"


def _files(session: Session) -> str:
    traces = session.traces
    return "" if traces is None else _count(len(traces.sources), "recording")


def _calibration(session: Session) -> str:
    traces, settings = session.traces, session.document.recipe.calibration
    if traces is None:
        return ""
    bias = np.asarray(traces.table["bias_volt"], float)
    known = bias[np.isfinite(bias)]
    parts = [_bias(known)] if len(known) else []
    if settings.series_resistance_ohm:
        parts.append(f"{typeset.prefixed(settings.series_resistance_ohm, 'ohm')} in series")
    parts.append("displacement in nm" if traces.drive.is_displacement else f"drive in {traces.drive.unit}")
    return ", ".join(parts)


def _bias(volt: npt.NDArray[np.float64]) -> str:
    """Return the bias of all traces: one value, or the lowest and the highest where files state several."""
    lowest, highest = float(volt.min()), float(volt.max())
    if highest - lowest <= 0.02 * max(abs(lowest), abs(highest)):
        return typeset.prefixed(float(np.median(volt)), "V")
    return f"{typeset.prefixed(lowest, 'V')} to {typeset.prefixed(highest, 'V')}"


def _cutting(session: Session) -> str:
    traces = session.traces
    return "" if traces is None else f"{_count(traces.traces, 'trace')}, {_samples(traces.samples)}"


def _samples(count: int) -> str:
    return f"{count / 1e6:.1f} million samples" if count >= 1_000_000 else _count(count, "sample")


def _alignment(session: Session) -> str:
    alignment = session.result("alignment")
    aligned = int(np.count_nonzero(np.isfinite(alignment.zero_drive)))
    of = typeset.integer(len(alignment.zero_drive))
    return f"{typeset.integer(aligned)} of {of} cross {typeset.conductance(alignment.level_g0, 2)}"


def _noise(session: Session) -> str:
    noise = session.result("noise")
    if not noise.floor_traces:
        return f"no floor seen, noise {typeset.conductance(noise.floor_sigma_g0, 2)}"
    return f"floor noise {typeset.conductance(noise.floor_sigma_g0, 2)}"


def _plateaus(session: Session) -> str:
    table = session.result("plateaus")
    return f"{typeset.integer(len(table))} found"


def _selection(session: Session) -> str:
    selection, resampling = session.result("selection"), session.result("resampling")
    kept = int(np.count_nonzero(selection.kept))
    text = f"{typeset.integer(kept)} of {typeset.integer(len(selection.kept))} kept"
    if resampling is not None and session.state("resampling") == "current":
        text += f", worth {typeset.integer(round(resampling.effective_traces))}"
    return text


def _histogram(session: Session) -> str:
    settings, histogram = session.document.recipe.histogram, session.result("histogram")
    bins = (
        f"{settings.bins_per_decade} per decade"
        if histogram.grid.axis == "logarithmic"
        else f"{typeset.conductance(settings.bin_width_g0, 2)} a bin"
    )
    return f"{bins}, {histogram.density_unit.replace(' / ', ' per ').replace('G0', typeset.G0)}"


def _displacement(session: Session) -> str:
    histogram = session.result("displacement_histogram")
    left_out = f", {typeset.integer(histogram.not_aligned)} without zero" if histogram.not_aligned else ""
    return f"{_count(histogram.traces, 'trace')}{left_out}"


def _correlation(session: Session) -> str:
    correlation = session.result("correlation_histogram")
    if np.isnan(correlation.threshold):
        return _count(correlation.traces, "trace")
    return f"chance stays below {typeset.number(correlation.threshold, 2)}"


def _temporal(session: Session) -> str:
    return f"{session.document.recipe.temporal.traces_a_column} traces a column"


def _lengths(session: Session) -> str:
    settings, measures = session.document.recipe.lengths, session.result("measures")
    known = measures.crossing_length[np.isfinite(measures.crossing_length)]
    if not len(known):
        return "no trace crosses both levels"
    window = typeset.interval(settings.low_g0, settings.high_g0, "G0", 2)
    return f"median {typeset.quantity(float(np.median(known)), session.drive_unit, 2)} in {window}"


def _resampling(session: Session) -> str:
    return str(session.result("resampling").scheme)


def _peaks(session: Session) -> str:
    table = session.result("peaks").table
    if not len(table):
        return "no peak found"
    parts = [
        typeset.value_with_uncertainty(float(p), float(low), float(high), "G0")
        for p, low, high in zip(table.position_g0, table.position_low_g0, table.position_high_g0, strict=True)
    ]
    return ", ".join(parts[:2]) + (f" and {len(parts) - 2} more" if len(parts) > 2 else "")


def _figure(session: Session) -> str:
    settings = session.document.recipe.figure
    return f"{settings.width_mm:g} mm wide, {settings.text_point:g} pt"


def _study(session: Session) -> str:
    if not session.study_path:
        return "not saved yet"
    return Path(session.study_path).name


_WRITERS: dict[str, Callable[[Session], str]] = {
    "intake": _files,
    "calibration": _calibration,
    "cutting": _cutting,
    "alignment": _alignment,
    "noise": _noise,
    "plateaus": _plateaus,
    "selection": _selection,
    "histogram": _histogram,
    "displacement_histogram": _displacement,
    "correlation": _correlation,
    "temporal": _temporal,
    "lengths": _lengths,
    "resampling": _resampling,
    "peaks": _peaks,
    "figure": _figure,
    "study": _study,
}
