"""The plateau finder: change points in a variance-stabilised variable, joined to straight stretches, classified."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.alignment import Alignment
from meseta.recipe.plateaus import PlateauSettings
from meseta.segmentation import finder_kernels as kernels
from meseta.segmentation.detectors import derivative_rows, level_rows
from meseta.segmentation.ranges import phase_bounds, runs_backward, trusted_samples
from meseta.segmentation.results import NoiseModel, PlateauTable
from meseta.segmentation.scale import scale_of
from meseta.traces import Quality, TraceSet

__all__ = ["find_plateaus"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

CHANGE_COST: Final = 3.0
"""Cost of a change over ln n and the long-run variance: the modified information criterion of Zhang and Siegmund,
Biometrics 63, 22 (2007), without its length term."""
LINE_COST: Final = 4.0
"""The same for a straight line, which has one more parameter."""
SHORTEST_NM: Final = (0.01, 0.02)
"""Shortest plateau above and below :data:`METAL_FROM_G0` where the recipe states none."""
METAL_FROM_G0: Final = 0.1
METAL_SWITCH_G0: Final = 0.3
"""A metallic contact that switches by less is one plateau: less than a conductance channel opens or closes."""
LOWEST_SIGMA: Final = 3.0
"""Floor sigmas above the floor from which on plateaus are looked for where the recipe states nothing."""
SLOWEST_TUNNELLING: Final = 2.0
"""Decades per nm: a gentler slope is that of plateaus, not of tunnelling (a barrier of 0.2 eV)."""
CENSORED: Final = np.array(["", "ramp", "floor", "saturation", "gap"])


def find_plateaus(
    traces: TraceSet, settings: PlateauSettings, noise: NoiseModel, alignment: Alignment, phases: Sequence[str]
) -> PlateauTable:
    """Find the plateaus of a block of traces.

    Parameters
    ----------
    traces : TraceSet
        In memory; trace numbers in the result count from 0 in this block.
    settings : PlateauSettings
    noise : NoiseModel
        Of the whole recording.
    alignment : Alignment
        Of these traces; gives the zero of the displacement columns.
    phases : sequence of str
        Phases to search.
    """
    starts, stops = phase_bounds(traces, phases)
    backward = runs_backward(phases)
    steps = _steps(traces, starts, stops)
    rows = _search(traces, settings, noise, starts, stops, backward, steps)
    return _table(traces, rows, starts, stops, backward, steps, alignment, noise)


def _steps(traces: TraceSet, starts: Integers, stops: Integers) -> Floats:
    """Return the mean drive a sample of each trace's range."""
    drive = traces.drive_values(0, traces.traces)
    some = stops - starts > 1
    steps = np.zeros(len(starts))
    steps[some] = (drive[stops[some] - 1] - drive[starts[some]]) / (stops - starts - 1)[some]
    return steps


def _search(
    traces: TraceSet,
    settings: PlateauSettings,
    noise: NoiseModel,
    starts: Integers,
    stops: Integers,
    backward: bool,
    steps: Floats,
) -> Floats:
    """Return the rows of :func:`meseta.segmentation.finder_kernels.find`."""
    rules = _rules(settings, noise, traces.drive.is_displacement, steps)
    conductance, faults = np.ascontiguousarray(traces.conductance), _faults(traces)
    if settings.method == "change_points":
        room = max(64, 8 * traces.traces)
        rows: Floats = kernels.find(conductance, faults, starts, stops, backward, steps, scale_of(noise), rules, room)
        return rows
    trusted = faults == 0
    pieces = [_above_floor(conductance, trusted, *span, backward, noise) for span in zip(starts, stops, strict=True)]
    if settings.method == "derivative":
        smoothing = max(settings.smoothing_samples, int(np.ceil(2 * noise.rise_samples)))
        return derivative_rows(pieces, steps, rules, noise, smoothing)
    return level_rows(pieces, steps, rules, np.asarray(settings.levels_g0))


def _faults(traces: TraceSet) -> npt.NDArray[np.uint8]:
    """Return for each sample of the block whether it is not trusted, or saturated; empty where none is."""
    trusted = trusted_samples(traces)
    if traces.quality is None or trusted.all():
        return np.empty(0, np.uint8)
    saturated = (traces.quality.read(0, traces.samples) & Quality.SATURATED) > 0
    return np.where(saturated, kernels.CLIPPED, ~trusted).astype(np.uint8)


def _above_floor(
    conductance: npt.NDArray[np.float32],
    trusted: npt.NDArray[np.bool_],
    start: int,
    stop: int,
    backward: bool,
    noise: NoiseModel,
) -> Floats:
    """Return one trace's conductance above the floor from the closed end, NaN where it is not trusted."""
    g = conductance[start:stop].astype(np.float64) - noise.floor_g0
    if len(trusted):
        g[~trusted[start:stop]] = np.nan
    return g[::-1] if backward else g


