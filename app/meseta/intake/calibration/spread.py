"""Constants that differ from piece to piece, spread over a range of samples."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.intake.recording import Recording

__all__ = ["Spread", "Value"]

Value = float | npt.NDArray[np.float64]
"""One number for a whole recording, or (pieces,) numbers."""


class Spread:
    """Flat samples ``start`` to ``stop`` of a recording, over which constants of its pieces are spread."""

    def __init__(self, recording: Recording, start: int, stop: int) -> None:
        self.recording, self.start, self.stop = recording, start, stop
        self._piece: npt.NDArray[np.int64] | None = None

    def of(self, value: Value) -> Value:
        """Return one number as it is, and numbers of pieces as (stop - start,) numbers of samples."""
        if isinstance(value, float | int):
            return value
        if self._piece is None:
            flat = np.arange(self.start, self.stop)
            self._piece = np.searchsorted(self.recording.offsets, flat, side="right") - 1
        return np.asarray(value)[self._piece]

    def piece_begins(self) -> npt.NDArray[np.int64]:
        """Return the places within the range at which a piece begins, the range's own begin among them."""
        offsets = self.recording.offsets
        first, last = np.searchsorted(offsets, self.start, side="right"), np.searchsorted(offsets, self.stop)
        inside = offsets[first:last] - self.start
        begins: npt.NDArray[np.int64] = np.unique(np.concatenate([[0], inside]))
        return begins
