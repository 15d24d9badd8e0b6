"""Samples in the study: unfiltered chunks, each with a checksum, read straight from the file in blocks.

Reading goes around HDF5: the chunks' places are asked for once, then their bytes are read by positioned reads into
the caller's block.  So memory stays small, threads do not wait for one another, and nothing holds HDF5's global lock.
"""

from __future__ import annotations

import os
import threading
import weakref
import zlib
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import h5py
import numpy as np
import numpy.typing as npt

from meseta.errors import StudyError
from meseta.study.columns import write_array, write_attribute
from meseta.study.strict import dataset, filters, read_array, read_attribute
from meseta.traces import Quality, Samples

__all__ = ["CHUNK_SAMPLES", "BlockFile", "ChunkSamples", "SampleRow", "read_samples"]

CHUNK_SAMPLES: Final = 262_144
"""Samples a chunk: 1 MiB of float32."""


class BlockFile:
    """A file for positioned reads from many threads; closed when nothing refers to it any more."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._handle = os.open(path, os.O_RDONLY | getattr(os, "O_BINARY", 0))
        self._lock = threading.Lock()
        self.close = weakref.finalize(self, os.close, self._handle)

    def read(self, place: int, buffer: memoryview) -> None:
        """Fill ``buffer`` with the bytes from ``place`` on.

        Raises
        ------
        StudyError
            Where the file ends before.
        """
        done = 0
        while done < len(buffer):
            count = self._some(place + done, buffer[done:])
            if count == 0:
                raise StudyError("ends before its data do", str(self.path), "the file was cut short; use a copy")
            done += count

    def _some(self, place: int, buffer: memoryview) -> int:
        if hasattr(os, "preadv"):
            return os.preadv(self._handle, [buffer], place)
        with self._lock:  # no positioned reads on this system
            os.lseek(self._handle, place, os.SEEK_SET)
            data = os.read(self._handle, len(buffer))
        buffer[: len(data)] = data
        return len(data)


@dataclass(frozen=True)
class ChunkSamples:
    """Samples of one channel behind a study file (see :class:`meseta.traces.Samples`).

    Every chunk is checked against its checksum when it is first read.  Chunks in ``lost`` are known to be damaged:
    their samples read as NaN, in a quality channel as not trusted.
    """

    file: BlockFile
    name: str
    length: int
    dtype: np.dtype[Any]
    chunk: int
    places: npt.NDArray[np.int64]
    checksums: npt.NDArray[np.uint32]
    checked: npt.NDArray[np.bool_] = field(repr=False)
    lost: frozenset[int] = frozenset()

    def __len__(self) -> int:
        return self.length

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop``.

        Raises
        ------
        StudyError
            Naming the samples, where a chunk is damaged.
        """
        out = np.empty(max(stop - start, 0), self.dtype)
        if not len(out):
            return out
        for number in range(start // self.chunk, (stop - 1) // self.chunk + 1):
            low, high = number * self.chunk, min((number + 1) * self.chunk, self.length)
            begin, end = max(start, low), min(stop, high)
            into = out[begin - start : end - start]
            if number in self.lost:
                into[:] = np.nan if self.dtype.kind == "f" else Quality.UNTRUSTED
            elif self.checked[number]:
                self._bytes(number, begin - low, into)
            elif len(into) == high - low:
                self._whole(number, into)
            else:
                into[:] = self._whole(number, np.empty(high - low, self.dtype))[begin - low : end - low]
        out.flags.writeable = False
        return out

    def damaged(self, number: int) -> bool:
        """Return whether a chunk fails its checksum."""
        low, high = self.span(number)
        buffer = np.empty(high - low, self.dtype)
        try:
            self._whole(number, buffer)
        except StudyError:
            return True
        return False

    def span(self, number: int) -> tuple[int, int]:
        """Return the samples of a chunk."""
        return number * self.chunk, min((number + 1) * self.chunk, self.length)

    def _bytes(self, number: int, first: int, into: npt.NDArray[Any]) -> None:
        self.file.read(int(self.places[number]) + first * self.dtype.itemsize, into.view(np.uint8).data)

    def _whole(self, number: int, into: npt.NDArray[Any]) -> npt.NDArray[Any]:
        self._bytes(number, 0, into)
        if zlib.crc32(into.view(np.uint8).data) != self.checksums[number]:
            low, high = self.span(number)
            raise StudyError(
                f"samples {low} to {high} of '{self.name}' are damaged (checksum)",
                str(self.file.path),
                "the other traces stay usable; import these recordings again",
            )
        self.checked[number] = True
        return into


class SampleRow:
    """Writes samples as an unfiltered chunked dataset, and ``<name>_checksums`` beside it; can go on with one.

    Parameters
    ----------
    parent : h5py.Group
    name : str
    dtype : dtype
    unit : str
    expected : int
        Number of samples to come, by which the size of the chunks is chosen.
    written : ChunkSamples, optional
        What the dataset holds already.
    """

    def __init__(
        self,
        parent: h5py.Group,
        name: str,
        dtype: npt.DTypeLike,
        unit: str,
        expected: int,
        written: ChunkSamples | None = None,
    ) -> None:
        self.parent, self.name = parent, name
        if written is None:
            # a small study stays small
            chunk = min(max(1 << max(expected - 1, 0).bit_length(), 4096), CHUNK_SAMPLES)
            kind = np.dtype(dtype).newbyteorder("<")
            self._made = parent.create_dataset(name, shape=(0,), maxshape=(None,), chunks=(chunk,), dtype=kind)
            write_attribute(self._made, "unit", unit)
            self.length, self._checksums = 0, list[int]()
        else:
            self._made, chunk = parent[name], written.chunk
            self.length = len(written)
            self._checksums = written.checksums[: self.length // chunk].tolist()
        self._chunk, self._dtype = chunk, self._made.dtype
        self._part = np.zeros(chunk, self._dtype)
        whole = self.length // chunk * chunk
        if written is not None:
            self._part[: self.length - whole] = written.read(whole, self.length)

    def append(
        self,
        samples: Samples,
        wrote: Callable[[int], None] = lambda _: None,
        start: int = 0,
        stop: int | None = None,
    ) -> None:
        """Add samples ``start`` to ``stop`` (all); ``wrote`` is told the number of samples written, chunk by chunk."""
        done, end = start, len(samples) if stop is None else stop
        while done < end:
            filled = self.length % self._chunk
            count = min(self._chunk - filled, end - done)
            self._part[filled : filled + count] = samples.read(done, done + count)
            self.length += count
            done += count
            if filled + count == self._chunk:
                self._flush(self._chunk)
            wrote(count)

    def finish(self) -> None:
        """Write the last, partly filled chunk and the checksums."""
        filled = self.length % self._chunk
        if filled:
            self._flush(filled)
        self._made.resize((self.length,))
        write_array(self.parent, f"{self.name}_checksums", np.array(self._checksums, np.uint32))

    def _flush(self, filled: int) -> None:
        """Write the present chunk; its checksum is that of the samples, without what fills it up."""
        self._part[filled:] = 0
        first = (self.length - 1) // self._chunk * self._chunk
        self._checksums.append(zlib.crc32(self._part[:filled].view(np.uint8).data))
        if self._made.shape[0] < first + self._chunk:
            self._made.resize((first + self._chunk,))
        self._made.id.write_direct_chunk((first,), self._part.tobytes())


def read_samples(parent: h5py.Group, name: str, file: BlockFile) -> tuple[ChunkSamples, str]:
    """Return the samples of a dataset that :class:`SampleRow` wrote, and their unit."""
    found = dataset(parent, name)
    if found.ndim != 1 or found.chunks is None or filters(found) or found.dtype.kind not in "fiu":
        raise ValueError(f"'{name}' is not a row of unfiltered chunks")
    chunk = int(found.chunks[0])
    count = -(-len(found) // chunk)
    places = np.full(count, -1, np.int64)

    def note(info: Any) -> None:
        number = int(info.chunk_offset[0]) // chunk
        if number < count and info.size == chunk * found.dtype.itemsize:
            places[number] = info.byte_offset

    found.id.chunk_iter(note)
    checksums = read_array(parent, f"{name}_checksums").astype(np.uint32)
    if len(checksums) != count or (places < 0).any():
        raise ValueError(f"'{name}' is not complete")
    unit = str(read_attribute(found, "unit"))
    samples = ChunkSamples(file, name, len(found), found.dtype, chunk, places, checksums, np.zeros(count, np.bool_))
    return samples, unit
