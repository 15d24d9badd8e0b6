"""Which of two amplifiers, or which range of one, gives the current; what a switch leaves untrusted.

A switch has memory (hysteresis, dead time), samples are read in blocks: before a block is worked through, the record is
walked back to a sample that settles the state, so that results never depend on where a block begins.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.calibration.spread import Spread
from meseta.traces import Quality

__all__ = ["Overlap", "Switching"]

Floats = npt.NDArray[np.float64]
Read = Callable[[int, int], Floats]
WALK_SAMPLES: Final = 4096
TOLERATED: Final = 0.02
"""Gain ratios off by less are within what amplifiers promise (common practice, no source)."""


@dataclass(frozen=True)
class Overlap:
    """Straight line through the currents of both amplifiers where both are in range.

    Attributes
    ----------
    ratio : float
        Current by the high-gain amplifier for one ampere by the other; 1 where both gains are right.
    ratio_error : float
        Standard error of the ratio.
    offset_ampere : float
        Current by the high-gain amplifier where the other reads none.
    samples : int
    """

    ratio: float
    ratio_error: float
    offset_ampere: float
    samples: int

    @property
    def fits(self) -> bool:
        """Return whether the stated gains agree with each other."""
        return abs(self.ratio - 1.0) <= max(TOLERATED, 4 * self.ratio_error)


@dataclass(frozen=True)
class Switching:
    """When the gain changes.

    Attributes
    ----------
    leave_share, return_share : float
        Shares of full scale at which the high-gain channel is left, and taken again.
    dead_samples : int
        Samples from a switch on that are not trusted.
    range_gains : mapping of int to float
        Range code -> gain in V/A; empty where the amplifier does not switch.
    """

    leave_share: float = 0.9
    return_share: float = 0.9
    dead_samples: int = 0
    range_gains: Mapping[int, float] = field(default_factory=dict)

    def choose(self, share: Read, spread: Spread) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.uint8]]:
        """Return where the high-gain channel is used, and the quality bits of the seams.

        Parameters
        ----------
        share : callable
            Returns the high-gain channel over flat samples start to stop as a share of its full scale, >= 0; not asked
            across pieces backwards.
        spread : Spread
            The range of samples.
        """
        from meseta.intake.calibration.kernels import choose_gain

        offsets = spread.recording.offsets
        piece_begin = int(offsets[np.searchsorted(offsets, spread.start, side="right") - 1])
        begin = self._settled(share, spread.start, piece_begin)
        wide = Spread(spread.recording, begin, min(spread.stop + 1, spread.recording.samples))
        values = np.ascontiguousarray(share(wide.start, wide.stop), np.float64)
        use = np.empty(len(values), np.bool_)
        choose_gain(values, wide.piece_begins(), self.leave_share, self.return_share, use)
        own = slice(spread.start - wide.start, spread.stop - wide.start)
        return use[own], self._flagged(use.astype(np.int64), wide)[own]

    def gains(self, codes: Read, spread: Spread, where: str) -> tuple[Floats, npt.NDArray[np.uint8]]:
        """Return the gain of every sample by its range code, and the quality bits of the switches.

        Raises
        ------
        InputError
            Where a code has no gain.
        """
        offsets = spread.recording.offsets
        piece_begin = int(offsets[np.searchsorted(offsets, spread.start, side="right") - 1])
        begin = max(piece_begin, spread.start - self.dead_samples - 1)
        wide = Spread(spread.recording, begin, min(spread.stop + 1, spread.recording.samples))
        read = np.nan_to_num(codes(wide.start, wide.stop), nan=np.iinfo(np.int32).min)
        state = np.rint(read).astype(np.int64)
        gain = np.zeros(len(state))
        for code in np.unique(state).tolist():
            if code not in self.range_gains:
                raise InputError(
                    f"the record holds the range code {code}, but calibration.range_gains has no gain for it",
                    where,
                    f'give it, for example --set calibration.range_gains."{code}"=1e6',
                )
            gain[state == code] = self.range_gains[code]
        own = slice(spread.start - wide.start, spread.stop - wide.start)
        return gain[own], self._flagged(state, wide)[own]

    def _flagged(self, state: npt.NDArray[np.int64], wide: Spread) -> npt.NDArray[np.uint8]:
        from meseta.intake.calibration.kernels import flag_switches

        bits = np.zeros(len(state), np.uint8)
        flag_switches(state, wide.piece_begins(), self.dead_samples, Quality.SEAM, Quality.UNTRUSTED, bits)
        return bits

    def _settled(self, share: Read, start: int, piece_begin: int) -> int:
        """Return a sample before ``start`` from which on the state, and all dead time that reaches it, is known."""
        at = max(piece_begin, start - self.dead_samples - 1)
        while at > piece_begin:
            begin = max(piece_begin, at - WALK_SAMPLES)
            values = share(begin, at + 1)
            decisive = np.flatnonzero((values >= self.leave_share) | (values < self.return_share))
            if len(decisive):
                return begin + int(decisive[-1])
            at = begin
        return piece_begin
