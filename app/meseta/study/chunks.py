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
from meseta.study.columns import write_array
from meseta.study.strict import dataset, filters, read_array, read_attribute
from meseta.traces import Quality, Samples

__all__ = ["CHUNK_SAMPLES", "BlockFile", "ChunkSamples", "read_samples", "write_samples"]

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


def write_samples(
    parent: h5py.Group,
    name: str,
    samples: Samples,
    dtype: npt.DTypeLike,
    unit: str = "",
    wrote: Callable[[int], None] = lambda _: None,
) -> None:
    """Write samples as an unfiltered chunked dataset, and ``<name>_checksums`` beside it.

    ``wrote`` is called with the number of samples written, chunk by chunk.
    """
    kind = np.dtype(dtype).newbyteorder("<")
    chunk = min(max(1 << (len(samples) - 1).bit_length(), 4096), CHUNK_SAMPLES)  # a small study stays small
    made = parent.create_dataset(name, shape=(len(samples),), maxshape=(None,), chunks=(chunk,), dtype=kind)
    made.attrs["unit"] = unit
    checksums = _append(made, samples, 0, len(samples), chunk, wrote)
    write_array(parent, f"{name}_checksums", np.array(checksums, np.uint32))


def _append(
    made: h5py.Dataset, samples: Samples, first: int, last: int, chunk: int, wrote: Callable[[int], None]
) -> list[int]:
    checksums = []
    for start in range(first, last, chunk):
        stop = min(start + chunk, last)
        block = np.ascontiguousarray(samples.read(start, stop), made.dtype)
        checksums.append(zlib.crc32(block.view(np.uint8).data))
        padded = block if len(block) == chunk else np.concatenate([block, np.zeros(chunk - len(block), made.dtype)])
        made.id.write_direct_chunk((start,), padded.tobytes())
        wrote(stop - start)
    return checksums


def read_samples(parent: h5py.Group, name: str, file: BlockFile) -> tuple[ChunkSamples, str]:
    """Return the samples of a dataset that :func:`write_samples` wrote, and their unit."""
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
