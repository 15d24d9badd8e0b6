"""The datasets of an HDF5 file, walked without ever leaving the file.

External links, virtual datasets and datasets with external storage are refused and named; nothing outside the named
file is ever opened.  Link loops are met by remembering the address of every object.
"""

from __future__ import annotations

import contextlib
import math
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from typing import Any, Final

import h5py
import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.hdf5_chunks import LARGEST_CHUNK_BYTE, UnpackedRows, chunk_byte, rows_of_large_chunks
from meseta.intake.readers.hdf5_ragged import ragged_rows
from meseta.intake.readers.hdf5_stored import RawBytes, StoredArray

__all__ = ["Node", "Tree", "open_file", "walk"]

BOMB_RATIO: Final = 500
BOMB_BYTE: Final = 64 << 20
_PLAIN_TYPES: Final = tuple(
    (h5py.h5t.py_create(np.dtype(name)), np.dtype(name))
    for name in ("f4", "f8", "i2", "u2", "i4", "u4", "i1", "u1", "i8", "u8", "f2")
)
"""Types whose numbers stand in a file as they stand in memory."""


@dataclass(frozen=True)
class Node:
    """A numeric dataset: its path, shape and type, its attributes as plain values, and the dataset itself."""

    path: str
    dataset: Any
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    attributes: Mapping[str, Any]
    name: str = ""
    """Its own name, where that may have a slash in it."""

    @property
    def parent(self) -> str:
        """Path of the group that it lies in."""
        return self.path.removesuffix(f"/{self.name}") if self.name else self.path.rpartition("/")[0]

    @property
    def leaf(self) -> str:
        """Its own name."""
        return self.name or self.path.rpartition("/")[2]


@dataclass
class Tree:
    """All that was found in a file: numeric datasets, attributes of groups, single values, and what was refused."""

    nodes: list[Node] = field(default_factory=list)
    attributes: dict[str, dict[str, Any]] = field(default_factory=dict)
    values: dict[str, Any] = field(default_factory=dict)
    texts: dict[str, npt.NDArray[Any]] = field(default_factory=dict)
    refused: list[str] = field(default_factory=list)
    raw: RawBytes | None = None
    """The bytes of the file, to be closed with it; None where its samples come from elsewhere."""

    def close(self) -> None:
        """Let go of the file's bytes."""
        if self.raw is not None:
            self.raw.close()


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
    """Return what lies in an open file; the tree must be closed."""
    tree = Tree(raw=RawBytes(path))
    try:
        _Walk(tree, file, path).all_groups(file)
    except BaseException:
        tree.close()
        raise
    return tree


