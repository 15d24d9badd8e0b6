"""TDMS files, channel by channel."""

from __future__ import annotations

import logging
import struct
import threading
from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.intake.readers.spool import Spool
from meseta.recipe.intake import IntakeSettings

__all__ = ["TdmsReader"]

LONG_SAMPLES: Final = 4_000_000
_RAW_DATA, _INTERLEAVED, _BIG_ENDIAN, _DAQMX = 1 << 3, 1 << 5, 1 << 6, 1 << 7
"""Bits of a segment's table of contents, as documented by its maker ("TDMS File Format Internal Structure")."""

_FAULTS: Final = (
    ValueError, KeyError, EOFError, OSError, IndexError, TypeError, OverflowError, struct.error, AttributeError,
    AssertionError, NotImplementedError, ZeroDivisionError, MemoryError,
)  # fmt: skip


class _Data:
    """The samples of one channel, read from the file when asked for, from one thread at a time.

    Where the numbers of the channel stand together as they are, they are read from their places; else the library reads
    them, which takes whole chunks: of a long channel once, into a temporary file.
    """

    def __init__(self, channel: Any, path: Path, name: str, lock: threading.Lock, places: _Places | None) -> None:
        self._channel, self.path, self._name, self._lock, self._places = channel, path, name, lock, places
        self.dtype = np.dtype(channel.dtype)
        self.shape = (len(channel),)
        self._spool: Spool | None = None

    def __getitem__(self, place: slice) -> npt.NDArray[Any]:
        start, stop, _ = place.indices(self.shape[0])
        if stop <= start:
            return np.empty(0, self.dtype)
        try:
            if self._places is not None:
                return self._places.read(self.path, start, stop).astype(self.dtype, copy=False)
            with self._lock:
                if self.shape[0] <= LONG_SAMPLES:
                    return np.asarray(self._channel.read_data(start, stop - start, scaled=True))
                self._spool = self._spool or self._put_aside()
            return self._spool.read(start * self.dtype.itemsize, stop - start, self.dtype)
        except _FAULTS as error:
            where = f"{self.path}, {self._name}"
            raise InputError("is damaged", where, "copy the file again from its origin") from error

    def _put_aside(self) -> Spool:
        spool, place = Spool(self.path), 0
        for chunk in self._channel.data_chunks():
            values = np.ascontiguousarray(chunk[:], self.dtype)
            spool.write(place, values)
            place += values.nbytes
        if place != self.shape[0] * self.dtype.itemsize:
            raise ValueError("a channel is shorter than its header says")
        return spool


@dataclass(frozen=True)
class _Places:
    """Where the numbers of a channel stand in the file: stretches of ``count`` numbers from byte ``begin`` on."""

    dtype: np.dtype[Any]
    offsets: npt.NDArray[np.int64]
    begin: npt.NDArray[np.int64]

    def read(self, path: Path, start: int, stop: int) -> npt.NDArray[Any]:
        """Return numbers ``start`` to ``stop``."""
        found, size = [], self.dtype.itemsize
        stretch = int(np.searchsorted(self.offsets, start, side="right")) - 1
        at = start
        while at < stop:
            end = min(stop, int(self.offsets[stretch + 1]))
            place = int(self.begin[stretch]) + (at - int(self.offsets[stretch])) * size
            part = np.fromfile(path, self.dtype, end - at, offset=place)
            if len(part) != end - at:
                raise EOFError("the file became shorter")
            found.append(part)
            at, stretch = end, stretch + 1
        return found[0] if len(found) == 1 else np.concatenate(found)


