"""Blocks of a recording that its channels share: where their numbers take turns, each block holds some of all."""

from __future__ import annotations

import threading
from collections import OrderedDict
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.readers.file_array import InFile

__all__ = ["SharedBlocks"]

BLOCK_BYTE: Final = 1 << 20
KEPT_BLOCKS: Final = 32
"""Enough for what two threads work on at once, of rows of up to 16 bytes."""
SMALL_BYTE: Final = 8 << 10
"""So little is read by itself where its block is not at hand: who probes a file does not walk through it."""


class SharedBlocks:
    """Numbers in a file whose last blocks read are kept; for many threads (see ``file_array.Numbers``).

    A channel among others that take turns with it is read with all of them; the next channel then finds its numbers
    here.

    Parameters
    ----------
    path : Path
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._file, self._size = InFile(path), path.stat().st_size
        self._kept: OrderedDict[int, npt.NDArray[np.uint8]] = OrderedDict()
        self._lock = threading.Lock()

    def read(self, place: int, count: int, dtype: np.dtype[Any]) -> npt.NDArray[Any]:
        """Return ``count`` numbers from byte ``place`` on.

        Raises
        ------
        InputError
            Where the file is gone or became shorter since it was opened.
        """
        end = place + count * dtype.itemsize
        first, last = place // BLOCK_BYTE, -(-end // BLOCK_BYTE)
        if count <= 0 or end > self._size or (end - place <= SMALL_BYTE and not self._has(first, last)):
            return self._file.read(place, count, dtype)
        found = np.empty(end - place, np.uint8)
        for number in range(first, last):
            begin = number * BLOCK_BYTE
            low, high = max(place, begin), min(end, begin + BLOCK_BYTE)
            found[low - place : high - place] = self._block(number)[low - begin : high - begin]
        return found.view(dtype)

    def _has(self, first: int, last: int) -> bool:
        with self._lock:
            return all(number in self._kept for number in range(first, last))

    def _block(self, number: int) -> npt.NDArray[np.uint8]:
        with self._lock:  # who wants the same block waits for it
            if number not in self._kept:
                begin = number * BLOCK_BYTE
                size = min(BLOCK_BYTE, self._size - begin)
                self._kept[number] = self._file.read(begin, size, np.dtype(np.uint8))
                if len(self._kept) > KEPT_BLOCKS:
                    self._kept.popitem(last=False)
            self._kept.move_to_end(number)
            return self._kept[number]
