"""TDMS files, channel by channel."""

from __future__ import annotations

import logging
import struct
import threading
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.intake.readers.shared_blocks import SharedBlocks
from meseta.intake.readers.spool import Spool
from meseta.intake.readers.tdms_places import Places, has_cut_chunks, places_of
from meseta.recipe.intake import IntakeSettings

__all__ = ["TdmsReader"]

LONG_SAMPLES: Final = 4_000_000

_FAULTS: Final = (
    ValueError, KeyError, EOFError, OSError, IndexError, TypeError, OverflowError, struct.error, AttributeError,
    AssertionError, NotImplementedError, ZeroDivisionError, MemoryError,
)  # fmt: skip


class _Data:
    """The samples of one channel, read from the file when asked for, from one thread at a time.

    Where it is known at which places the numbers of the channel stand, they are read from there; else the library reads
    them, which takes whole chunks: of a long channel once, into a temporary file.
    """

    def __init__(self, channel: Any, path: Path, name: str, lock: threading.Lock, places: Places | None) -> None:
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
                return self._places.read(start, stop).astype(self.dtype, copy=False)
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


class TdmsReader:
    """Reads TDMS files."""

    name = "TDMS"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the file begins with a TDMS segment."""
        return head.startswith(b"TDSm")

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the channels of the file, groups as groups."""
        from nptdms import TdmsFile
        from nptdms.log import log_manager

        log_manager.set_level(logging.CRITICAL)  # what it warns of is said as a doubt
        with ExitStack() as stack:
            opened = stack.enter_context(path.open("rb"))
            try:
                file = TdmsFile.open(opened)
                found = understood(_tree(file, path), path, settings)
                cut_off = bool(file.file_status.incomplete_final_segment) or has_cut_chunks(file)
            except _FAULTS as error:
                raise InputError(f"is damaged ({str(error)[:60]})", str(path), "copy the file again") from error
            doubts = ("its last part is not whole: it was cut off while it was written",) if cut_off else ()
            return replace(found, doubts=(*found.doubts, *doubts), close=stack.pop_all().close)


def _tree(file: Any, path: Path) -> Tree:
    tree, lock = Tree(attributes={"": dict(file.properties)}), threading.Lock()
    size, numbers = path.stat().st_size, SharedBlocks(path)
    for group in file.groups():
        home = f"/{group.name.replace('/', '_')}"
        tree.attributes[home] = dict(group.properties)
        for channel in group.channels():
            name = f"{home}/{channel.name.replace('/', '_')}"
            count, places = len(channel), places_of(file, channel, numbers)
            claimed = count * max(np.dtype(channel.dtype).itemsize if channel.dtype is not None else 1, 1)
            if claimed > 64 * size or (places is not None and places.end_byte > size):
                tree.refused.append(f"{name} claims more samples than the file holds")
            elif count > 0 and np.dtype(channel.dtype).kind in "iuf":
                data = _Data(channel, path, name, lock, places)
                tree.nodes.append(Node(name, data, data.shape, data.dtype, _attributes(channel.properties)))
    return tree


def _attributes(properties: Any) -> dict[str, Any]:
    """Return a channel's properties; scaling is applied by the library, so its own entries are left out."""
    found = {key: value for key, value in dict(properties).items() if not str(key).startswith("NI_")}
    if "unit_string" in found:
        found["unit"] = found.pop("unit_string")
    return found
