"""Packed chunks too large for the library's cache: each is unpacked once, not again for every part that is read.

A writer that expects many rows may make one chunk far larger than the table: 300 MB for a few thousand rows.
"""

from __future__ import annotations

import math
import threading
from collections import OrderedDict
from dataclasses import dataclass, field
from typing import Any, Final

import h5py
import numpy as np
import numpy.typing as npt

__all__ = ["LARGEST_CHUNK_BYTE", "UnpackedRows", "chunk_byte", "rows_of_large_chunks"]

LARGEST_CHUNK_BYTE: Final = 512 << 20
"""A chunk is unpacked as a whole; one that is larger than this is refused."""
KEPT_BYTE: Final = 64 << 20
"""So much of what was unpacked is kept for a file, and always the last."""


def chunk_byte(plist: Any, itemsize: int) -> int:
    """Return what one packed chunk takes when it is unpacked; 0 where nothing is packed."""
    if plist.get_layout() != h5py.h5d.CHUNKED or not plist.get_nfilters():
        return 0
    return math.prod(plist.get_chunk()) * itemsize


def rows_of_large_chunks(identity: Any, plist: Any, shape: tuple[int, ...], itemsize: int) -> int:
    """Return the rows that are unpacked together where a chunk is larger than the library keeps; else 0."""
    size = chunk_byte(plist, itemsize)
    if not size or size <= identity.get_access_plist().get_chunk_cache()[1]:
        return 0
    rows = int(plist.get_chunk()[0])
    together = min(rows, shape[0]) * math.prod(shape[1:]) * itemsize
    return rows if together <= LARGEST_CHUNK_BYTE else 0


@dataclass(eq=False)
class UnpackedRows:
    """Rows of a file's datasets with large chunks, kept as they were unpacked last; read from many threads."""

    _kept: OrderedDict[tuple[str, int], npt.NDArray[Any]] = field(default_factory=OrderedDict)
    _lock: Any = field(default_factory=threading.Lock)

    def read(self, name: str, dataset: Any, rows: int, start: int, stop: int) -> npt.NDArray[Any]:
        """Return rows ``start`` to ``stop`` of a dataset whose chunks have so many rows."""
        blocks = range(start // rows, -(-stop // rows)) if stop > start else range(0)
        parts = []
        for block in blocks:
            first = block * rows
            parts.append(self._block(name, dataset, block, rows)[max(start - first, 0) : stop - first])
        if len(parts) == 1:
            return parts[0].copy()  # what is kept must not be changed
        return np.concatenate(parts) if parts else dataset[0:0]

    def _block(self, name: str, dataset: Any, block: int, rows: int) -> npt.NDArray[Any]:
        with self._lock:
            found = self._kept.pop((name, block), None)
            if found is None:
                while self._kept and sum(one.nbytes for one in self._kept.values()) > KEPT_BYTE // 2:
                    self._kept.popitem(last=False)
                found = dataset[block * rows : (block + 1) * rows]
            self._kept[name, block] = found
            while len(self._kept) > 1 and sum(one.nbytes for one in self._kept.values()) > KEPT_BYTE:
                self._kept.popitem(last=False)
            return found
