"""The datasets of an HDF5 file, walked without ever leaving the file.

External links, virtual datasets and datasets with external storage are refused and named; nothing outside the named
file is ever opened.  Link loops are met by remembering the address of every object.
"""

from __future__ import annotations

import contextlib
import struct
import threading
import zlib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import h5py
import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.spool import turned
from meseta.traces import ArraySamples

__all__ = [
    "ColumnSamples",
    "Layer",
    "Node",
    "PartSamples",
    "Ragged",
    "RowSamples",
    "Tree",
    "VectorSamples",
    "columns_of",
    "open_file",
    "rows_of",
    "walk",
]

BOMB_RATIO: Final = 500
BOMB_BYTE: Final = 64 << 20
REFERENCE: Final = np.dtype([("length", "<u4"), ("address", "<u8"), ("index", "<u4")])
REFERENCE_BYTE: Final = REFERENCE.itemsize
CACHED_BYTE: Final = 64 << 20


@dataclass(frozen=True)
class Node:
    """A numeric dataset: its path, shape and type, its attributes as plain values, and the dataset itself."""

    path: str
    dataset: Any
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    attributes: Mapping[str, Any]

    @property
    def parent(self) -> str:
        """Path of the group that it lies in."""
        return self.path.rpartition("/")[0]

    @property
    def leaf(self) -> str:
        """Its own name."""
        return self.path.rpartition("/")[2]


@dataclass
class Tree:
    """All that was found in a file: numeric datasets, attributes of groups, single values, and what was refused."""

    nodes: list[Node] = field(default_factory=list)
    attributes: dict[str, dict[str, Any]] = field(default_factory=dict)
    values: dict[str, Any] = field(default_factory=dict)
    texts: dict[str, npt.NDArray[Any]] = field(default_factory=dict)
    refused: list[str] = field(default_factory=list)


def open_file(path: Path) -> Any:
    """Open an HDF5 file for reading.

    Raises
    ------
    InputError
        Where the file is damaged, truncated or not readable.
    """
    import hdf5plugin  # noqa: F401  registers the common compression filters

    try:
        return h5py.File(path, "r", locking=False)
    except OSError as error:
        text = str(error)
        if "truncated" in text:
            raise InputError("is truncated", str(path), "copy the file again from its origin") from error
        raise InputError("is damaged or not an HDF5 file", str(path), "copy the file again from its origin") from error


def walk(file: Any, path: Path) -> Tree:
    """Return what lies in an open file."""
    tree, seen = Tree(), set()
    size = path.stat().st_size
    stack: list[tuple[str, Any]] = [("", file)]
    while stack:
        name, group = stack.pop()
        address = _address(group)
        if address in seen:
            continue
        seen.add(address)
        tree.attributes[name] = _attributes(group)
        groups = []
        for child_name, child in _children(group, name, tree):
            if isinstance(child, h5py.Dataset):
                if _address(child) not in seen:
                    seen.add(_address(child))
                    _add_dataset(tree, child_name, child, size)
            elif isinstance(child, h5py.Group):
                groups.append((child_name, child))
        stack.extend(reversed(groups))
    return tree


def _address(item: Any) -> tuple[int, int]:
    info = h5py.h5o.get_info(item.id)
    return int(info.fileno), int(info.addr)


def _children(group: Any, name: str, tree: Tree) -> Iterator[tuple[str, Any]]:
    """Yield the members that hard links lead to; soft links lead to them a second time, external ones outside."""
    for key in _names_in(group, name, tree):
        link = group.get(key, getlink=True)
        full = f"{name}/{key}"
        if isinstance(link, h5py.ExternalLink):
            tree.refused.append(f"{full} leads to another file and was not followed")
        elif isinstance(link, h5py.HardLink):
            try:
                yield full, group[key]
            except (KeyError, OSError, RuntimeError, ValueError, TypeError):
                tree.refused.append(f"{full} is damaged and was not read")


def _names_in(group: Any, name: str, tree: Tree) -> list[str]:
    """Return the names in a group; the links of a damaged one may lead nowhere or have names that are no text."""
    found: list[str] = []
    try:
        found.extend(group)
    except (UnicodeError, OSError, RuntimeError, ValueError, KeyError):
        tree.refused.append(f"{name or '/'} is damaged from its member {len(found) + 1} on")
    return found


