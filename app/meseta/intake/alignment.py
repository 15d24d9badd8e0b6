"""Zero of displacement: where each trace crosses the alignment level."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.recipe.alignment import AlignmentSettings
from meseta.traces import TraceSet

__all__ = ["ALIGNMENT_STATUS", "Alignment", "align"]

DEEPEST_SHARE: Final = 1e-4
ALIGNMENT_STATUS: Final = ("aligned", "never reaches the level", "ends above the level", "no samples in this phase")


@dataclass(frozen=True)
class Alignment:
    """The zero of displacement of every trace.

    Attributes
    ----------
    zero_drive : (traces,) float64
        Drive value (absolute, in the drive's unit) at the zero; NaN where the trace has none.
    zero_sample : (traces,) int64
        Last sample at or above the level before the crossing; -1 where the trace has none.
    status : (traces,) uint8
        Place in :data:`ALIGNMENT_STATUS`.
    level_g0 : float
        The alignment level.
    """

    zero_drive: npt.NDArray[np.float64]
    zero_sample: npt.NDArray[np.int64]
    status: npt.NDArray[np.uint8]
    level_g0: float

    def block(self, first: int, last: int) -> Alignment:
        """Return the rows of traces ``first`` to ``last``."""
        rows = slice(first, last)
        return Alignment(self.zero_drive[rows], self.zero_sample[rows], self.status[rows], self.level_g0)

    @classmethod
    def joined(cls, parts: Sequence[Alignment]) -> Alignment:
        """Return the rows of several blocks, one after the other."""
        if not parts:
            return cls(np.empty(0), np.empty(0, np.int64), np.empty(0, np.uint8), float("nan"))
        return cls(
            np.concatenate([part.zero_drive for part in parts]),
            np.concatenate([part.zero_sample for part in parts]),
            np.concatenate([part.status for part in parts]),
            parts[0].level_g0,
        )

    @property
    def aligned(self) -> npt.NDArray[np.bool_]:
        """(traces,) bool, True where the trace has a zero."""
        found: npt.NDArray[np.bool_] = self.status == ALIGNMENT_STATUS.index("aligned")
        return found


def align(traces: TraceSet, settings: AlignmentSettings, phases: Sequence[str]) -> Alignment:
    """Find the zero of displacement of every trace.

    The zero lies at the last (or first) sample t at or above the level after which ``stay_samples`` finite samples
    lie below, moved on towards the next finite sample in log G: ``z = z(t) + dz (ln g(t) - ln g_a) / (ln g(t) -
    ln g(t+1))``; not moved where g(t+1) is not above zero (common practice, no source).  Push phases are walked
    backwards in time, so that opening and closing have the same definition.

    By the jump, the zero lies half way between the two samples where ln G, averaged over ``stay_samples`` on each side,
    falls most, among the falls from above to below half the level that stay below the level: a change point, which a
    plateau near the level does not move (our choice).  Falls deeper than four decades below the level count alike, so
    that the noise of the floor does not choose.

    Parameters
    ----------
    traces : TraceSet
    settings : AlignmentSettings
    phases : sequence of str
        Kinds of phase that are looked at.

    Returns
    -------
    Alignment

    Notes
    -----
    NaN samples are passed over: they count neither as above nor as below.
    """
    from meseta.intake.kernels import find_crossings, find_jumps

    start, stop = traces.phase_range(phases)
    count, backwards = traces.traces, tuple(phases) == ("push",)
    sample, following = np.empty(count, np.int64), np.empty(count, np.int64)
    fraction, status = np.empty(count), np.empty(count, np.uint8)
    values, level = np.ascontiguousarray(traces.conductance, np.float32), settings.zero_at_g0
    spans = (values, np.ascontiguousarray(traces.offsets), start, stop, backwards, level)
    if settings.crossing == "jump":
        find_jumps(*spans, DEEPEST_SHARE * level, settings.stay_samples, sample, following, fraction, status)
    else:
        is_first = settings.crossing == "first"
        find_crossings(*spans, is_first, settings.stay_samples, sample, following, fraction, status)
    zero = _drive_at(traces, sample, following, fraction)
    return Alignment(zero, sample, status, level)


def _drive_at(
    traces: TraceSet,
    sample: npt.NDArray[np.int64],
    following: npt.NDArray[np.int64],
    fraction: npt.NDArray[np.float64],
) -> npt.NDArray[np.float64]:
    """Return the drive of each trace ``fraction`` of the way from one sample to another; NaN where there are none."""
    drive, found = traces.drive, sample >= 0
    zero = np.full(traces.traces, np.nan)
    if drive.relative is None:
        zero[found] = (drive.start + drive.step * (sample + (following - sample) * fraction))[found]
        return zero
    relative = drive.relative.read(int(traces.offsets[0]), int(traces.offsets[-1]))
    begins = traces.offsets[:-1][found]
    here, after = (relative[begins + place[found]].astype(np.float64) for place in (sample, following))
    zero[found] = drive.start[found] + here + (after - here) * fraction[found]
    return zero
