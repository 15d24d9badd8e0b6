"""Recording: the channels of one file exactly as recorded, with what is understood of them.

A :class:`Recording` is what stands between a file and traces.  Its channels are flat rows of stored numbers, end to
end over *pieces* (a dataset, a row of a 2D array, a column of a wide table, or the whole record); they are read in
blocks, so a recording may be larger than memory.  :func:`meseta.intake.open_recording` makes one from a file; a study
makes one from its own ``/raw``; :func:`meseta.intake.traces_from` turns recordings into a TraceSet.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from types import TracebackType
from typing import Any, Self

import numpy as np
import numpy.typing as npt

from meseta.traces import ArraySamples, Samples, Source

__all__ = ["BETWEEN_TRACES", "RawChannel", "Recording"]

BETWEEN_TRACES = "between_traces"
"""Column of a recording's table, bool: the file says of a piece that it belongs to no trace."""

Plain = str | int | float | bool


_NO_SAMPLES = ArraySamples(np.empty(0))


def _nothing() -> None:
    """Close nothing: the samples lie in memory."""


@dataclass(frozen=True)
class RawChannel:
    """One channel or column as recorded, and what it is taken for.

    Attributes
    ----------
    name : str
        Name in the file (path of the dataset, heading of the column).
    samples : Samples
        Stored numbers, in the stored type; (samples,), or (n,) where ``shared``.
    role : str
        A role of :data:`meseta.recipe.intake.ROLES`.
    unit : str
        Unit after ``value = stored * scale + offset``.
    shared : bool
        One axis for all pieces: sample i of every piece has value i of this channel.
    ground : str
        On what ground role and unit were chosen: "recipe", "attribute", "name", "unit row", "range", "shape".
    confidence : float
        0 (a guess) to 1 (stated).
    doubts : tuple of str
        What the user should look at, in words.
    attributes : mapping
        The file's own attributes of this channel (plain values).
    """

    name: str
    samples: Samples
    role: str = "other"
    unit: str = ""
    scale: float = 1.0
    offset: float = 0.0
    shared: bool = False
    ground: str = ""
    confidence: float = 0.0
    doubts: tuple[str, ...] = ()
    attributes: Mapping[str, Plain] = field(default_factory=dict)

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of the stored numbers."""
        return self.samples.read(0, 0).dtype

    def without_samples(self) -> RawChannel:
        """Return the channel without its samples; one of thousands of files, so without the cost of checking it."""
        return self.with_samples(_NO_SAMPLES)

    def with_samples(self, samples: Samples) -> RawChannel:
        """Return the channel of another file that is written alike; without the cost of checking it, too."""
        other = object.__new__(RawChannel)
        other.__dict__.update(self.__dict__, samples=samples)
        return other

    def values(self, start: int, stop: int) -> npt.NDArray[np.float64]:
        """(stop - start,) float64, numbers in ``unit``: stored * scale + offset."""
        with np.errstate(invalid="ignore"):  # a NaN of any kind is a NaN
            stored = self.samples.read(start, stop).astype(np.float64)
        if self.scale != 1.0:
            stored *= self.scale
        if self.offset != 0.0:
            stored += self.offset
        return stored


@dataclass(frozen=True)
class Recording:
    """The content of one file, as recorded.

    Attributes
    ----------
    source : Source
        Checksum, name, size, reader and layout.
    channels : tuple of RawChannel
        All channels, also those that are only carried along.
    offsets : (pieces + 1,) int64
        Sample at which each piece begins in the flat channels; the last entry is the number of samples.
    record_start : (pieces,) int64
        First sample of each piece, counted in its dataset.
    dataset : (pieces,) str
        Path of each piece within the file; empty where the file has no paths.
    metadata : mapping
        What the file says of itself as a whole, by canonical name where one is known ("bias_volt",
        "gain_volt_per_ampere", "nm_per_volt", "sampling_hertz" ...), else under its own name.
    table : mapping of str to (pieces,) array
        What it says of each piece, by the same names.
    doubts : tuple of str
        Doubts about the recording as a whole.
    close : callable
        Lets go of the file.
    like : object, optional
        The same object in recordings that differ in nothing but source, samples, metadata and doubts.
    """

    source: Source
    channels: tuple[RawChannel, ...]
    offsets: npt.NDArray[np.int64]
    record_start: npt.NDArray[np.int64]
    dataset: npt.NDArray[np.str_]
    metadata: Mapping[str, Plain] = field(default_factory=dict)
    table: Mapping[str, npt.NDArray[Any]] = field(default_factory=dict)
    doubts: tuple[str, ...] = ()
    close: Callable[[], None] = field(default=_nothing, repr=False, compare=False)
    like: object | None = field(default=None, repr=False, compare=False)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @property
    def pieces(self) -> int:
        """Number of pieces."""
        return len(self.offsets) - 1

    @property
    def samples(self) -> int:
        """Number of samples of a channel."""
        return int(self.offsets[-1])

    def channel(self, *roles: str) -> RawChannel | None:
        """Return the channel with the first of ``roles`` that any channel has; None where none has one."""
        for role in roles:
            for channel in self.channels:
                if channel.role == role:
                    return channel
        return None

    def values(self, channel: RawChannel, start: int, stop: int) -> npt.NDArray[np.float64]:
        """(stop - start,) float64, a channel in its unit over flat samples ``start`` to ``stop``."""
        if not channel.shared:
            return channel.values(start, stop)
        axis = channel.values(0, len(channel.samples))
        return axis[np.arange(start, stop) - self._begin_of(start, stop)]

    def stored(self, channel: RawChannel, start: int, stop: int) -> npt.NDArray[Any]:
        """(stop - start,), a channel's stored numbers over flat samples ``start`` to ``stop``."""
        if not channel.shared:
            return channel.samples.read(start, stop)
        axis = channel.samples.read(0, len(channel.samples))
        picked: npt.NDArray[Any] = axis[np.arange(start, stop) - self._begin_of(start, stop)]
        return picked

    def blocks(self, block_samples: int) -> Iterator[tuple[int, int]]:
        """Yield flat ranges of at most ``block_samples`` samples that cover the recording."""
        for start in range(0, self.samples, block_samples):
            yield start, min(start + block_samples, self.samples)

    def with_channels(self, channels: tuple[RawChannel, ...]) -> Recording:
        """Return the recording with its channels understood in another way."""
        other = object.__new__(Recording)
        other.__dict__.update(self.__dict__, channels=channels)
        return other

    def beginning(self, samples: int) -> Recording:
        """Return the recording as if it ended after so many samples, where it is longer; readable as long as this."""
        if self.samples <= samples:
            return self
        pieces = max(int(np.searchsorted(self.offsets, samples, side="left")), 1)
        offsets = np.minimum(self.offsets[: pieces + 1], samples)
        table = {name: column[:pieces] for name, column in self.table.items()}
        return replace(
            self, offsets=offsets, record_start=self.record_start[:pieces], dataset=self.dataset[:pieces], table=table
        )

    def _begin_of(self, start: int, stop: int) -> npt.NDArray[np.int64]:
        """Return, for each flat sample, the flat sample at which its piece begins."""
        flat = np.arange(start, stop)
        begins: npt.NDArray[np.int64] = self.offsets[np.searchsorted(self.offsets, flat, side="right") - 1]
        return begins
