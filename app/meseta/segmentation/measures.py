"""Measures of every trace: rupture, extremes, length by level crossing, tunnelling slope, floor."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from meseta.intake.alignment import Alignment
from meseta.recipe.histogram import LengthSettings
from meseta.segmentation.measure_kernels import measure
from meseta.segmentation.noise import CLEAR_OF_CONTACT_G0, Floats, Integers, phase_bounds, runs_backward
from meseta.segmentation.results import NoiseModel, TraceMeasures
from meseta.traces import Quality, TraceSet

__all__ = ["measure_traces"]


def measure_traces(
    traces: TraceSet, settings: LengthSettings, noise: NoiseModel, alignment: Alignment, phases: Sequence[str]
) -> TraceMeasures:
    """Measure a block of traces.

    Parameters
    ----------
    traces : TraceSet
        In memory.
    settings : LengthSettings
        Bounds of the length by level crossing.
    noise : NoiseModel
    alignment : Alignment
        Of these traces.
    phases : sequence of str
        Phases to measure.
    """
    starts, stops = phase_bounds(traces, phases)
    drive = traces.drive_values(0, traces.traces)
    within = (starts - traces.offsets[:-1]).astype(np.int64)
    zeros = np.where(alignment.zero_sample >= 0, alignment.zero_sample - within, -1)
    rows = measure(
        np.ascontiguousarray(traces.conductance),
        drive,
        starts,
        stops,
        runs_backward(phases),
        zeros,
        alignment.level_g0,
        noise.floor_g0,
        noise.floor_sigma_g0,
        float(noise.long_run_g0[0]),
        settings.low_g0,
        settings.high_g0,
        CLEAR_OF_CONTACT_G0,
        noise.saturation_g0,
    )
    some = stops > starts
    span, rupture = np.zeros(len(starts)), np.full(len(starts), np.nan)
    span[some] = np.abs(drive[stops[some] - 1] - drive[starts[some]])
    rupture[some] = alignment.zero_drive[some] - drive[traces.offsets[:-1][some]]
    return TraceMeasures(
        drive_span=span,
        rupture_drive=rupture,
        rupture_found=alignment.zero_sample >= 0,
        reaches_floor=(rows[:, 4] >= 2) & (noise.floor_traces > 0),
        reforms=rows[:, 6] > 0,
        highest_g0=rows[:, 0],
        lowest_g0=rows[:, 1],
        crossing_length=rows[:, 2],
        tunnelling_slope=rows[:, 3],
        floor_noise_g0=rows[:, 5],
        saturated_samples=_saturated(traces, starts, stops, noise.saturation_g0),
        missing_samples=rows[:, 7].astype(np.int64),
    )


def _saturated(traces: TraceSet, starts: Integers, stops: Integers, saturation: float) -> Integers:
    """Return how many samples of each range are flagged saturated, or at the reading where the amplifier ends."""
    over = np.asarray(traces.conductance >= np.float32(0.999 * saturation))
    if traces.quality is not None:
        over |= (traces.quality.read(0, traces.samples) & Quality.SATURATED) > 0
    sums: Floats = np.concatenate([[0], np.cumsum(over)])
    return (sums[stops] - sums[starts]).astype(np.int64)
