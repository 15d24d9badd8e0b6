"""Datasets of an HDF5 file as they are stored; plain ones are read from their places, past the library's lock."""

from __future__ import annotations

import contextlib
import os
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.hdf5_chunks import UnpackedRows

__all__ = ["Column", "RawBytes", "StoredArray", "broken"]


class _Descriptor:
    """An open file, closed when the last one that reads it lets go."""

    def __init__(self, path: Path) -> None:
        self.number = os.open(path, os.O_RDONLY)

    def __del__(self) -> None:
        with contextlib.suppress(AttributeError, OSError):
            os.close(self.number)


class RawBytes:
    """A file's bytes, read from their places by any number of threads at once; the library lets only one in."""

    def __init__(self, path: Path) -> None:
        self._open = _Descriptor(path) if hasattr(os, "preadv") else None

    def __bool__(self) -> bool:
        """Return whether the system allows it."""
        return self._open is not None

    def fill(self, array: npt.NDArray[Any], place: int) -> bool:
        """Fill an array with the bytes from a place on; return False where they cannot be had."""
        file, left = self._open, array.data.cast("B")
        while file is not None and left:
            count = os.preadv(file.number, [left], place)
            if count <= 0:
                return False
            left, place = left[count:], place + count
        return file is not None

    def close(self) -> None:
        """Let go of the file."""
        self._open = None


@dataclass(frozen=True, eq=False)
class StoredArray:
    """A dataset; where its numbers stand in the file as they are, one after the other, they are read from there.

    Attributes
    ----------
    identity : h5py.h5d.DatasetID
    path : str
        File and name, for errors.
    shape : tuple of int
    dtype : numpy dtype
    place : int
        Byte of the file at which the numbers begin; -1 where they are packed, in chunks, or of a type of their own.
    raw : RawBytes, optional
    chunk_rows : int
        Rows that are unpacked together where the library would unpack them again for every part; else 0.
    unpacked : UnpackedRows, optional
        Where such rows are kept.
    """

    identity: Any
    path: str
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    place: int = -1
    raw: RawBytes | None = None
    chunk_rows: int = 0
    unpacked: UnpackedRows | None = None

    @cached_property
    def dataset(self) -> Any:
        """The library's dataset."""
        return h5py.Dataset(self.identity)

    def __getitem__(self, key: Any) -> npt.NDArray[Any]:
        """Return a part of the array."""
        rows, *rest = key if isinstance(key, tuple) and key else (key,)
        if self.unpacked is None or not self.chunk_rows or not isinstance(rows, slice | int):
            found: npt.NDArray[Any] = self.dataset[key]
            return found
        start, stop, _ = (rows if isinstance(rows, slice) else slice(rows, rows + 1)).indices(self.shape[0])
        block = self.unpacked.read(self.path, self.dataset, self.chunk_rows, start, stop)
        picked: npt.NDArray[Any] = block[(slice(None) if isinstance(rows, slice) else 0, *rest)]
        return picked

    def fields(self, name: str) -> Any:
        """Return one column of a compound array."""
        return Column(self, name) if self.chunk_rows else self.dataset.fields(name)

    def run(self, start: int, stop: int) -> npt.NDArray[Any] | None:
        """Return numbers ``start`` to ``stop`` in the order of the file; None where they have no place there."""
        if self.place < 0:
            return None
        found = np.empty(max(stop - start, 0), self.dtype)
        self._fill(found, start)
        return found

    def fill(self, start: int, target: npt.NDArray[np.float32]) -> bool:
        """Fill an array with the numbers from ``start`` on; return False where they are others, or have no place."""
        if self.place < 0 or self.dtype != target.dtype or not target.flags.c_contiguous:
            return False
        self._fill(target, start)
        return True

    def _fill(self, target: npt.NDArray[Any], start: int) -> None:
        assert self.raw is not None
        try:
            is_whole = self.raw.fill(target, self.place + start * self.dtype.itemsize)
        except OSError as error:
            raise broken(self.path) from error
        if not is_whole:
            raise broken(self.path)


@dataclass(frozen=True)
class Column:
    """One column of a compound array, whose elements may be rows of numbers themselves."""

    table: Any
    name: str

    @property
    def path(self) -> str:
        """File and name, for errors."""
        return f"{getattr(self.table, 'path', 'file')}, {self.name}"

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of its numbers."""
        return np.dtype(self.table.dtype[self.name].base)

    @property
    def shape(self) -> tuple[int, ...]:
        """Rows, and the shape of an element."""
        return (*self.table.shape, *self.table.dtype[self.name].shape)

    def __getitem__(self, key: Any) -> npt.NDArray[Any]:
        """Return a part of the column."""
        rows, *rest = key if isinstance(key, tuple) and key else (key,)
        found: npt.NDArray[Any] = self.table[rows][self.name]
        if rest:
            found = found[(slice(None), *rest) if isinstance(rows, slice) else tuple(rest)]
        return found


def broken(where: str) -> InputError:
    """Return the error of samples that cannot be had."""
    return InputError("cannot be read: the file is damaged or truncated", where, "copy the file again")
