"""MAT files of version 5 (and 6, 7), read without leaving Python: numbers, texts, structures, cells.

The format is documented by its maker ("MAT-File Format", level 5).  Sizes are checked against the bytes that are there,
so a damaged file is an error and nothing worse.  Version 7.3 is HDF5 and read as such.
"""

from __future__ import annotations

import struct
import zlib
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.intake.readers.unpack import BOMB_BYTE, BOMB_RATIO
from meseta.recipe.intake import IntakeSettings

__all__ = ["MatReader"]

_TYPES: Final = {
    1: "i1", 2: "u1", 3: "i2", 4: "u2", 5: "i4", 6: "u4", 7: "f4", 9: "f8", 12: "i8", 13: "u8", 16: "u1", 17: "u2",
    18: "u4",
}  # fmt: skip
_CLASSES: Final = {
    6: "f8", 7: "f4", 8: "i1", 9: "u1", 10: "i2", 11: "u2", 12: "i4", 13: "u4", 14: "i8", 15: "u8",
}  # fmt: skip
MATRIX, COMPRESSED = 14, 15
CELL, STRUCT, OBJECT, CHAR, SPARSE = 1, 2, 3, 4, 5
DEEPEST: Final = 8


class MatReader:
    """Reads MAT files of version 5."""

    name = "MAT"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the header says version 5 and a byte order."""
        return len(head) >= 128 and head[126:128] in (b"IM", b"MI") and head[124:126] in (b"\x00\x01", b"\x01\x00")

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the variables of the file."""
        data = path.read_bytes()
        order = "<" if data[126:128] == b"IM" else ">"
        tree = Tree(attributes={"": {}})
        try:
            for name, value in _variables(data[128:], order):
                _add(tree, f"/{name}", value, 0)
        except (struct.error, ValueError, zlib.error, IndexError, KeyError, OverflowError) as error:
            raise InputError(f"is damaged ({str(error)[:60]})", str(path), "save it again") from error
        return understood(tree, path, settings)


def _add(tree: Tree, name: str, value: Any, depth: int) -> None:
    if isinstance(value, dict):
        tree.attributes.setdefault(name, {})
        for key, one in value.items():
            if depth < DEEPEST:
                _add(tree, f"{name}/{key}", one, depth + 1)
    elif isinstance(value, list):
        tree.attributes.setdefault(name, {})
        for place, one in enumerate(value):
            if depth < DEEPEST:
                _add(tree, f"{name}/{place + 1:06d}", one, depth + 1)
    elif isinstance(value, str):
        tree.values[name] = value
    elif value.size == 1:
        tree.values[name] = value.reshape(-1)[0]
    elif value.size:
        tree.nodes.append(Node(name, value, value.shape, value.dtype, {}))


def _elements(data: bytes, order: str) -> Iterator[tuple[int, bytes]]:
    """Yield (type, bytes) of the elements that stand end to end in ``data``."""
    at = 0
    while at + 8 <= len(data):
        kind, size = struct.unpack_from(order + "II", data, at)
        if kind >> 16:  # a small element: type and size share the first word
            kind, size = kind & 0xFFFF, kind >> 16
            if size > 4:
                raise ValueError("a small element is too large")
            yield kind, data[at + 4 : at + 4 + size]
            at += 8
            continue
        if size > len(data) - at - 8:
            raise ValueError("an element is longer than the file")
        yield kind, data[at + 8 : at + 8 + size]
        at += 8 + size
        if kind != COMPRESSED:
            at += -at % 8


def _variables(data: bytes, order: str) -> Iterator[tuple[str, Any]]:
    for kind, body in _elements(data, order):
        if kind == COMPRESSED:
            limit = max(BOMB_BYTE, BOMB_RATIO * len(body))
            unpacker = zlib.decompressobj()
            body = unpacker.decompress(body, limit)
            if unpacker.unconsumed_tail:
                raise ValueError("a variable unpacks beyond reason")
            yield from _variables(body, order)
        elif kind == MATRIX and body:
            found = _matrix(body, order, 0)
            if found is not None:
                yield found


def _matrix(body: bytes, order: str, depth: int) -> tuple[str, Any] | None:
    """Return (name, value) of a matrix element; None for kinds that hold no plain values."""
    if depth > DEEPEST:
        return None
    parts = list(_elements(body, order))
    flags = struct.unpack_from(order + "I", parts[0][1])[0]
    kind, is_complex = flags & 0xFF, bool(flags & 0x0800)
    shape = tuple(np.frombuffer(parts[1][1], order + "i4").tolist())
    if any(n < 0 for n in shape):
        raise ValueError("a negative size")
    name = parts[2][1].decode("latin-1").rstrip("\x00")
    count = int(np.prod(shape, dtype=object))
    if kind in _CLASSES and not is_complex:
        values = _numbers(parts[3], order).astype(order + _CLASSES[kind], copy=False)
        if len(values) != count:
            raise ValueError("a matrix is shorter than its size says")
        return name, values.astype(values.dtype.newbyteorder("="), copy=False).reshape(shape, order="F")
    if kind == CHAR:
        codes = _numbers(parts[3], order)
        return name, "".join(chr(int(code)) for code in codes[: min(count, 10_000)])
    if kind == CELL:
        cells = [_matrix(part, order, depth + 1) for tag, part in parts[3:] if tag == MATRIX and part]
        return name, [cell[1] for cell in cells if cell is not None]
    if kind == STRUCT:
        return name, _structure(parts, order, count, depth)
    return None


def _numbers(part: tuple[int, bytes], order: str) -> Any:
    kind, data = part
    dtype = np.dtype(order + _TYPES[kind])
    return np.frombuffer(data[: len(data) - len(data) % dtype.itemsize], dtype)


def _structure(parts: list[tuple[int, bytes]], order: str, count: int, depth: int) -> Any:
    """Return a structure as fields, or a list of them for an array of structures."""
    width = struct.unpack_from(order + "i", parts[3][1])[0]
    if not 0 < width <= 256:
        raise ValueError("field names of no length")
    names = [
        parts[4][1][at : at + width].split(b"\x00")[0].decode("latin-1") for at in range(0, len(parts[4][1]), width)
    ]
    values = [_matrix(part, order, depth + 1) if part else None for tag, part in parts[5:] if tag == MATRIX]
    rows = [
        {name: value[1] for name, value in zip(names, values[at : at + len(names)], strict=False) if value is not None}
        for at in range(0, min(count, len(values) // max(len(names), 1)) * len(names), max(len(names), 1))
    ]
    return rows[0] if len(rows) == 1 else rows