def _attributes(item: Any) -> dict[str, Any]:
    if h5py.h5a.get_num_attrs(item.id) == 0:
        return {}
    found = {}
    with contextlib.suppress(UnicodeError, OSError, RuntimeError, KeyError):  # a name that is no text
        for name in item.attrs:
            try:
                found[str(name)] = item.attrs[name]
            except (OSError, TypeError, ValueError, KeyError, RuntimeError):
                continue  # an attribute of a type that has no plain value says nothing of the samples
    return found


def _add_dataset(tree: Tree, name: str, dataset: Any, file_byte: int) -> None:
    try:
        shape, dtype = dataset.shape, dataset.dtype
        outside = dataset.is_virtual or dataset.external
    except (OSError, TypeError, ValueError, RuntimeError):
        tree.refused.append(f"{name} has a type that cannot be read")
        return
    if outside:
        tree.refused.append(f"{name} keeps its samples in another file and was not read")
        return
    if shape is None or 0 in shape:
        return
    fault = _size_fault(dataset, shape, dtype, file_byte)
    if fault:
        tree.refused.append(f"{name} {fault}")
        return
    count = int(np.prod(shape))
    if dtype.kind in "biuf" and count == 1:
        tree.values[name] = dataset[()].reshape(-1)[0] if shape else dataset[()]
    elif dtype.kind in "biuf" or dtype.names:
        tree.nodes.append(Node(name, dataset, tuple(int(n) for n in shape), dtype, _attributes(dataset)))
    elif (inner := h5py.check_vlen_dtype(dtype)) is not None and np.dtype(inner).kind in "iuf" and len(shape) == 1:
        _add_ragged(tree, name, dataset, np.dtype(inner), file_byte)
    elif h5py.check_string_dtype(dtype) is not None and count <= 1_000_000:
        text = np.asarray(dataset.asstr(errors="replace")[()]).astype(np.str_)
        if count == 1:
            tree.values[name] = str(text.reshape(-1)[0])
        else:
            tree.texts[name] = text.reshape(-1)
    else:
        tree.refused.append(f"{name} holds objects, which are not read")


def _add_ragged(tree: Tree, name: str, dataset: Any, dtype: np.dtype[Any], file_byte: int) -> None:
    """Add rows of different length, whose claims are checked before the library makes room for them."""
    try:
        references = _references(dataset, file_byte)
        places = None if references is None else _row_places(dataset, references, dtype.itemsize, file_byte)
    except (OSError, RuntimeError, ValueError, zlib.error, struct.error):
        references = places = None
    if references is None or places is None:
        tree.refused.append(
            f"{name} has rows of different length that are damaged, or packed in a way that is not known"
        )
    elif (total := references["length"].sum(dtype=np.int64)) > 0:
        offsets = np.concatenate([[0], np.cumsum(references["length"], dtype=np.int64)]).astype(np.int64)
        rows = Ragged(_place_of(dataset), dataset.file.filename, offsets, places, dtype)
        tree.nodes.append(Node(name, rows, (int(total),), dtype.newbyteorder("="), _attributes(dataset)))


def _row_places(
    dataset: Any, references: npt.NDArray[Any], item_byte: int, file_byte: int
) -> npt.NDArray[np.int64] | None:
    """Return the byte at which each row begins; None where a heap is not whole.

    The heaps are walked here, since the library may walk a damaged one for ever (HDF5 File Format Specification, global
    heap).
    """
    places = np.zeros(len(references), np.int64)
    with Path(dataset.file.filename).open("rb") as file:
        for address in np.unique(references["address"][references["length"] > 0]).tolist():
            file.seek(address)
            mark, size = struct.unpack("<4s4xQ", file.read(16))
            if mark != b"GCOL" or not 16 <= size <= file_byte:
                return None
            found = _heap_objects(file.read(size - 16), address + 16)
            for row in np.flatnonzero((references["address"] == address) & (references["length"] > 0)).tolist():
                place, held = found.get(int(references["index"][row]), (0, -1))
                if held < int(references["length"][row]) * item_byte:
                    return None
                places[row] = place
    return places


def _heap_objects(body: bytes, begin: int) -> dict[int, tuple[int, int]]:
    """Return index -> (first byte, bytes) of the objects of a heap."""
    found, at = {}, 0
    while at + 16 <= len(body):
        index, size = struct.unpack_from("<H6xQ", body, at)
        if index == 0 or size > len(body) - at - 16:
            break
        found[index] = (begin + at + 16, size)
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


