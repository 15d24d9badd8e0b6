"""MAT files of versions 4 and 5 (also 6 and 7), read without leaving Python: numbers, texts, structures, cells.

Both formats are documented by their maker ("MAT-File Format").  Sizes are checked against the bytes that are there, so
a damaged file is an error and nothing worse.  The numbers of large files stay in them, or are put aside where they are
packed.  Version 7.3 is HDF5 and read as such.
"""

from __future__ import annotations

import struct
import zlib
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.file_array import FileArray, InFile, InMemory
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.intake.readers.mat_four import fits_version_4, variables_4
from meseta.intake.readers.mat_parts import DEEPEST, ByteWindow, Element, Refused, elements, matrix
from meseta.intake.readers.spool import Spool
from meseta.intake.readers.unpack import BOMB_BYTE, BOMB_RATIO, inflated
from meseta.recipe.intake import IntakeSettings

__all__ = ["MatReader"]

MATRIX, COMPRESSED = 14, 15
HEADER_BYTE: Final = 128
LARGE_BYTE: Final = 64 << 20
"""Numbers of files with more stay in them, or are put aside."""
SMALL_BYTE: Final = 4096
"""So few are brought into memory all the same."""
_FAULTS: Final = (
    struct.error, ValueError, zlib.error, IndexError, KeyError, OverflowError, RecursionError, MemoryError,
)  # fmt: skip
Variables = Iterator[tuple[str, Any]]


class MatReader:
    """Reads MAT files of versions 4 and 5."""

    name = "MAT"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the header says version 5 and a byte order, or the first variable is one of version 4."""
        return _is_version_5(head) or fits_version_4(head, path.stat().st_size)

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the variables of the file."""
        tree = Tree(attributes={"": {}})
        size = path.stat().st_size
        with path.open("rb") as file:
            head = file.read(HEADER_BYTE)
        try:
            found = _variables(path, size, head) if _is_version_5(head) else variables_4(path, size)
            large = size > LARGE_BYTE
            for name, value in found:
                _add(tree, f"/{name}", value, large)
        except _FAULTS as error:
            raise InputError(f"is damaged ({str(error)[:60]})", str(path), "save it again") from error
        return understood(tree, path, settings)


def _is_version_5(head: bytes) -> bool:
    return len(head) >= HEADER_BYTE and head[126:128] in (b"IM", b"MI") and head[124:126] in (b"\x00\x01", b"\x01\x00")


def _variables(path: Path, size: int, head: bytes) -> Variables:
    """Yield name and value of the variables of a file of version 5; packed ones are unpacked one after the other."""
    order = "<" if head[126:128] == b"IM" else ">"
    window = ByteWindow(InFile(path), size)
    top = list(elements(window, HEADER_BYTE, size, order))
    unpacked = {one.place: _unpacked_byte(path, one, order) for one in top if one.kind == COMPRESSED}
    spool = Spool(path) if sum(unpacked.values()) > LARGE_BYTE else None
    for one in top:
        if one.kind == MATRIX and one.size:
            found = matrix(window, one, order, path)
        elif one.kind == COMPRESSED and unpacked[one.place] > 8:
            found = _packed_matrix(path, one, unpacked[one.place], order, spool)
        else:
            continue
        if found is not None:
            yield found


def _unpacked_byte(path: Path, one: Element, order: str) -> int:
    """Return the bytes of a packed variable, as its own first bytes state them.

    Raises
    ------
    ValueError
        Where they are beyond what so few bytes may hold.
    """
    kind, size = struct.unpack(order + "II", b"".join(inflated(path, one.place, one.size, 8)))
    if kind != MATRIX:
        raise ValueError("something else than a variable is packed")
    if size + 8 > max(BOMB_BYTE, BOMB_RATIO * one.size):
        raise ValueError("a variable unpacks beyond reason")
    return int(size) + 8


def _packed_matrix(path: Path, one: Element, size: int, order: str, spool: Spool | None) -> tuple[str, Any] | None:
    blocks = inflated(path, one.place, one.size, size)
    if spool is None:
        data = b"".join(blocks)
        window, begin, end = ByteWindow(InMemory(data), len(data)), 0, len(data)
    else:
        begin = spool.append(blocks)
        end = spool.end
        window = ByteWindow(spool, end)
    if end - begin != size:
        raise ValueError("a packed variable is shorter than it says")
    return matrix(window, Element(MATRIX, begin + 8, size - 8), order, path)


# -- what was found, as a tree ----------------------------------------------------------------------------------------


def _add(tree: Tree, name: str, value: Any, large: bool, depth: int = 0) -> None:
    if isinstance(value, Refused):
        tree.refused.append(f"{name} {value.reason}")
    elif isinstance(value, dict | list):
        tree.attributes.setdefault(name, {})
        inside = value.items() if isinstance(value, dict) else ((f"{n:06d}", one) for n, one in enumerate(value, 1))
        for key, one in inside:
            if depth < DEEPEST:
                _add(tree, f"{name}/{key}", one, large, depth + 1)
    elif isinstance(value, str):
        tree.values[name] = value
    elif value.size == 1:
        tree.values[name] = value[()].reshape(-1)[0]
    elif value.size:
        _add_array(tree, name, value, large)


def _add_array(tree: Tree, name: str, array: FileArray, large: bool) -> None:
    stays = (large or isinstance(array.numbers, Spool)) and array.size * array.stored.itemsize > SMALL_BYTE
    tree.nodes.append(Node(name, array if stays else array[()], array.shape, array.dtype, {}))
