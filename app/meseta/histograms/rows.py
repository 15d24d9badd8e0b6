"""Rows of counts put together block by block: in memory, or in a temporary file where they are many."""

from __future__ import annotations

import mmap
import tempfile
from collections.abc import Iterable
from itertools import chain
from typing import IO, Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import OutputError

__all__ = ["MOST_BYTES_IN_MEMORY", "stacked"]

Counts = npt.NDArray[np.unsignedinteger]
MOST_BYTES_IN_MEMORY: Final = 128 << 20
"""A larger matrix lies in a temporary file that is read through the system's page cache."""
_COPY_ROWS: Final = 4096


def stacked(parts: Iterable[Counts], most_bytes: int = MOST_BYTES_IN_MEMORY) -> Counts:
    """Return the rows of several (rows, bins) arrays one after the other, in the widest integer type among them.

    Parameters
    ----------
    parts : iterable of (rows, bins) uint16 or uint32
        Taken one at a time.
    most_bytes : int
        Beyond this the rows are written to a nameless file in the system's folder for temporary files and mapped; the
        file goes with the array.

    Raises
    ------
    OutputError
        Where that folder has no room.
    """
    source, held, size = iter(parts), [], 0
    for part in source:
        held.append(part)
        size += part.nbytes
        if size > most_bytes:
            return _in_file(held, source)
    if not held:
        raise ValueError("no rows to put together")
    kind = max((part.dtype for part in held), key=lambda dtype: dtype.itemsize)
    result = np.empty((sum(len(part) for part in held), held[0].shape[1]), kind)
    at = 0
    for part in held:
        result[at : at + len(part)] = part
        at += len(part)
    return result


def _in_file(held: list[Counts], source: Iterable[Counts]) -> Counts:
    bins, rows = held[0].shape[1], 0
    kind: np.dtype[Any] = held[0].dtype
    try:
        file: IO[bytes] = tempfile.TemporaryFile(prefix="meseta-")  # noqa: SIM115  # lives as long as the array
        for part in chain(_taken(held), source):
            if part.dtype.itemsize > kind.itemsize:
                file, kind = _widened(file, kind, part.dtype, bins), part.dtype
            # real writes: a sparse file that is mapped kills the process where the disk is full
            file.write(np.ascontiguousarray(part, kind).data)
            rows += len(part)
        file.flush()
    except OSError as error:
        raise OutputError(
            f"has no room for a table of counts ({error.strerror})",
            tempfile.gettempdir(),
            "free some space, or set TMPDIR to a folder with room",
        ) from error
    # private pages: what nobody writes to stays the file's, and kernels see an ordinary array
    mapped = np.frombuffer(mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_COPY), kind)
    return mapped.reshape(rows, bins)


def _taken(held: list[Counts]) -> Iterable[Counts]:
    """Yield the arrays of a list, letting go of each."""
    held.reverse()
    while held:
        yield held.pop()


def _widened(file: IO[bytes], kind: np.dtype[Any], wider: np.dtype[Any], bins: int) -> IO[bytes]:
    """Return a file with the same rows in a wider type."""
    result = tempfile.TemporaryFile(prefix="meseta-")  # noqa: SIM115
    file.seek(0)
    while data := file.read(_COPY_ROWS * bins * kind.itemsize):
        result.write(np.frombuffer(data, kind).astype(wider).data)
    file.close()
    return result