def _places_of(file: Any, channel: Any) -> _Places | None:
    """Return where a channel's numbers stand; None where they are interleaved, scaled, or the library keeps it secret.

    The library's own list of segments is looked at; it is no public one, so anything unexpected in it means None.
    """
    if any(str(key).startswith(("NI_Scal", "NI_Number_Of_Scales")) for key in channel.properties):
        return None
    try:
        found = [one for segment in file._reader._segments for one in _stretches(segment, channel.path)]
        counts, begins, types = zip(*found, strict=True)
    except (AttributeError, TypeError, ValueError, KeyError):
        return None
    offsets = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    if len(set(types)) != 1 or offsets[-1] != len(channel) or types[0].newbyteorder("=") != np.dtype(channel.dtype):
        return None
    return _Places(types[0], offsets, np.array(begins, np.int64))


def _stretches(segment: Any, path: str) -> Iterator[tuple[int, int, np.dtype[Any]]]:
    """Yield (numbers, first byte, type) of each chunk of a segment that holds numbers of a channel."""
    if not segment.toc_mask & _RAW_DATA:
        return
    holding = [one for one in segment.ordered_objects if one.has_data]
    places = [place for place, one in enumerate(holding) if one.path == path]
    if not places:
        return
    if segment.toc_mask & (_INTERLEAVED | _DAQMX):
        raise ValueError("the numbers of channels take turns")
    one, override = holding[places[0]], segment.final_chunk_lengths_override
    order = ">" if segment.toc_mask & _BIG_ENDIAN else "<"
    dtype = np.dtype(one.data_type.nptype).newbyteorder(order)
    if one.data_size != one.number_values * dtype.itemsize:
        raise ValueError("numbers of no fixed size")
    chunk_byte = sum(int(each.data_size) for each in holding)
    before = sum(int(each.data_size) for each in holding[: places[0]])
    for chunk in range(int(segment.num_chunks)):
        begin = int(segment.data_position) + chunk * chunk_byte
        if override is None or chunk < segment.num_chunks - 1:
            yield int(one.number_values), begin + before, dtype
        elif override.get(path, 0):
            cut = sum(int(override.get(e.path, 0)) * int(e.data_size // e.number_values) for e in holding[: places[0]])
            yield int(override[path]), begin + cut, dtype


class TdmsReader:
    """Reads TDMS files."""

    name = "TDMS"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the file begins with a TDMS segment."""
        return head.startswith(b"TDSm")

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the channels of the file, groups as groups."""
        from nptdms import TdmsFile

        logging.getLogger("nptdms").setLevel(logging.ERROR)  # what it warns of is said as a doubt
        with ExitStack() as stack:
            opened = stack.enter_context(path.open("rb"))
            try:
                file = TdmsFile.open(opened)
                found = understood(_tree(file, path), path, settings)
                cut_off = bool(file.file_status.incomplete_final_segment)
            except _FAULTS as error:
                raise InputError(f"is damaged ({str(error)[:60]})", str(path), "copy the file again") from error
            doubts = ("its last part is not whole: it was cut off while it was written",) if cut_off else ()
            return replace(found, doubts=(*found.doubts, *doubts), close=stack.pop_all().close)


def _tree(file: Any, path: Path) -> Tree:
    tree, lock = Tree(attributes={"": dict(file.properties)}), threading.Lock()
    size = path.stat().st_size
    for group in file.groups():
        home = f"/{group.name.replace('/', '_')}"
        tree.attributes[home] = dict(group.properties)
        for channel in group.channels():
            name = f"{home}/{channel.name.replace('/', '_')}"
            count = len(channel)
            if count * max(np.dtype(channel.dtype).itemsize if channel.dtype is not None else 1, 1) > 64 * size:
                tree.refused.append(f"{name} claims more samples than the file holds")
            elif count > 0 and np.dtype(channel.dtype).kind in "iuf":
                data = _Data(channel, path, name, lock, _places_of(file, channel))
                tree.nodes.append(Node(name, data, data.shape, data.dtype, _attributes(channel.properties)))
    return tree


def _attributes(properties: Any) -> dict[str, Any]:
    """Return a channel's properties; scaling is applied by the library, so its own entries are left out."""
    found = {key: value for key, value in dict(properties).items() if not str(key).startswith("NI_")}
    if "unit_string" in found:
        found["unit"] = found.pop("unit_string")
    return found