class _Walk:
    """Walks through a file by the library's plain functions: a file may hold tens of thousands of datasets."""

    def __init__(self, tree: Tree, file: Any, path: Path) -> None:
        self._tree, self._file_byte, self._where = tree, path.stat().st_size, file.filename
        self._seen: set[int] = set()
        is_plain = bool(tree.raw) and file.userblock_size == 0
        self._plain_types = _PLAIN_TYPES if is_plain else ()
        self._unpacked = UnpackedRows()

    def all_groups(self, file: Any) -> None:
        stack = [("", file, int(h5py.h5o.get_info(file.id).addr))]
        while stack:
            name, group, address = stack.pop()
            if address in self._seen:
                continue
            self._seen.add(address)
            self._tree.attributes[name] = _attributes(group.id, partial(getattr, group, "attrs"))
            groups = []
            for child_name, child, at in self._children(group, name):
                if isinstance(child, h5py.h5d.DatasetID):
                    self._seen.add(at)
                    self._add_dataset(child_name, child)
                elif isinstance(child, h5py.h5g.GroupID):
                    groups.append((child_name, h5py.Group(child), at))
            stack.extend(reversed(groups))

    def _children(self, group: Any, name: str) -> Iterator[tuple[str, Any, int]]:
        """Yield the members that hard links lead to, and their addresses.

        Soft links lead to them a second time, external ones outside.
        """
        links, identity, refused = group.id.links, group.id, self._tree.refused
        for key in self._names_in(group, name):
            full = f"{name}/{key}"
            raw = key.encode("utf-8", "surrogateescape")
            try:
                link = links.get_info(raw)
                if link.type == h5py.h5l.TYPE_EXTERNAL:
                    refused.append(f"{full} leads to another file and was not followed")
                    continue
                if link.type != h5py.h5l.TYPE_HARD or link.u in self._seen:
                    continue
                child = h5py.h5o.open(identity, raw)
            except (KeyError, OSError, RuntimeError, ValueError, TypeError):
                refused.append(f"{full} is damaged and was not read")
                continue
            yield full, child, link.u

    def _names_in(self, group: Any, name: str) -> list[str]:
        """Return the names in a group; links of a damaged one may lead nowhere or have names that are no text."""
        found: list[str] = []
        try:
            found.extend(group)
        except (UnicodeError, OSError, RuntimeError, ValueError, KeyError):
            self._tree.refused.append(f"{name or '/'} is damaged from its member {len(found) + 1} on")
        return found

    def _add_dataset(self, name: str, identity: Any) -> None:
        tree = self._tree
        try:
            space, kind = identity.get_space(), identity.get_type()
            plain = next((dtype for one, dtype in self._plain_types if kind.equal(one)), None)
            dtype = kind.dtype if plain is None else plain
            plist = identity.get_create_plist()
            layout = plist.get_layout()
            outside = layout == h5py.h5d.VIRTUAL or plist.get_external_count() > 0
            is_null = space.get_simple_extent_type() == h5py.h5s.NULL
            shape = () if is_null else tuple(int(n) for n in space.get_simple_extent_dims())
            stored = int(identity.get_storage_size())
            chunk = chunk_byte(plist, dtype.itemsize)
        except (OSError, TypeError, ValueError, RuntimeError):
            tree.refused.append(f"{name} has a type that cannot be read")
            return
        if outside:
            tree.refused.append(f"{name} keeps its samples in another file and was not read")
            return
        if is_null or 0 in shape:
            return
        fault = _size_fault(layout, shape, dtype, stored, self._file_byte)
        if chunk > LARGEST_CHUNK_BYTE:
            fault = f"is packed in chunks of {chunk >> 20} MB, more than are unpacked at once, and was not read"
        if fault:
            tree.refused.append(f"{name} {fault}")
            return
        path = f"{self._where}, {name}"
        if dtype.kind in "biuf" or dtype.names:
            together = rows_of_large_chunks(identity, plist, shape, dtype.itemsize) if chunk else 0
            dataset = StoredArray(identity, path, shape, dtype, chunk_rows=together, unpacked=self._unpacked)
            if dtype.kind in "biuf" and all(n == 1 for n in shape):
                value = dataset.dataset[()]
                tree.values[name] = value.reshape(-1)[0] if shape else value
                return
            place = identity.get_offset() if plain is not None and layout == h5py.h5d.CONTIGUOUS else None
            if place is not None and place + stored <= self._file_byte:
                dataset = StoredArray(identity, path, shape, dtype, place, tree.raw)
            tree.nodes.append(Node(name, dataset, shape, dtype, _attributes(identity, lambda: dataset.dataset.attrs)))
        else:
            self._add_objects(name, h5py.Dataset(identity), path)

    def _add_objects(self, name: str, dataset: Any, path: str) -> None:
        """Add a dataset whose elements are rows of numbers, or texts."""
        tree, dtype, count = self._tree, dataset.dtype, int(np.prod(dataset.shape))
        inner = h5py.check_vlen_dtype(dtype)
        if inner is not None and np.dtype(inner).kind in "iuf" and len(dataset.shape) == 1:
            rows = ragged_rows(dataset, path, np.dtype(inner), self._file_byte)
            if rows is None:
                tree.refused.append(
                    f"{name} has rows of different length that are damaged, or packed in a way that is not known"
                )
            elif rows.shape[0] > 0:
                attributes = _attributes(dataset.id, lambda: dataset.attrs)
                tree.nodes.append(Node(name, rows, rows.shape, rows.dtype, attributes))
        elif h5py.check_string_dtype(dtype) is not None and count <= 1_000_000:
            text = np.asarray(dataset.asstr(errors="replace")[()]).astype(np.str_)
            if count == 1:
                tree.values[name] = str(text.reshape(-1)[0])
            else:
                tree.texts[name] = text.reshape(-1)
        else:
            tree.refused.append(f"{name} holds objects, which are not read")


def _attributes(identity: Any, attributes: Callable[[], Any]) -> dict[str, Any]:
    """Return the attributes of an object; single numbers and texts are read without the library's own objects."""
    count = h5py.h5a.get_num_attrs(identity)
    if count == 0:
        return {}
    found: dict[str, Any] = {}
    with contextlib.suppress(UnicodeError, OSError, RuntimeError, KeyError):  # a name that is no text
        names: list[bytes] = []
        h5py.h5a.iterate(identity, names.append)
        for raw in names:
            name = raw.decode("utf-8", "surrogateescape")
            try:
                value = _plain_attribute(identity, raw)
                found[name] = attributes()[name] if value is None else value
            except (OSError, TypeError, ValueError, KeyError, RuntimeError):
                continue  # an attribute of a type that has no plain value says nothing of the samples
    return found


def _plain_attribute(identity: Any, name: bytes) -> Any:
    """Return a single number or a single text of any length; None where the attribute is another."""
    attribute = h5py.h5a.open(identity, name)
    if attribute.shape != () or attribute.get_space().get_simple_extent_type() != h5py.h5s.SCALAR:
        return None
    dtype = attribute.dtype
    text = h5py.check_string_dtype(dtype)
    if (text is None and (dtype.kind not in "iuf" or dtype.metadata)) or (text is not None and text.length is not None):
        return None
    found = np.zeros((), dtype)
    attribute.read(found)
    value: Any = found[()]
    return value.decode("utf-8", "surrogateescape") if isinstance(value, bytes) else value if text is None else None


def _size_fault(layout: int, shape: tuple[int, ...], dtype: np.dtype[Any], stored: int, file_byte: int) -> str:
    """Return what is wrong where a dataset claims more than the file can hold; empty where nothing is."""
    if dtype.kind not in "biuf" and not dtype.names:
        return ""
    claimed = math.prod(shape) * dtype.itemsize
    if stored == 0 and layout != h5py.h5d.COMPACT:
        return "was declared but never written"
    if stored > file_byte:
        return "claims more samples than the file holds"
    if layout != h5py.h5d.CHUNKED and claimed > file_byte:
        return "claims more samples than the file holds"
    if claimed > BOMB_BYTE and claimed > BOMB_RATIO * stored:
        return f"unpacks to {claimed // max(stored, 1)} times its size and was not read"
    return ""
