"""Numbers put aside in a temporary file while a large recording is read, so that memory stays small.

Texts are parsed once and their columns put aside; columns of a large 2D array are turned into rows.  The file has no
name where the system allows it, and is gone with the last that refers to it.
"""

from __future__ import annotations

import errno
import os
import tempfile
import threading
import weakref
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError

__all__ = ["Spool", "SpooledColumn", "SpooledColumns", "SpooledRow", "kept_in", "turned"]

TURN_BYTE: Final = 64 << 20


def _folder() -> str:
    """Return where large temporary files belong: TMPDIR, else /var/tmp, which lies on a disk, else the usual place."""
    if os.environ.get("TMPDIR") or not os.access("/var/tmp", os.W_OK):  # noqa: S108  no fixed name is made in it
        return tempfile.gettempdir()
    return "/var/tmp"  # noqa: S108


class Spool:
    """A temporary file for numbers; written in any place, read from many threads."""

    def __init__(self, where: Path) -> None:
        self._where, self._folder = where, _folder()
        try:
            self._file = tempfile.TemporaryFile(dir=self._folder, prefix="meseta-", buffering=0)  # noqa: SIM115
        except OSError as error:
            raise self._fault(error) from error
        self._lock = threading.Lock()
        self.end = 0
        """Place behind the last byte so far."""
        self.close = weakref.finalize(self, self._file.close)

    def append(self, blocks: Iterable[bytes]) -> int:
        """Put bytes behind those that are there; return the place at which they begin.

        Raises
        ------
        InputError
            Where the disk is full.
        """
        begin = self.end
        for block in blocks:
            self.write(self.end, np.frombuffer(block, np.uint8))
        return begin

    def write(self, place: int, values: npt.NDArray[Any]) -> None:
        """Write numbers from byte ``place`` on.

        Raises
        ------
        InputError
            Where the disk is full.
        """
        try:
            with self._lock:
                self._file.seek(place)
                data = memoryview(np.ascontiguousarray(values).view(np.uint8).reshape(-1).data)
                self.end = max(self.end, place + len(data))
                while data:
                    data = data[self._file.write(data) :]
        except OSError as error:
            raise self._fault(error) from error

    def _fault(self, error: OSError) -> InputError:
        what = "is full" if error.errno in (errno.ENOSPC, errno.EDQUOT) else f"fails ({error.strerror})"
        return InputError(
            f"needs room for temporary numbers, and the disk of {self._folder} {what}",
            str(self._where),
            "make room, or name another folder in the environment variable TMPDIR",
        )

    def read(self, place: int, count: int, dtype: np.dtype[Any]) -> npt.NDArray[Any]:
        """Return ``count`` numbers from byte ``place`` on."""
        values = np.empty(count, dtype)
        into = values.view(np.uint8).data
        done = 0
        with self._lock:
            self._file.seek(place)
            while done < len(into):
                got = self._file.readinto(into[done:])
                if not got:
                    raise InputError("lost its temporary numbers", str(self._where), "read it again")
                done += got
        return values


class SpooledColumns:
    """Columns of a table, put aside block of rows by block of rows."""

    def __init__(self, where: Path, columns: int) -> None:
        self._spool, self.columns = Spool(where), columns
        self._ends: list[int] = [0]
        self.last_number = [0] * columns
        """Of each column, the row behind its last number that is not NaN."""

    @property
    def rows(self) -> int:
        """Number of rows so far."""
        return self._ends[-1]

    def add(self, block: list[npt.NDArray[np.float64]]) -> None:
        """Put further rows aside."""
        count = len(block[0])
        if count == 0:
            return
        for place, column in enumerate(block):
            finite = ~np.isnan(column)
            if finite.any():
                self.last_number[place] = self.rows + count - int(np.argmax(finite[::-1]))
            self._spool.write(8 * (self.rows * self.columns + place * count), column)
        self._ends.append(self.rows + count)

    def read(self, column: int, start: int, stop: int) -> npt.NDArray[np.float64]:
        """Return rows ``start`` to ``stop`` of a column."""
        values = np.empty(max(stop - start, 0))
        block = int(np.searchsorted(self._ends, start, side="right")) - 1
        at = start
        while at < stop:
            low, high = self._ends[block], self._ends[block + 1]
            end = min(stop, high)
            place = low * self.columns + column * (high - low) + at - low
            values[at - start : end - start] = self._spool.read(8 * place, end - at, np.dtype(np.float64))
            at, block = end, block + 1
        return values


@dataclass(frozen=True)
class SpooledColumn:
    """The first rows of one column that was put aside (see :class:`meseta.traces.Samples`)."""

    table: SpooledColumns
    column: int
    rows: int

    def __len__(self) -> int:
        return self.rows

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return rows ``start`` to ``stop``."""
        return self.table.read(self.column, start, min(stop, self.rows))


@dataclass(frozen=True)
class SpooledRow:
    """Numbers of one type that were put aside end to end (see :class:`meseta.traces.Samples`)."""

    spool: Spool
    length: int
    dtype: np.dtype[Any]
    begin_byte: int = 0

    def __len__(self) -> int:
        return self.length

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return numbers ``start`` to ``stop``."""
        place = self.begin_byte + start * self.dtype.itemsize
        return self.spool.read(place, max(stop - start, 0), self.dtype)


def kept_in(values: npt.NDArray[Any], spool: Spool) -> SpooledRow:
    """Put numbers behind those that are in a spool; return them as samples."""
    begin = spool.end
    spool.write(begin, values)
    return SpooledRow(spool, len(values), values.dtype, begin)


def turned(
    read_rows: Callable[[int, int], npt.NDArray[Any]], shape: tuple[int, int], dtype: np.dtype[Any], where: Path
) -> SpooledRow:
    """Return the columns of a 2D array end to end, turned in one walk over its rows.

    Parameters
    ----------
    read_rows : callable
        Returns rows first to last, (last - first, columns).
    shape : (rows, columns)
    dtype : numpy dtype
    where : Path
        Of the recording, for errors.
    """
    spool, size = Spool(where), dtype.itemsize
    rows, columns = shape
    step = max(TURN_BYTE // max(columns * size, 1), 1)
    for first in range(0, rows, step):
        block = np.ascontiguousarray(read_rows(first, min(first + step, rows)).T, dtype)
        for column in range(columns):
            spool.write((column * rows + first) * size, block[column])
    return SpooledRow(spool, rows * columns, dtype)
