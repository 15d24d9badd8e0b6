"""Samples that are asked for one stretch after the other are read from their file in larger ones."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.recording import RawChannel
from meseta.traces import ArraySamples, Samples

__all__ = ["ReadAhead", "read_ahead"]

AHEAD_SAMPLES: Final = 1 << 18


@dataclass
class ReadAhead:
    """Samples of a file, of which the last stretch that was read is kept; for one thread.

    A stretch far from the last one is read as it is asked for: probes here and there must not read all between them.
    """

    samples: Samples
    _low: int = 0
    _held: npt.NDArray[Any] = field(default_factory=lambda: np.empty(0), repr=False)

    def __len__(self) -> int:
        return len(self.samples)

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return stored samples ``start`` to ``stop``; not to be written into."""
        end = self._low + len(self._held)
        if not (self._low <= start and stop <= end and len(self._held)):
            follows = self._low <= start <= end + AHEAD_SAMPLES
            until = max(stop, min(start + AHEAD_SAMPLES, len(self))) if follows else stop
            self._low, self._held = start, self.samples.read(start, until)
        return self._held[start - self._low : stop - self._low]


def read_ahead(channel: RawChannel) -> RawChannel:
    """Return a channel for reading from front to back; one that lies in memory as it is."""
    if isinstance(channel.samples, ArraySamples):
        return channel
    return replace(channel, samples=ReadAhead(channel.samples))
