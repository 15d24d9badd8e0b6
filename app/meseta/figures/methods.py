"""The methods statement: what was done, as a paper's methods section says it, from the recipe and the results.

Every sentence is made from the settings and results that decide it; a setting that no sentence quotes is stated at the
end of its paragraph, so that no default stays silent.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

import numpy as np

from meseta import __version__, typeset
from meseta.analysis import Analysis
from meseta.figures.stated import Stated
from meseta.quantities import barrier_from_decay
from meseta.recipe import Recipe
from meseta.work import Work

__all__ = ["METHOD_SOURCES", "methods_paragraphs", "methods_statement"]

METHOD_SOURCES: Final = (
    "Change points: R. Maidstone, T. Hocking, G. Rigaill, P. Fearnhead, Stat. Comput. 27, 519 (2017), "
    "doi 10.1007/s11222-016-9636-3.",
    "2D correlation histogram: P. Makk et al., ACS Nano 6, 3411 (2012).",
    "Poisson likelihood of binned data: S. Baker, R. D. Cousins, Nucl. Instrum. Methods 221, 437 (1984).",
    "Constants: CODATA 2022; G₀ = 2e²/h.",
)
"""Published sources of the methods that the statement names."""

_SHAPES: Final = {
    "gaussian": "Gaussian",
    "lorentzian": "Lorentzian",
    "pseudo_voigt": "pseudo-Voigt",
    "skewed_gaussian": "skewed Gaussian",
}


def methods_statement(analysis: Analysis, work: Work | None = None) -> str:
    """Return the methods statement as plain text, one paragraph a step, then the sources.

    Parameters
    ----------
    analysis : Analysis
        Results that are not at hand are computed.
    work : Work, optional
    """
    paragraphs = [f"{title}. {text}" for title, text in methods_paragraphs(analysis, work)]
    return "\n\n".join([*paragraphs, "Sources. " + " ".join(METHOD_SOURCES)])


def methods_paragraphs(analysis: Analysis, work: Work | None = None) -> list[tuple[str, str]]:
    """Return the methods statement as (heading, text) pairs in the order of the job."""
    stated, work = Stated(analysis.recipe), work or Work()
    steps: list[tuple[str, tuple[str, ...], Callable[[Stated, Analysis, Work], list[str]]]] = [
        ("Recordings", ("intake", "cutting"), _recordings),
        ("Calibration", ("calibration",), _calibration),
        ("Zero of displacement", ("alignment",), _zero),
        ("Noise", ("noise",), _noise),
        ("Plateaus", ("plateaus",), _plateaus),
        ("Selection", ("selection",), _selection),
        ("Histograms", ("histogram", "displacement_histogram", "correlation", "temporal", "lengths"), _histograms),
        ("Intervals", ("resampling",), _intervals),
        ("Peaks", ("peaks",), _peaks),
    ]
    paragraphs = []
    for title, sections, write in steps:
        sentences = write(stated, analysis, work)
        for section in sections:
            heading = Recipe.model_fields[section].title or section
            several = len(sections) > 1 and section not in ("intake", "cutting")
            sentences.append(stated.rest(section, _lower_first(heading) if several else ""))
        paragraphs.append((title, " ".join(sentence for sentence in sentences if sentence)))
    return paragraphs


def _lower_first(text: str) -> str:
    return text if text[:2].isupper() or text[:1].isdigit() else text[:1].lower() + text[1:]


def _count(number: int, noun: str) -> str:
    return f"{typeset.integer(number)}{typeset.THIN_SPACE}{noun}{'' if number == 1 else 's'}"


def _recordings(stated: Stated, analysis: Analysis, _: Work) -> list[str]:
    traces = analysis.traces
    direction = np.asarray(traces.table["direction"])
    openings, closings = int(np.sum(direction == "opening")), int(np.sum(direction == "closing"))
    specimens = {str(name) for name in traces.table["specimen"]} - {""}
    known = f" from {_count(len(specimens), 'specimen')}" if specimens else ""
    readers = ", ".join(sorted({source.reader for source in traces.sources if source.reader}))
    return [
        f"{_count(len(traces.sources), 'recording')}{known} gave {_count(traces.traces, 'trace')} "
        f"({typeset.integer(openings)} opening, {typeset.integer(closings)} closing) with "
        f"{_count(traces.samples, 'sample')}.",
        f"They were read with Meseta {__version__}{f' (reader: {readers})' if readers else ''}.",
        f"Continuous recordings are cut by method '{stated('cutting.method')}'; pulling is "
        f"{stated('cutting.pull_is')}; ramps shorter than {stated('cutting.smallest_ramp_fraction')} of the usual one "
        "are kept apart as incomplete.",
    ]


def _calibration(stated: Stated, analysis: Analysis, _: Work) -> list[str]:
    resistance = stated.value("calibration.series_resistance_ohm")
    drive = analysis.traces.drive
    sentences = [
        "Conductance is G = (I − I_offset) / (V − V_offset), given in units of G₀ = 2e²/h = 7.748091730 × 10⁻⁵ S; "
        "a sample without a defined conductance is left out and counted.",
        f"A series resistance of {stated('calibration.series_resistance_ohm')} was removed from every sample."
        if resistance
        else "No series resistance was removed.",
    ]
    if stated.value("calibration.offset_from_floor"):
        sentences.append("The amplifier offset was estimated from traces shown to reach the floor and removed.")
    sentences.append(
        "Displacement is in nm."
        if drive.is_displacement
        else f"The drive is not calibrated in nm; lengths are in its own unit ({drive.unit})."
    )
    fields = [info for info in stated.recipe.calibration.fields() if info.optional]
    given = [
        f"{info.title[:1].lower()}{info.title[1:]} {stated(f'calibration.{info.name}')}"
        for info in fields
        if getattr(stated.recipe.calibration, info.name) is not None
    ]
    if given:
        sentences.append(f"Stated by the laboratory: {'; '.join(given)}.")
    return sentences


def _zero(stated: Stated, analysis: Analysis, work: Work) -> list[str]:
    status = analysis.result("alignment", work).status
    found = int(np.sum(status == 0))
    return [
        f"Displacement is zero at the {stated('alignment.crossing')}, the largest fall of the conductance through half "
        f"of {stated('alignment.zero_at_g0')}, between means over {stated('alignment.stay_samples')}."
        if stated.value("alignment.crossing") == "jump"
        else f"Displacement is zero at the {stated('alignment.crossing')} crossing of {stated('alignment.zero_at_g0')} "
        f"after which the conductance stays below for {stated('alignment.stay_samples')}, interpolated in log G.",
        f"{_count(found, 'trace')} of {typeset.integer(len(status))} have such a crossing.",
    ]


def _noise(stated: Stated, analysis: Analysis, work: Work) -> list[str]:
    noise = analysis.noise(work)
    origin = "learnt from the recording itself, by robust differences pooled over all traces"
    if noise.stated:
        origin += f", except what the recipe states ({', '.join(noise.stated)})"
    sentences = [f"The noise model was {origin}."]
    if noise.floor_traces:
        sentences.append(
            f"{_count(noise.floor_traces, 'trace')} reach the floor, at {typeset.conductance(noise.floor_g0)} with a "
            f"standard deviation of {typeset.conductance(noise.floor_sigma_g0)} a sample."
        )
    else:
        sentences.append("No trace was shown to reach the floor.")
    sentences.append(f"The rise time (10 to 90 %) is {typeset.number(noise.rise_samples, 2)} samples.")
    if np.isfinite(noise.saturation_g0):
        sentences.append(f"The amplifier saturates at {typeset.conductance(noise.saturation_g0)}.")
    if np.isfinite(noise.tunnelling_slope):
        unit = analysis.traces.drive.unit
        slope = typeset.number(noise.tunnelling_slope, 3)
        sentences.append(f"The median slope of the tunnelling decay is {slope} decades per {unit}.")
        sentences.append(_barrier(noise.tunnelling_slope, analysis))
    return sentences


def _barrier(slope: float, analysis: Analysis) -> str:
    if analysis.recipe.calibration.displacement_from == "tunnelling":
        return "No apparent barrier is stated, because the displacement was itself calibrated by that slope."
    if not analysis.traces.drive.is_displacement:
        return ""
    return f"It is that of a square barrier of {typeset.number(float(barrier_from_decay(slope)), 2)} eV."


def _plateaus(stated: Stated, analysis: Analysis, work: Work) -> list[str]:
    found = len(analysis.plateaus(work))
    method = stated.value("plateaus.method")
    how = {
        "change_points": "exact penalised change points (squared error weighted by the noise model) in a "
        "variance-stabilised logarithm of the conductance that keeps negative readings",
        "derivative": "a threshold on the slope of the conductance",
        "levels": "stays between conductance levels",
    }[method]
    penalty = (
        "Each change must be worth 3 ln n times the long-run variance, n counting the samples above the floor, at a "
        f"sensitivity of {stated('plateaus.sensitivity')} (each step halves or doubles the penalty)."
        if method == "change_points"
        else ""
    )
    return [
        f"Plateaus were found by {how}.",
        penalty,
        f"The shortest plateau is {stated('plateaus.minimum_length_nm')}, at least "
        f"{stated('plateaus.minimum_samples')} and {stated('plateaus.minimum_rise_times')} rise times; the steepest "
        f"has {stated('plateaus.slope_fraction')} of the tunnelling slope of this recording.",
        f"Neighbouring stretches that differ by less than {stated('plateaus.join_decades')} are one plateau.",
        f"{_count(found, 'plateau')} were found in all traces.",
    ]


def _selection(stated: Stated, analysis: Analysis, work: Work) -> list[str]:
    selection = analysis.selection(work)
    rules = stated.value("selection.rules")
    kept = int(np.sum(selection.kept))
    total = typeset.integer(len(selection.kept))
    how = (
        f"by these rules, in this order: {'; '.join(rules)}" if rules else "without any rule on the content of a trace"
    )
    by_hand = len(analysis.decisions.verdicts)
    sentences = [f"Traces were selected {how}.", f"{_count(kept, 'trace')} of {total} take part."]
    if by_hand:
        sentences.append(f"{_count(by_hand, 'trace')} were decided by hand; each carries its reason in the study file.")
    return sentences


def _histograms(stated: Stated, analysis: Analysis, work: Work) -> list[str]:
    histogram = analysis.histogram(work)
    logarithmic = stated.value("histogram.axis") == "logarithmic"
    bins = (
        f"{stated('histogram.bins_per_decade')} bins a decade"
        if logarithmic
        else f"bins of {stated('histogram.bin_width_g0')}"
    )
    if stated.value("histogram.edges_g0"):
        bins = f"{histogram.grid.bins} bins between given edges"
    stated.names |= {f"histogram.{name}" for name in ("bins_per_decade", "bin_width_g0", "low_g0", "high_g0")}
    span = typeset.interval(float(histogram.edges_g0[0]), float(histogram.edges_g0[-1]), "G0")
    return [
        f"Conductance histograms of {stated('histogram.direction')} traces have {bins} on a "
        f"{stated('histogram.axis')} axis from {span} and count {_region(stated)}.",
        f"Bins are half-open; the histogram is given as {stated('histogram.normalisation')} "
        f"({histogram.density_unit}). Bins reached by fewer than {stated('histogram.weak_traces')} are marked weak.",
        f"The 2D conductance-displacement histogram has {stated('displacement_histogram.bins')} columns from "
        f"{stated('displacement_histogram.low_nm')} to {stated('displacement_histogram.high_nm')} and "
        f"{stated('displacement_histogram.bins_per_decade')} bins a decade{_event(stated)}.",
        f"The 2D correlation histogram has {stated('correlation.bins_per_decade')} bins a decade; its significance "
        f"comes from {stated('correlation.permutations')} permutations of the traces (largest chance value).",
    ]


def _event(stated: Stated) -> str:
    """Return what the 2D histogram is aligned at where that is not the zero of displacement."""
    if stated.value("displacement_histogram.aligned_at") == "zero":
        return ""
    stated.names |= {f"displacement_histogram.event_{end}_g0" for end in ("low", "high")}
    return f"; its traces are aligned at {stated.recipe.displacement_histogram.event}, those without one left out"


def _region(stated: Stated) -> str:
    """Return which samples count."""
    region = stated.value("histogram.region")
    tail = stated("histogram.floor_tail_second")
    return {
        "phase": "all samples of the phase",
        "after_zero": f"samples from the zero of displacement until {tail} inside the floor",
        "before_zero": "samples up to the zero of displacement",
        "displacement": f"samples from {stated('histogram.region_low_nm')} to {stated('histogram.region_high_nm')} "
        "from the zero of displacement",
    }[region]


def _intervals(stated: Stated, analysis: Analysis, work: Work) -> list[str]:
    resampling = analysis.result("resampling", work)
    effective = resampling.effective_traces
    worth = typeset.integer(round(effective)) if np.isfinite(effective) else "an unknown number of"
    why = f": {resampling.reason}" if resampling.reason else ""
    return [
        f"Intervals are 95 % percentile intervals of {stated('resampling.replicates')} resampled data sets (seed "
        f"{stated.value('resampling.seed')}; scheme asked for: {stated('resampling.scheme')}; used: "
        f"{resampling.scheme}).",
        f"The traces that take part are worth {worth} independent ones{why}.",
    ]


def _peaks(stated: Stated, analysis: Analysis, work: Work) -> list[str]:
    fit = analysis.result("peaks", work)
    axis = ", ".join(sorted({str(name) for name in fit.table.axis})) or stated("peaks.axis")
    shape = _SHAPES[stated.value("peaks.shape")]
    background = stated.value("peaks.background")
    article = "an" if background[0] in "aeiou" else "a"
    ground = "without a background" if background == "none" else f"on {article} {stated('peaks.background')} background"
    stated.names |= {"peaks.axis", "peaks.fit_low_g0", "peaks.fit_high_g0"}
    asked = stated.value("peaks.peaks")
    number = (
        f"The {_count(len(asked), 'peak')} asked for were fitted."
        if asked
        else f"The number of peaks was proposed from the histogram, at most {stated('peaks.most')}."
    )
    sentences = [
        f"{shape} peaks {ground} were fitted on the {axis} conductance axis by maximum Poisson likelihood of the bin "
        "integrals; every replicate was fitted again.",
        number,
    ]
    if np.any(np.isfinite(fit.table.fit_low_g0)):
        low, high = float(np.nanmin(fit.table.fit_low_g0)), float(np.nanmax(fit.table.fit_high_g0))
        sentences.append(f"The fit spans {typeset.interval(low, high, 'G0')}.")
    tried = list(dict.fromkeys(shift.choice for shift in fit.shifts if shift.kind != "calibration" and shift.counted))
    known = list(dict.fromkeys(shift.choice for shift in fit.shifts if shift.kind == "calibration"))
    if tried:
        beside = f", in quadrature with the stated errors of {' and '.join(known)}" if known else ""
        sentences.append(
            f"The systematic part is the half spread of the position over these choices: {', '.join(tried)}{beside}. "
            "It is reported apart from the statistical interval."
        )
    return sentences
