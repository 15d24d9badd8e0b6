"""Arrays whose numbers stay where they are, in the recording or put aside, and are read part by part."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final, Protocol

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError

__all__ = ["FileArray", "InFile", "InMemory", "Numbers"]

BLOCK_BYTE: Final = 16 << 20
LONG_ROW_BYTE: Final = 64 << 10
"""Of rows that are longer, only what is wanted is read."""


class Numbers(Protocol):
    """Bytes that are read as numbers from a place on."""

    def read(self, place: int, count: int, dtype: np.dtype[Any]) -> npt.NDArray[Any]:
        """Return ``count`` numbers from byte ``place`` on."""
        ...


@dataclass(frozen=True)
class InFile:
    """Numbers that lie in the recording as they are."""

    path: Path

    def read(self, place: int, count: int, dtype: np.dtype[Any]) -> npt.NDArray[Any]:
        """Return ``count`` numbers from byte ``place`` on.

        Raises
        ------
        InputError
            Where the file is gone or became shorter since it was opened.
        """
        try:
            found = np.fromfile(self.path, dtype, count, offset=place)
        except OSError as error:
            what = f"cannot be read any more ({error.strerror or error})"
            raise InputError(what, str(self.path), "check the file and the disk") from error
        if len(found) != count:
            raise InputError("became shorter while it was read", str(self.path), "wait until it is written whole")
        return found


@dataclass(frozen=True)
class InMemory:
    """Numbers among bytes in memory."""

    data: bytes

    def read(self, place: int, count: int, dtype: np.dtype[Any]) -> npt.NDArray[Any]:
        """Return ``count`` numbers from byte ``place`` on."""
        return np.frombuffer(self.data, dtype, count, place)


@dataclass(frozen=True)
class FileArray:
    """An array that is read in parts: of each axis a range, a place, or all.

    Attributes
    ----------
    numbers : Numbers
        Where its bytes are.
    path : Path
        Of the recording, for errors.
    shape : tuple of int
    stored : numpy dtype
        Type as it is stored, with its byte order.
    dtype : numpy dtype
        Type as it is given.
    begin_byte : int
        Where its numbers begin.
    turned : bool
        Whether its first axis runs fastest (Fortran order); then it is the transpose of what lies there.
    field : str
        Column of a compound array.
    """

    numbers: Numbers
    path: Path
    shape: tuple[int, ...]
    stored: np.dtype[Any]
    dtype: np.dtype[Any]
    begin_byte: int = 0
    turned: bool = False
    field: str = ""

    @property
    def size(self) -> int:
        """Number of values."""
        return math.prod(self.shape)

    @property
    def transposed(self) -> FileArray:
        """The same numbers with the axes in reverse."""
        return replace(self, shape=self.shape[::-1], turned=not self.turned)

    def fields(self, name: str) -> FileArray:
        """Return one column of a compound array."""
        return replace(self, field=name, dtype=self.dtype[name])

    def __getitem__(self, key: Any) -> npt.NDArray[Any]:
        """Return a part of the array: one key an axis, the others whole."""
        keys = list(key) if isinstance(key, tuple) else [key]
        keys += [slice(None)] * (len(self.shape) - len(keys))
        if not self.turned:
            return self._part(0, self.shape, keys)
        return self._part(0, self.shape[::-1], keys[::-1]).T

    def _part(self, begin: int, shape: tuple[int, ...], keys: Sequence[Any]) -> npt.NDArray[Any]:
        """Return a part of an array whose last axis runs fastest, from its value ``begin`` on."""
        if not shape:
            return self._values(begin, 1).reshape(())
        first, rest, width = keys[0], keys[1:], math.prod(shape[1:])
        if not isinstance(first, slice):
            return self._part(begin + int(first) * width, shape[1:], rest)
        start, stop, step = first.indices(shape[0])
        if step != 1:
            raise ValueError("only whole ranges are read")
        count = max(stop - start, 0)
        if all(isinstance(one, slice) and one.indices(n) == (0, n, 1) for one, n in zip(rest, shape[1:], strict=True)):
            return self._values(begin + start * width, count * width).reshape(count, *shape[1:])
        row_byte = width * self.stored.itemsize
        if count and row_byte > LONG_ROW_BYTE:
            return np.stack([self._part(begin + row * width, shape[1:], rest) for row in range(start, stop)])
        rows = max(BLOCK_BYTE // max(row_byte, 1), 1)
        picked = [
            self._values(begin + low * width, (min(low + rows, stop) - low) * width).reshape(-1, *shape[1:])[
                (slice(None), *rest)
            ]
            for low in range(start, stop, rows)
        ]
        return np.concatenate(picked or [np.empty((0, *shape[1:]), self.dtype)[(slice(None), *rest)]])

    def _values(self, begin: int, count: int) -> npt.NDArray[Any]:
        """Return values that stand together."""
        stored = self.numbers.read(self.begin_byte + begin * self.stored.itemsize, count, self.stored)
        return (stored[self.field] if self.field else stored).astype(self.dtype, copy=False)