def _rules(settings: PlateauSettings, noise: NoiseModel, in_nm: bool, steps: Floats) -> kernels.Rules:
    """Return the settings in the units of the kernels."""
    stated = settings.minimum_length_nm
    metal, molecule = SHORTEST_NM if stated is None else (stated, stated)
    factor = 2.0 ** (5.0 - settings.sensitivity)
    low = LOWEST_SIGMA * noise.floor_sigma_g0 if settings.low_g0 is None else settings.low_g0 - noise.floor_g0
    tunnelling = _tunnelling(noise, in_nm, steps)
    return kernels.Rules(
        change_cost=CHANGE_COST * factor,
        line_cost=LINE_COST * factor,
        low=low,
        high=np.inf if settings.high_g0 is None else settings.high_g0 - noise.floor_g0,
        saturation=_clipped_from(noise),
        bound=settings.slope_fraction * tunnelling,
        tunnelling=tunnelling,
        join=settings.join_decades,
        join_metal=settings.join_g0,
        switch=settings.switch_decades,
        metal_from=METAL_FROM_G0,
        metal_switch=METAL_SWITCH_G0,
        shortest_samples=max(settings.minimum_samples, int(np.ceil(settings.minimum_rise_times * noise.rise_samples))),
        shortest_metal=metal if in_nm else 0.0,
        shortest_molecule=molecule if in_nm else 0.0,
        trim=int(np.ceil(noise.rise_samples)),
    )


def shortest_molecule(settings: PlateauSettings, noise: NoiseModel, in_nm: bool, step: float) -> float:
    """Return the length in drive units from which on a molecular plateau is taken, at ``step`` drive a sample."""
    rules = _rules(settings, noise, in_nm, np.array([step]))
    return max(rules.shortest_molecule, rules.shortest_samples * step)


def _clipped_from(noise: NoiseModel) -> float:
    """Return the level above the floor from which a plateau's noise is cut off by the saturated amplifier."""
    if not np.isfinite(noise.saturation_g0):
        return np.inf
    margin = max(0.01 * noise.saturation_g0, 2.0 * float(noise.long_run(noise.saturation_g0)))
    return noise.saturation_g0 - noise.floor_g0 - min(margin, 0.1 * noise.saturation_g0)


def _tunnelling(noise: NoiseModel, in_nm: bool, steps: Floats) -> float:
    """Return the size of the tunnelling slope in decades per drive unit.

    Where none was seen, or what was taken for it is too gentle to be one: 10 decades per nm (common practice, no
    source), or a decade in 30 samples where the drive is not calibrated.
    """
    if np.isfinite(noise.tunnelling_slope) and not (in_nm and abs(noise.tunnelling_slope) < SLOWEST_TUNNELLING):
        return abs(noise.tunnelling_slope)
    size = np.abs(steps[steps != 0])
    return 10.0 if in_nm or not len(size) else float(1.0 / (30.0 * np.median(size)))


def _table(
    traces: TraceSet,
    rows: Floats,
    starts: Integers,
    stops: Integers,
    backward: bool,
    steps: Floats,
    alignment: Alignment,
    noise: NoiseModel,
) -> PlateauTable:
    """Return the plateau table of the kernel's rows."""
    trace, first, last = (rows[:, k].astype(np.int64) for k in range(3))
    length = (stops - starts)[trace]
    if backward:
        first, last = length - last, length - first
    within = (starts - traces.offsets[:-1])[trace]
    start, stop = first + within, last + within
    order = np.lexsort((start, trace))
    rows, trace, start, stop = rows[order], trace[order], start[order], stop[order]
    drive = traces.drive_values(0, traces.traces)
    base = traces.offsets[:-1][trace]
    begin, end = drive[base + start], drive[base + stop - 1] + steps[trace]
    aligned = np.isfinite(alignment.zero_drive[trace])
    zero = np.where(aligned, alignment.zero_drive[trace], traces.drive.start[trace])
    in_nm = traces.drive.is_displacement
    nothing = np.full(len(trace), np.nan)
    size = np.abs(steps[trace])
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = rows[:, 4] / size
    return PlateauTable(
        trace=trace,
        start=start,
        stop=stop,
        displacement_start_nm=begin - zero if in_nm else nothing,
        displacement_stop_nm=end - zero if in_nm else nothing,
        length_nm=np.abs(end - begin) if in_nm else nothing,
        level_g0=rows[:, 3],
        slope_decades_per_nm=slope if in_nm else nothing,
        noise_decades=rows[:, 5],
        kind=np.where(rows[:, 3] >= METAL_FROM_G0, "metal", "molecule"),
        censored=CENSORED[rows[:, 9].astype(int)],
        length_drive=np.abs(end - begin),
        drive_unit=np.full(len(trace), traces.drive.unit),
        aligned=aligned,
        level_sigma_g0=_standard_error(noise, rows[:, 3], stop - start),
        effective_samples=rows[:, 6],
        jump_before_decades=rows[:, 7],
        jump_after_decades=rows[:, 8],
        number=_numbers(trace),
        score=rows[:, 11],
        telegraph=rows[:, 10] > 0,
        missing_samples=rows[:, 12].astype(np.int64),
        longest_gap_samples=rows[:, 13].astype(np.int64),
    )


def _standard_error(noise: NoiseModel, level: Floats, samples: Integers) -> Floats:
    """Return the standard error of a mean; NaN where the noise grows with the length it is taken over."""
    error = noise.long_run(level) / np.sqrt(np.maximum(samples, 1))
    if len(noise.growing):
        place = np.abs(np.log(np.maximum(level, noise.level_g0[0]))[:, None] - np.log(noise.level_g0)).argmin(axis=1)
        error[noise.growing[place]] = np.nan
    return error


def _numbers(trace: Integers) -> Integers:
    """Return the number of each plateau in its trace, counted from the last one."""
    if not len(trace):
        return np.empty(0, np.int64)
    last = np.searchsorted(trace, trace, side="right")
    return (last - np.arange(len(trace))).astype(np.int64)
