"""Which samples of a trace are looked at: its phase, from which end, and those that are trusted."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from meseta.traces import PHASE_KINDS, Quality, TraceSet

__all__ = ["phase_bounds", "runs_backward", "trusted_samples"]

Integers = npt.NDArray[np.int64]


def phase_bounds(traces: TraceSet, phases: Sequence[str]) -> tuple[Integers, Integers]:
    """Return the sample range of each trace's phase, counted in the whole block."""
    start, stop = traces.phase_range(phases)
    return traces.offsets[:-1] + start, traces.offsets[:-1] + stop


def runs_backward(phases: Sequence[str]) -> bool:
    """Return whether the contact closes in these phases, so that traces are read from their end."""
    return all(phase in ("push", "approach") for phase in phases) and set(phases) <= set(PHASE_KINDS)


def trusted_samples(traces: TraceSet) -> npt.NDArray[np.bool_]:
    """Return which samples of the block are trusted; an empty array where all are."""
    if traces.quality is None:
        return np.empty(0, np.bool_)
    bad = Quality.SLEWING | Quality.SEAM | Quality.UNTRUSTED | Quality.SATURATED
    return (traces.quality.read(0, traces.samples) & bad) == 0
