"""Measures of every trace: rupture, extremes, length by level crossing, tunnelling slope, floor."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from meseta.intake.alignment import Alignment
from meseta.quantities import barrier_from_decay
from meseta.recipe.histogram import LengthSettings
from meseta.segmentation.measure_kernels import measure
from meseta.segmentation.noise import CLEAR_OF_CONTACT_G0, Floats, Integers
from meseta.segmentation.ranges import phase_bounds, runs_backward
from meseta.segmentation.results import NoiseModel, TraceMeasures
from meseta.traces import Quality, TraceSet

__all__ = ["measure_traces"]

STRAIGHT_DECADES = 0.2
"""A decay that scatters more about its line holds more than noise and tunnelling."""


def measure_traces(
    traces: TraceSet,
    settings: LengthSettings,
    noise: NoiseModel,
    alignment: Alignment,
    phases: Sequence[str],
    displacement_from: str = "measured",
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
    displacement_from : str
        "tunnelling" where the displacement was calibrated by the tunnelling slope; no barrier is then taken from it.
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
    span, rupture = np.full(len(starts), np.nan), np.full(len(starts), np.nan)
    span[some] = np.abs(drive[stops[some] - 1] - drive[starts[some]])
    rupture[some] = alignment.zero_drive[some] - drive[traces.offsets[:-1][some]]
    barrier, refused = _barrier(rows[:, 3], rows[:, 8], traces.drive.is_displacement, displacement_from)
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
        apparent_barrier_ev=barrier,
        barrier_refused=refused,
        floor_noise_g0=rows[:, 5],
        saturated_samples=_saturated(traces, starts, stops, noise.saturation_g0),
        missing_samples=rows[:, 7].astype(np.int64),
    )


def _barrier(slope: Floats, about: Floats, in_nm: bool, displacement_from: str) -> tuple[Floats, npt.NDArray[np.str_]]:
    """Return the apparent barrier of each trace in eV, and in words why there is none."""
    if not in_nm:
        refused = np.full(len(slope), "the drive is not in nm")
    elif displacement_from == "tunnelling":
        refused = np.full(len(slope), "the displacement was calibrated by the tunnelling slope")
    else:
        straight = np.where(about <= STRAIGHT_DECADES, "", "the decay is not straight: a plateau lies in it")
        falls = np.where(slope < 0, straight, "the conductance does not fall with displacement")
        refused = np.where(np.isfinite(slope), falls, "no tunnelling slope was seen")
    return np.where(refused == "", barrier_from_decay(slope), np.nan), refused


def _saturated(traces: TraceSet, starts: Integers, stops: Integers, saturation: float) -> Integers:
    """Return how many samples of each range are flagged saturated, or at the reading where the amplifier ends."""
    over = np.asarray(traces.conductance >= np.float32(0.999 * saturation))
    if traces.quality is not None:
        over |= (traces.quality.read(0, traces.samples) & Quality.SATURATED) > 0
    sums: Floats = np.concatenate([[0], np.cumsum(over)])
    return (sums[stops] - sums[starts]).astype(np.int64)
