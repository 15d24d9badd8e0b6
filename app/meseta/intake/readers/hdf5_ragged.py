"""Rows of different length in an HDF5 file: found in its heaps and read from their places.

The heaps are walked here, since the library may walk a damaged one for ever; whatever a reference claims is checked
before room is made for it.  The layouts of references and heaps are those of the HDF5 File Format Specification
("variable-length data", "global heap").
"""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, Final

import h5py
import numpy as np
import numpy.typing as npt

__all__ = ["Ragged", "ragged_rows"]

BOMB_RATIO: Final = 500
REFERENCE: Final = np.dtype([("length", "<u4"), ("address", "<u8"), ("index", "<u4")])
REFERENCE_BYTE: Final = REFERENCE.itemsize


@dataclass(frozen=True)
class Ragged:
    """A dataset whose elements are rows of numbers of different length, end to end."""

    path: str
    filename: str
    offsets: npt.NDArray[np.int64]
    places: npt.NDArray[np.int64]
    stored: np.dtype[Any]

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of the numbers."""
        return self.stored.newbyteorder("=")

    @property
    def shape(self) -> tuple[int]:
        """Number of numbers in all rows."""
        return (int(self.offsets[-1]),)

    def __getitem__(self, key: slice) -> npt.NDArray[Any]:
        """Return numbers ``start`` to ``stop``."""
        start, stop, _ = key.indices(self.shape[0])
        found = np.empty(max(stop - start, 0), self.dtype)
        row, at = int(np.searchsorted(self.offsets, start, side="right")) - 1, start
        found = found.view(self.stored) if self.stored.isnative else np.empty(len(found), self.stored)
        with Path(self.filename).open("rb", buffering=0) as file:
            while at < stop:
                end = min(stop, int(self.offsets[row + 1]))
                file.seek(int(self.places[row]) + (at - int(self.offsets[row])) * self.stored.itemsize)
                part = found[at - start : end - start]
                if file.readinto(part.view(np.uint8)) != part.nbytes:  # type: ignore[arg-type]
                    raise OSError("became shorter")
                at, row = end, row + 1
        return found.astype(self.dtype, copy=False)


def ragged_rows(dataset: Any, path: str, dtype: np.dtype[Any], file_byte: int) -> Ragged | None:
    """Return the rows of a dataset whose elements are rows of numbers.

    Parameters
    ----------
    dataset : h5py.Dataset
    path : str
        For errors.
    dtype : numpy dtype
        Of the numbers in the rows.
    file_byte : int

    Returns
    -------
    Ragged or None
        None where a reference or a heap is damaged, or they are packed in a way that is not known.
    """
    try:
        references = _references(dataset, file_byte)
        places = None if references is None else _row_places(dataset, references, dtype.itemsize, file_byte)
    except (OSError, RuntimeError, ValueError, zlib.error, struct.error):
        return None
    if references is None or places is None:
        return None
    offsets = np.concatenate([[0], np.cumsum(references["length"], dtype=np.int64)]).astype(np.int64)
    return Ragged(path, dataset.file.filename, offsets, places, dtype)


def _row_places(
    dataset: Any, references: npt.NDArray[Any], item_byte: int, file_byte: int
) -> npt.NDArray[np.int64] | None:
    """Return the byte at which each row begins; None where a heap is not whole.

    The heaps are walked here, since the library may walk a damaged one for ever (HDF5 File Format Specification, global
    heap).
    """
    places = np.zeros(len(references), np.int64)
    filled = np.flatnonzero(references["length"] > 0)
    filled = filled[np.argsort(references["address"][filled], kind="stable")]
    addresses = references["address"][filled]
    edges = np.flatnonzero(np.diff(addresses)) + 1
    with Path(dataset.file.filename).open("rb") as file:
        for rows in np.split(filled, edges) if len(filled) else []:
            address = int(references["address"][rows[0]])
            file.seek(address)
            mark, size = struct.unpack("<4s4xQ", file.read(16))
            if mark != b"GCOL" or not 16 <= size <= file_byte:
                return None
            found = _heap_objects(file, address + 16, min(address + size, file_byte))
            for row in rows.tolist():
                place, held = found.get(int(references["index"][row]), (0, -1))
                if held < int(references["length"][row]) * item_byte:
                    return None
                places[row] = place
    return places


def _heap_objects(file: BinaryIO, begin: int, end: int) -> dict[int, tuple[int, int]]:
    """Return index -> (first byte, bytes) of the objects of a heap that lie between two bytes of the file."""
    found, at = {}, begin
    while at + 16 <= end:
        file.seek(at)
        index, size = struct.unpack("<H6xQ", file.read(16))
        if index == 0 or size > end - at - 16:
            break
        found[index] = (at + 16, size)
        at += 16 + -(-size // 8) * 8
    return found


def _references(dataset: Any, file_byte: int) -> npt.NDArray[Any] | None:
    """Return where each row lies, as its reference states it; None where that cannot be looked at.

    A reference is a length of 4 bytes, an address of 8, an index of 4 (HDF5 File Format Specification, variable-length
    data in a global heap).
    """
    count, plist = len(dataset), dataset.id.get_create_plist()
    if count * REFERENCE_BYTE > file_byte * BOMB_RATIO or dataset.file.userblock_size:
        return None
    if dataset.chunks is None:
        place = dataset.id.get_offset()
        if place is None or count * REFERENCE_BYTE > file_byte:
            return None
        with Path(dataset.file.filename).open("rb") as file:
            file.seek(place)
            raw = file.read(count * REFERENCE_BYTE)
    elif all(plist.get_filter(n)[0] == h5py.h5z.FILTER_DEFLATE for n in range(plist.get_nfilters())):
        size = dataset.chunks[0]
        parts = []
        for first in range(0, count, size):
            part = dataset.id.read_direct_chunk((first,))[1]
            if plist.get_nfilters():
                part = zlib.decompressobj().decompress(part, size * REFERENCE_BYTE)
            parts.append(part)
        raw = b"".join(parts)[: count * REFERENCE_BYTE]
    else:
        return None
    return None if len(raw) < count * REFERENCE_BYTE else np.frombuffer(raw, REFERENCE)
