"""The samples of an HDF5 file (or of arrays like its datasets), laid end to end in the order of traces."""

from __future__ import annotations

import threading
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.readers.hdf5_stored import StoredArray, broken
from meseta.intake.readers.spool import turned
from meseta.traces import ArraySamples

__all__ = [
    "ColumnSamples",
    "Layer",
    "PartSamples",
    "RowSamples",
    "VectorSamples",
    "columns_of",
    "place_of",
    "rows_of",
]

CACHED_BYTE: Final = 64 << 20


@dataclass(frozen=True)
class VectorSamples:
    """A dataset read flat: one dimension, or two of which one is 1; ``field`` picks a column of a compound type."""

    dataset: Any
    field: str = ""

    def __len__(self) -> int:
        return int(np.prod(self.dataset.shape))

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop``."""
        run = _run(self.dataset, start, stop) if not self.field else None
        if run is not None:
            return run
        source = _field(self.dataset, self.field) if self.field else self.dataset
        shape = self.dataset.shape
        if len(shape) == 1:
            return _read(self.dataset, lambda: source[start:stop])
        if shape[0] == 1:
            return _read(self.dataset, lambda: source[0, start:stop])
        return _read(self.dataset, lambda: source[start:stop, 0])

    def read_into(self, start: int, target: npt.NDArray[np.float32]) -> bool:
        """Fill a float32 array from sample ``start`` on; return False where the samples are of another kind."""
        if self.field or len(target) == 0:
            return False
        if isinstance(self.dataset, StoredArray) and self.dataset.fill(start, target):
            return True
        if not _fits(self.dataset, target) or len(self.dataset.shape) != 1:
            return False
        data = self.dataset.dataset
        _read(self.dataset, lambda: data.read_direct(target, slice(start, start + len(target))) or target)
        return True


@dataclass(frozen=True)
class RowSamples:
    """A 2D dataset whose rows stand end to end; ``at`` picks one place of a third, last axis."""

    dataset: Any

    def __len__(self) -> int:
        return int(np.prod(self.dataset.shape))

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop``."""
        run = _run(self.dataset, start, stop)
        if run is not None:
            return run
        n = self.dataset.shape[1]
        first, last = start // n, -(-stop // n)
        if last - first == 1:  # of a row that may be longer than memory, only what is wanted
            return _read(self.dataset, lambda: self.dataset[first, start - first * n : stop - first * n])
        if last - first == 2:
            return np.concatenate([self.read(start, (first + 1) * n), self.read((first + 1) * n, stop)])
        block = _read(self.dataset, lambda: self.dataset[first:last])
        return block.reshape(-1)[start - first * n : stop - first * n]

    def read_into(self, start: int, target: npt.NDArray[np.float32]) -> bool:
        """Fill a float32 array with whole rows from sample ``start`` on; return False where they are of other kind."""
        if len(target) == 0 or not isinstance(self.dataset, StoredArray):
            return False
        if self.dataset.fill(start, target):
            return True
        if not _fits(self.dataset, target) or len(self.dataset.shape) != 2:
            return False
        n = self.dataset.shape[1]
        if start % n or len(target) % n:
            return False
        rows = slice(start // n, (start + len(target)) // n)
        data = self.dataset.dataset
        _read(self.dataset, lambda: data.read_direct(target.reshape(-1, n), rows) or target)
        return True


def rows_of(dataset: Any) -> RowSamples | ColumnSamples:
    """Return the rows of a 2D dataset end to end; those of an array that lies in Fortran order are columns there."""
    return ColumnSamples(dataset.transposed) if getattr(dataset, "turned", False) else RowSamples(dataset)


def columns_of(dataset: Any) -> RowSamples | ColumnSamples:
    """Return the columns of a 2D dataset end to end; those of an array that lies in Fortran order are rows there."""
    return RowSamples(dataset.transposed) if getattr(dataset, "turned", False) else ColumnSamples(dataset)


@dataclass
class ColumnSamples:
    """A 2D dataset whose columns stand end to end; it is turned once, a large one into a temporary file."""

    dataset: Any
    _turned: Any = None
    _lock: Any = field(default_factory=threading.Lock, repr=False, compare=False)

    def __len__(self) -> int:
        return int(np.prod(self.dataset.shape))

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop``."""
        if stop <= start:
            return np.empty(0, self.dataset.dtype)
        with self._lock:
            if self._turned is None:
                self._turned = self._turn()
        return self._turned.read(start, stop)

    def _turn(self) -> Any:
        data = self.dataset
        if len(self) * data.dtype.itemsize <= CACHED_BYTE:
            return ArraySamples(_columns(_read(data, lambda: data[()])))
        return turned(lambda a, b: _read(data, lambda: data[a:b]), data.shape, data.dtype, Path(place_of(data)))


def _columns(array: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """Return the columns of an array end to end."""
    from meseta.intake.calibration.stored_kernels import SCALED_TYPES, turn_into

    if array.dtype.name not in SCALED_TYPES or not array.dtype.isnative or not array.flags.c_contiguous:
        return np.ascontiguousarray(array.T).reshape(-1)
    turned_array = np.empty(array.shape[::-1], array.dtype)
    turn_into(array, turned_array)
    return turned_array.reshape(-1)


@dataclass(frozen=True)
class Layer:
    """One place of one axis of a dataset, as a dataset of one dimension less."""

    dataset: Any
    axis: int
    place: int

    @property
    def path(self) -> str:
        """Where the dataset lies."""
        return place_of(self.dataset)

    @property
    def shape(self) -> tuple[int, ...]:
        """Its shape without the axis."""
        return tuple(int(n) for place, n in enumerate(self.dataset.shape) if place != self.axis)

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of its numbers."""
        return np.dtype(self.dataset.dtype)

    @property
    def turned(self) -> bool:
        """Whether it is the transpose of what lies in the file."""
        return bool(getattr(self.dataset, "turned", False))

    @property
    def transposed(self) -> Layer:
        """The same numbers with the axes in reverse."""
        return Layer(self.dataset.transposed, len(self.dataset.shape) - 1 - self.axis, self.place)

    def __getitem__(self, key: Any) -> npt.NDArray[Any]:
        """Return a part of the layer."""
        keys = list(key) if isinstance(key, tuple) else [key]
        keys += [slice(None)] * (len(self.shape) - len(keys))
        keys.insert(self.axis, self.place)
        found: npt.NDArray[Any] = self.dataset[tuple(keys)]
        return found


@dataclass(frozen=True)
class PartSamples:
    """Several samples, end to end."""

    parts: tuple[Any, ...]
    offsets: npt.NDArray[np.int64]

    def __len__(self) -> int:
        return int(self.offsets[-1])

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop``."""
        first = int(np.searchsorted(self.offsets, start, side="right")) - 1
        found = []
        for part in range(max(first, 0), len(self.parts)):
            begin, end = int(self.offsets[part]), int(self.offsets[part + 1])
            if begin >= stop:
                break
            found.append(self.parts[part].read(max(start - begin, 0), min(stop, end) - begin))
        return np.concatenate(found) if found else self.parts[0].read(0, 0)

    def read_into(self, start: int, target: npt.NDArray[np.float32]) -> bool:
        """Fill a float32 array from sample ``start`` on; return False where the samples of a part are of other kind."""
        part, at = max(int(np.searchsorted(self.offsets, start, side="right")) - 1, 0), 0
        while at < len(target):
            begin, end = int(self.offsets[part]), int(self.offsets[part + 1])
            stop = min(at + end - (start + at), len(target))
            if stop > at:
                into = getattr(self.parts[part], "read_into", None)
                if into is None or not into(start + at - begin, target[at:stop]):
                    return False
            at, part = stop, part + 1
        return len(target) > 0


def _run(dataset: Any, start: int, stop: int) -> npt.NDArray[Any] | None:
    return dataset.run(start, stop) if isinstance(dataset, StoredArray) else None


def _fits(dataset: Any, target: npt.NDArray[np.float32]) -> bool:
    """Return whether a dataset's samples can be read into an array as they are."""
    is_plain = isinstance(dataset, StoredArray) and not dataset.chunk_rows
    return is_plain and dataset.dtype == target.dtype and len(target) > 0


def _field(dataset: Any, name: str) -> Any:
    """Return one field of a compound dataset (of HDF5, or an array in memory)."""
    return dataset[name] if isinstance(dataset, np.ndarray) else dataset.fields(name)


def place_of(dataset: Any) -> str:
    """Return the file that an array lies in, and its name there."""
    return str(getattr(dataset, "path", "file"))


def _read(dataset: Any, action: Any) -> npt.NDArray[Any]:
    try:
        values: npt.NDArray[Any] = action()
        return values
    except (OSError, RuntimeError, ValueError) as error:
        raise broken(place_of(dataset)) from error