def _size_fault(dataset: Any, shape: tuple[int, ...], dtype: np.dtype[Any], file_byte: int) -> str:
    """Return what is wrong where a dataset claims more than the file can hold; empty where nothing is."""
    claimed, stored = int(np.prod(shape, dtype=object)) * dtype.itemsize, int(dataset.id.get_storage_size())
    if dtype.kind not in "biuf" and not dtype.names:
        return ""
    if stored == 0 and dataset.id.get_create_plist().get_layout() != h5py.h5d.COMPACT:
        return "was declared but never written"
    if stored > file_byte:
        return "claims more samples than the file holds"
    packed = dataset.chunks is not None
    if not packed and claimed > file_byte:
        return "claims more samples than the file holds"
    if claimed > BOMB_BYTE and claimed > BOMB_RATIO * stored:
        return f"unpacks to {claimed // max(stored, 1)} times its size and was not read"
    return ""


# -- samples ----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class VectorSamples:
    """A dataset read flat: one dimension, or two of which one is 1; ``field`` picks a column of a compound type."""

    dataset: Any
    field: str = ""

    def __len__(self) -> int:
        return int(np.prod(self.dataset.shape))

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop``."""
        source = _field(self.dataset, self.field) if self.field else self.dataset
        shape = self.dataset.shape
        if len(shape) == 1:
            return _read(self.dataset, lambda: source[start:stop])
        if shape[0] == 1:
            return _read(self.dataset, lambda: source[0, start:stop])
        return _read(self.dataset, lambda: source[start:stop, 0])

    def read_into(self, start: int, target: npt.NDArray[np.float32]) -> bool:
        """Fill a float32 array from sample ``start`` on; return False where the samples are of another kind."""
        if self.field or not _fits(self.dataset, target) or len(self.dataset.shape) != 1:
            return False
        _read(self.dataset, lambda: self.dataset.read_direct(target, slice(start, start + len(target))) or target)
        return True


@dataclass(frozen=True)
class RowSamples:
    """A 2D dataset whose rows stand end to end; ``at`` picks one place of a third, last axis."""

    dataset: Any

    def __len__(self) -> int:
        return int(np.prod(self.dataset.shape))

    def read(self, start: int, stop: int) -> npt.NDArray[Any]:
        """Return samples ``start`` to ``stop``."""
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
        if not _fits(self.dataset, target) or len(self.dataset.shape) != 2:
            return False
        n = self.dataset.shape[1]
        if start % n or len(target) % n:
            return False
        rows = slice(start // n, (start + len(target)) // n)
        _read(self.dataset, lambda: self.dataset.read_direct(target.reshape(-1, n), rows) or target)
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
            return ArraySamples(np.ascontiguousarray(_read(data, lambda: data[()]).T).reshape(-1))
        return turned(lambda a, b: _read(data, lambda: data[a:b]), data.shape, data.dtype, Path(_place_of(data)))


@dataclass(frozen=True)
class Layer:
    """One place of one axis of a dataset, as a dataset of one dimension less."""

    dataset: Any
    axis: int
    place: int

    @property
    def path(self) -> str:
        """Where the dataset lies."""
        return _place_of(self.dataset)

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
        with Path(self.filename).open("rb") as file:
            while at < stop:
                end = min(stop, int(self.offsets[row + 1]))
                begin = int(self.places[row]) + (at - int(self.offsets[row])) * self.stored.itemsize
                file.seek(begin)
                part = np.frombuffer(file.read((end - at) * self.stored.itemsize), self.stored)
                found[at - start : end - start] = part
                at, row = end, row + 1
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


def _fits(dataset: Any, target: npt.NDArray[np.float32]) -> bool:
    """Return whether a dataset's samples can be read into an array as they are."""
    return isinstance(dataset, h5py.Dataset) and dataset.dtype == target.dtype and len(target) > 0


def _field(dataset: Any, name: str) -> Any:
    """Return one field of a compound dataset (of HDF5, or an array in memory)."""
    return dataset[name] if isinstance(dataset, np.ndarray) else dataset.fields(name)


def _place_of(dataset: Any) -> str:
    """Return the file that an array lies in, and its name there."""
    if isinstance(dataset, h5py.Dataset) and dataset:
        return f"{dataset.file.filename}, {dataset.name}"
    return str(getattr(dataset, "path", "file"))


def _read(dataset: Any, action: Any) -> npt.NDArray[Any]:
    try:
        values: npt.NDArray[Any] = action()
        return values
    except (OSError, RuntimeError, ValueError) as error:
        raise InputError(
            "cannot be read: the file is damaged or truncated", _place_of(dataset), "copy the file again"
        ) from error
