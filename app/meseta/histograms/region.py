"""Which samples of a trace take part: the phase, and the region chosen within it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms import region_kernels
from meseta.intake.alignment import Alignment
from meseta.recipe.histogram import HistogramSettings
from meseta.segmentation.results import NoiseModel
from meseta.traces import TraceSet

__all__ = ["Region", "nm_a_sample", "region_of"]

Integers = npt.NDArray[np.int64]

_FLOOR_SIGMA = 4.0
_UNTIMED_TAIL = 50
"""Samples of tail where the sample interval is not known."""


@dataclass(frozen=True)
class Region:
    """Sample ranges within a block: of the phase, and of the region in it.

    Attributes
    ----------
    phase_begin, phase_end, begin, end : (traces,) int64
        Half-open ranges in the block's samples; empty where there is none.
    floor : (traces,) int64
        Samples of the phase after ``end``, where the region ended because the trace had settled in the floor.
    """

    phase_begin: Integers
    phase_end: Integers
    begin: Integers
    end: Integers
    floor: Integers

    @property
    def outside(self) -> Integers:
        """(traces,) samples of the phase that are in no region, those at the floor not counted."""
        result: Integers = (self.phase_end - self.phase_begin) - (self.end - self.begin) - self.floor
        return result


def region_of(
    traces: TraceSet,
    settings: HistogramSettings,
    noise: NoiseModel,
    alignment: Alignment,
    phases: Sequence[str],
) -> Region:
    """Return the samples of each trace that take part.

    Parameters
    ----------
    traces : TraceSet
        A block of traces in memory.
    settings : HistogramSettings
    noise : NoiseModel
    alignment : Alignment
        Of the same traces.
    phases : sequence of str

    Notes
    -----
    "phase": all samples of the phase.  "before_zero": up to the zero of displacement.  "after_zero": from the zero
    until the trace has stayed within 4 sigma of the floor for ``floor_tail_second`` (50 samples where the sample
    interval is unknown).  "displacement": from the first sample of the phase within the window of displacement, counted
    from the zero, to the first beyond it, in the direction of the drive; half-open as bins are, so that a drive that
    goes one way has exactly the samples of the window.  A trace without a zero has neither of the last two.
    """
    origin = traces.offsets[:-1]
    start, stop = traces.phase_range(phases)
    phase_begin, phase_end = origin + start, origin + stop
    zero = np.where(alignment.zero_sample >= 0, origin + alignment.zero_sample + 1, -1)
    begin, end, floor = phase_begin, phase_end, np.zeros(traces.traces, np.int64)
    if settings.region == "before_zero":
        end = np.clip(zero, phase_begin, phase_end)
    elif settings.region == "after_zero":
        begin = np.where(zero >= 0, np.clip(zero, phase_begin, phase_end), phase_end)
        end = _settled(traces, begin, phase_end, noise, settings.floor_tail_second)
        floor = phase_end - end
    elif settings.region == "displacement":
        begin, end = _window(traces, settings, alignment, phase_begin, phase_end)
    return Region(phase_begin, phase_end, begin, np.maximum(end, begin), floor)


def _window(
    traces: TraceSet, settings: HistogramSettings, alignment: Alignment, phase_begin: Integers, phase_end: Integers
) -> tuple[Integers, Integers]:
    """Return the range of each trace's phase within the window of displacement; empty where it has no zero."""
    drive = traces.drive
    begin, end = np.empty(traces.traces, np.int64), np.empty(traces.traces, np.int64)
    relative = np.empty(0, np.float32) if drive.relative is None else drive.relative.read(0, traces.samples)
    region_kernels.find_window(
        np.ascontiguousarray(traces.offsets[:-1]),
        phase_begin,
        phase_end,
        np.ascontiguousarray(drive.start),
        np.ascontiguousarray(drive.step),
        np.ascontiguousarray(relative),
        np.ascontiguousarray(alignment.zero_drive),
        settings.region_low_nm,
        settings.region_high_nm,
        begin,
        end,
    )
    return begin, end


def _settled(traces: TraceSet, begin: Integers, end: Integers, noise: NoiseModel, tail_second: float) -> Integers:
    """Return where each trace has been in the floor for the tail's time; its end where it never was."""
    level = noise.floor_g0 + _FLOOR_SIGMA * noise.floor_sigma_g0
    if not np.isfinite(level) or noise.floor_traces == 0:
        return end
    interval = np.asarray(traces.table["sample_interval_second"], np.float64)
    known = np.isfinite(interval) & (interval > 0)
    stay = np.where(known, np.rint(tail_second / np.where(known, interval, 1.0)), _UNTIMED_TAIL).astype(np.int64)
    settled = np.empty(traces.traces, np.int64)
    below = np.full(traces.traces, level, np.float32)
    region_kernels.settle_region(traces.conductance, begin, end, below, stay, settled)
    return settled


def nm_a_sample(traces: TraceSet, region: Region) -> npt.NDArray[np.float64]:
    """Return the mean displacement a sample of the phase in nm, without sign; NaN where the drive is not in nm."""
    unknown = np.full(traces.traces, np.nan)
    if not traces.drive.is_displacement:
        return unknown
    if traces.drive.relative is None:
        return np.abs(np.asarray(traces.drive.step, np.float64))
    relative = traces.drive.relative.read(0, traces.samples)
    number = region.phase_end - region.phase_begin - 1
    some = number > 0
    span = relative[region.phase_end[some] - 1].astype(np.float64) - relative[region.phase_begin[some]]
    unknown[some] = np.abs(span) / number[some]
    return unknown
