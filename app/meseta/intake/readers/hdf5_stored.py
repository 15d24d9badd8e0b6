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

__all__ = ["RawBytes", "StoredArray", "broken"]


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
    """

    identity: Any
    path: str
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    place: int = -1
    raw: RawBytes | None = None

    @cached_property
    def dataset(self) -> Any:
        """The library's dataset."""
        return h5py.Dataset(self.identity)

    def __getitem__(self, key: Any) -> npt.NDArray[Any]:
        """Return a part of the array."""
        found: npt.NDArray[Any] = self.dataset[key]
        return found

    def fields(self, name: str) -> Any:
        """Return one column of a compound array."""
        return self.dataset.fields(name)

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


def broken(where: str) -> InputError:
    """Return the error of samples that cannot be had."""
    return InputError("cannot be read: the file is damaged or truncated", where, "copy the file again")
