"""Where the numbers of a TDMS channel stand in the file, so that any of them are read without those around them.

The library that reads the format takes whole chunks, and of channels whose numbers take turns whole segments, which may
be larger than memory.  Segments and chunks are as documented by the format's maker ("TDMS File Format Internal
Structure").
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.readers.file_array import Numbers

__all__ = ["Places", "has_cut_chunks", "places_of"]

_RAW_DATA, _INTERLEAVED, _BIG_ENDIAN, _DAQMX = 1 << 3, 1 << 5, 1 << 6, 1 << 7
"""Bits of a segment's table of contents."""
BLOCK_BYTE: Final = 16 << 20
LONG_CHUNK_BYTE: Final = 64 << 10
"""Of chunks that are longer, only the channel's own stretch is read."""
Values = npt.NDArray[Any]


@dataclass(frozen=True)
class _Stretch:
    """Numbers of one segment: runs of ``run`` numbers, ``step_byte`` from one to the next; a run begins each chunk."""

    count: int
    begin_byte: int
    run: int
    step_byte: int
    chunk_byte: int
    dtype: np.dtype[Any]

    @property
    def end_byte(self) -> int:
        """Place behind the last number."""
        if self.count == 0:
            return 0
        chunk, place = divmod(self.count - 1, self.run)
        return self.begin_byte + chunk * self.chunk_byte + place * self.step_byte + self.dtype.itemsize

    def read(self, file: Numbers, start: int, stop: int) -> Iterator[Values]:
        """Yield numbers ``start`` to ``stop`` in parts."""
        if self.chunk_byte <= LONG_CHUNK_BYTE and self.run * self.step_byte != self.chunk_byte:
            yield from self._of_short_chunks(file, start, stop)
            return
        whole = self.run * self.step_byte == self.chunk_byte  # chunks follow each other without anything between
        while start < stop:
            chunk, place = divmod(start, self.run)
            end = stop if whole else min(stop, (chunk + 1) * self.run)
            end = min(end, start + max(BLOCK_BYTE // self.step_byte, 1))
            begin = self.begin_byte + chunk * self.chunk_byte + place * self.step_byte
            yield _stepped(file, begin, end - start, self.step_byte, self.dtype)
            start = end

    def _of_short_chunks(self, file: Numbers, start: int, stop: int) -> Iterator[Values]:
        """Yield numbers out of blocks of whole chunks."""
        most = max(BLOCK_BYTE // self.chunk_byte, 1) * self.run
        while start < stop:
            chunk = start // self.run
            end = min(stop, chunk * self.run + most)
            last = (end - 1) // self.run
            byte = (last - chunk) * self.chunk_byte + (self.run - 1) * self.step_byte + self.dtype.itemsize
            byte = min(byte, self.end_byte - self.begin_byte - chunk * self.chunk_byte)
            raw = file.read(self.begin_byte + chunk * self.chunk_byte, byte, np.dtype(np.uint8))
            index = np.arange(start, end) - chunk * self.run
            begins = index // self.run * self.chunk_byte + index % self.run * self.step_byte
            yield raw[begins[:, None] + np.arange(self.dtype.itemsize)].view(self.dtype)[:, 0]
            start = end


def _stepped(file: Numbers, begin: int, count: int, step_byte: int, dtype: np.dtype[Any]) -> Values:
    """Return numbers that stand ``step_byte`` from one to the next."""
    if step_byte == dtype.itemsize:
        return file.read(begin, count, dtype)
    raw = file.read(begin, (count - 1) * step_byte + dtype.itemsize, np.dtype(np.uint8))
    return np.ndarray((count,), dtype, raw.data, 0, (step_byte,)).copy()


@dataclass(frozen=True)
class Places:
    """Where all numbers of a channel stand, and what is done to them."""

    file: Numbers
    stretches: tuple[_Stretch, ...]
    offsets: npt.NDArray[np.int64]
    scale: Callable[[Values], Values] | None = None

    @property
    def end_byte(self) -> int:
        """Place behind the last number in the file."""
        return max((one.end_byte for one in self.stretches), default=0)

    def read(self, start: int, stop: int) -> Values:
        """Return numbers ``start`` to ``stop``.

        Raises
        ------
        InputError
            Where the file is gone or became shorter since it was opened.
        """
        parts: list[Values] = []
        which = int(np.searchsorted(self.offsets, start, side="right")) - 1
        while start < stop:
            base, end = int(self.offsets[which]), min(stop, int(self.offsets[which + 1]))
            found = self.stretches[which].read(self.file, start - base, end - base)
            parts.extend(self.scale(part) if self.scale else part for part in found)
            start, which = end, which + 1
        return parts[0] if len(parts) == 1 else np.concatenate(parts)


def places_of(file: Any, channel: Any, numbers: Numbers) -> Places | None:
    """Return where a channel's numbers stand; None where that is not known.

    The library's own list of segments and its scaling are looked at; they are no public ones, so anything unexpected in
    them means None.
    """
    try:
        stretches = [one for segment in file._reader._segments for one in _stretches(segment, channel.path)]
        scale = _scale_of(channel, stretches[0].dtype)
    except (AttributeError, TypeError, ValueError, KeyError, IndexError, ImportError, ZeroDivisionError):
        return None
    offsets = np.concatenate([[0], np.cumsum([one.count for one in stretches])]).astype(np.int64)
    if len({one.dtype for one in stretches}) != 1 or offsets[-1] != len(channel):
        return None
    if scale is None and stretches[0].dtype.newbyteorder("=") != np.dtype(channel.dtype):
        return None
    return Places(numbers, tuple(stretches), offsets, scale)


def has_cut_chunks(file: Any) -> bool:
    """Return whether a segment holds less than the chunks that it speaks of; False where that is not known."""
    try:
        return any(segment.final_chunk_lengths_override is not None for segment in file._reader._segments)
    except (AttributeError, TypeError):
        return False


def _scale_of(channel: Any, dtype: np.dtype[Any]) -> Callable[[Values], Values] | None:
    """Return the library's own scaling of stored numbers, which looks at each of them alone; None without one."""
    from nptdms.base_segment import RawChannelDataChunk

    scaling = channel._scaling
    if scaling is None:
        return None

    def scale(stored: Values) -> Values:
        native = stored.astype(dtype.newbyteorder("="), copy=False)
        return np.asarray(scaling.scale(RawChannelDataChunk.channel_data(native)))

    if scale(np.zeros(2, dtype)).shape != (2,):
        raise ValueError("a scaling of another kind")
    return scale


def _stretches(segment: Any, path: str) -> Iterator[_Stretch]:
    """Yield where the numbers of a channel stand in a segment: in its whole chunks, and in a last one that is cut off.

    Raises
    ------
    ValueError
        Where they stand in a way that is not known here.
    """
    if not segment.toc_mask & _RAW_DATA:
        return
    holding = [one for one in segment.ordered_objects if one.has_data]
    places = [place for place, one in enumerate(holding) if one.path == path]
    if not places:
        return
    if segment.toc_mask & _DAQMX:
        raise ValueError("numbers of several scalers")
    one, before = holding[places[0]], holding[: places[0]]
    dtype = np.dtype(one.data_type.nptype).newbyteorder(">" if segment.toc_mask & _BIG_ENDIAN else "<")
    if one.data_size != one.number_values * dtype.itemsize or one.number_values <= 0:
        raise ValueError("numbers of no fixed size")
    chunk_byte, begin = sum(int(each.data_size) for each in holding), int(segment.data_position)
    override, chunks = segment.final_chunk_lengths_override, int(segment.num_chunks)
    step_byte, run = dtype.itemsize, int(one.number_values)
    if segment.toc_mask & _INTERLEAVED:
        if len({each.number_values for each in holding}) != 1:
            raise ValueError("channels of different length take turns")
        step_byte = chunk_byte // run
        shift = sum(int(each.data_size) for each in before) // run
    else:
        shift = sum(int(each.data_size) for each in before)
    whole = chunks if override is None else chunks - 1
    if whole:
        yield _Stretch(whole * run, begin + shift, run, step_byte, chunk_byte, dtype)
    left = 0 if override is None else int(override.get(path, 0))
    if left:
        if not segment.toc_mask & _INTERLEAVED:
            shift = sum(int(override.get(each.path, 0)) * int(each.data_size // each.number_values) for each in before)
        yield _Stretch(left, begin + whole * chunk_byte + shift, left, step_byte, left * step_byte, dtype)
