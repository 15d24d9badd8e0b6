"""Samples of traces that stay in their recording: worked out block by block when they are asked for, never kept."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Final, Self

import numpy as np
import numpy.typing as npt

from meseta.traces import ArraySamples, Samples
from meseta.work import blocks_of

__all__ = [
    "BLOCK_SAMPLES",
    "LARGEST_BLOCK",
    "JoinedSamples",
    "RawSpans",
    "SharedAxis",
    "StreamedRow",
    "end_to_end",
    "flat_blocks",
]

BLOCK_SAMPLES: Final = 1_000_000
"""Samples that are worked out at once: a few tens of megabytes with all that is needed on the way."""
LARGEST_BLOCK: Final = 2_000_000
"""Samples that are read at once at most; a longer trace comes in several blocks."""
Row = npt.NDArray[Any]


@dataclass(frozen=True)
class RawSpans:
    """Where the flat samples of traces lie in their recording; traces that touch there are one run.

    Attributes
    ----------
    begin : (runs + 1,) int64
        Flat sample of the traces at which each run begins; the last entry is the number of samples.
    raw : (runs,) int64
        Flat sample of the recording at which each run begins.
    """

    begin: npt.NDArray[np.int64]
    raw: npt.NDArray[np.int64]

    @classmethod
    def of(cls, start: npt.NDArray[np.int64], stop: npt.NDArray[np.int64], offsets: npt.NDArray[np.int64]) -> Self:
        """Return the runs of traces that lie from ``start`` to ``stop`` in the recording."""
        if len(start) == 1:
            return cls(offsets, start)
        first = np.flatnonzero(np.concatenate([np.ones(min(len(start), 1), bool), start[1:] != stop[:-1]]))
        return cls(np.append(offsets[first], offsets[-1]).astype(np.int64), start[first])

    def within(self, low: int, high: int) -> Iterator[tuple[int, int]]:
        """Yield the ranges of the recording that hold flat samples ``low`` to ``high`` of the traces."""
        run = int(np.searchsorted(self.begin, low, side="right")) - 1 if len(self.raw) > 1 else 0
        while low < high:
            end = min(int(self.begin[run + 1]), high)
            shift = int(self.raw[run]) - int(self.begin[run])
            if end > low:
                yield low + shift, end + shift
            low, run = end, run + 1


class StreamedRow:
    """One channel of traces, worked out from the recording when it is read (see :class:`meseta.traces.Samples`).

    A reader that walks from sample to sample is given what lies in the block at hand; any other asks for just what it
    wants.

    Parameters
    ----------
    length : int
    dtype : numpy dtype
    work_out : callable
        Returns samples start to stop.
    """

    def __init__(self, length: int, dtype: npt.DTypeLike, work_out: Callable[[int, int], Row]) -> None:
        self._length, self.dtype, self._work_out = length, np.dtype(dtype), work_out
        self._held: tuple[int, Row] = (0, np.empty(0, self.dtype))

    def __len__(self) -> int:
        return self._length

    def __getitem__(self, place: slice) -> Row:
        start, stop, _ = place.indices(self._length)
        return self.read(start, stop)

    def read(self, start: int, stop: int) -> Row:
        """Return samples ``start`` to ``stop``."""
        first, held = self._held
        if first <= start and stop <= first + len(held):
            return held[start - first : stop - first]
        if stop - start >= BLOCK_SAMPLES or start != first + len(held):
            self._held = (stop, held[:0])
            return self._worked_out(start, stop)
        end = min(start + BLOCK_SAMPLES, self._length)
        found = self._worked_out(start, end)
        self._held = (start, found)
        return found[: stop - start]

    def _worked_out(self, start: int, stop: int) -> Row:
        if stop <= start:
            return np.empty(0, self.dtype)
        if stop - start <= BLOCK_SAMPLES:
            return self._work_out(start, stop).astype(self.dtype, copy=False)
        found = np.empty(stop - start, self.dtype)
        for low in range(start, stop, BLOCK_SAMPLES):
            high = min(low + BLOCK_SAMPLES, stop)
            found[low - start : high - start] = self._work_out(low, high)
        return found


@dataclass(frozen=True)
class SharedAxis:
    """One axis that every trace has from its first sample on."""

    axis: Row
    offsets: npt.NDArray[np.int64]

    def __len__(self) -> int:
        return int(self.offsets[-1])

    def read(self, start: int, stop: int) -> Row:
        """Return the axis over flat samples ``start`` to ``stop``."""
        flat = np.arange(start, stop)
        return self.axis[flat - self.offsets[np.searchsorted(self.offsets, flat, side="right") - 1]]

    def __getitem__(self, place: slice) -> Row:
        return self.read(*place.indices(len(self))[:2])


@dataclass(frozen=True)
class JoinedSamples:
    """Several rows of samples end to end."""

    parts: tuple[Samples, ...]
    offsets: npt.NDArray[np.int64]

    def __len__(self) -> int:
        return int(self.offsets[-1])

    def read(self, start: int, stop: int) -> Row:
        """Return samples ``start`` to ``stop``."""
        first = max(int(np.searchsorted(self.offsets, start, side="right")) - 1, 0)
        found = []
        for part in range(first, len(self.parts)):
            begin, end = int(self.offsets[part]), int(self.offsets[part + 1])
            if begin >= stop:
                break
            found.append(self.parts[part].read(max(start - begin, 0), min(stop, end) - begin))
        return found[0] if len(found) == 1 else np.concatenate(found or [self.parts[0].read(0, 0)])


def _copied(arrays: Sequence[npt.NDArray[Any]]) -> npt.NDArray[Any]:
    """Return arrays end to end, copied one by one: one call for all would keep every other thread waiting."""
    ends = np.cumsum([len(array) for array in arrays]).tolist()
    whole = np.empty(ends[-1], np.result_type(*{array.dtype for array in arrays}))
    for array, end in zip(arrays, ends, strict=True):
        whole[end - len(array) : end] = array
    return whole


def end_to_end(rows: Sequence[Row | Samples]) -> Samples:
    """Return rows end to end: in memory where all of them are, else behind their files."""
    arrays = [row for row in rows if isinstance(row, np.ndarray)]
    if len(arrays) == len(rows):
        return ArraySamples(arrays[0] if len(arrays) == 1 else _copied(arrays))
    parts = tuple(ArraySamples(row) if isinstance(row, np.ndarray) else row for row in rows)
    offsets = np.concatenate([[0], np.cumsum([len(part) for part in parts])]).astype(np.int64)
    return parts[0] if len(parts) == 1 else JoinedSamples(parts, offsets)


def flat_blocks(offsets: npt.NDArray[np.int64], block_samples: int) -> list[tuple[int, int]]:
    """Cut flat samples into blocks of whole traces; only a trace beyond the largest block is cut itself."""
    blocks: list[tuple[int, int]] = []
    for first, last in blocks_of(offsets, block_samples):
        low, high = int(offsets[first]), int(offsets[last])
        if high - low > LARGEST_BLOCK:
            blocks += [(at, min(at + LARGEST_BLOCK, high)) for at in range(low, high, LARGEST_BLOCK)]
        elif high > low:
            blocks.append((low, high))
    return blocks
