"""The parts of a MAT file of version 5: elements, and the matrices that they make up.

"MAT-File Format", level 5: an element is a tag of 8 bytes (type, size) and its data; a matrix is an element that holds
others: flags, dimensions, name, then numbers, texts, or further matrices.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final, NamedTuple

import numpy as np

from meseta.intake.readers.file_array import FileArray, Numbers

__all__ = ["DEEPEST", "ByteWindow", "Element", "Refused", "elements", "matrix"]

_TYPES: Final = {
    1: "i1", 2: "u1", 3: "i2", 4: "u2", 5: "i4", 6: "u4", 7: "f4", 9: "f8", 12: "i8", 13: "u8", 16: "u1", 17: "u2",
    18: "u4",
}  # fmt: skip
_CLASSES: Final = {
    6: "f8", 7: "f4", 8: "i1", 9: "u1", 10: "i2", 11: "u2", 12: "i4", 13: "u4", 14: "i8", 15: "u8",
}  # fmt: skip
_TEXTS: Final = {1: "latin-1", 2: "latin-1", 4: "utf-16", 16: "utf-8", 17: "utf-16", 18: "utf-32"}
MATRIX, COMPRESSED = 14, 15
CELL, STRUCT, OBJECT, CHAR, SPARSE = 1, 2, 3, 4, 5
COMPLEX: Final = 0x0800
DEEPEST: Final = 8
MOST_PARTS: Final = 2_000_000
"""Parts of a file, a cell array or a structure; more are taken for damage."""
LONGEST_TEXT_BYTE: Final = 20_000
WINDOW_BYTE: Final = 1 << 16


class Element(NamedTuple):
    """Type of an element, first byte of its data, and their number."""

    kind: int
    place: int
    size: int


@dataclass(frozen=True)
class Refused:
    """What stands for a value that is not read, and why not."""

    reason: str


class ByteWindow:
    """Bytes that are looked at here and there, mostly onwards; those around the last look are held."""

    def __init__(self, numbers: Numbers, size: int) -> None:
        self.numbers, self.size = numbers, size
        self._begin, self._held = 0, b""

    def at(self, place: int, count: int) -> bytes:
        """Return ``count`` bytes from ``place`` on.

        Raises
        ------
        ValueError
            Where there are not so many.
        """
        if place < 0 or count < 0 or place + count > self.size:
            raise ValueError("an element is longer than the file")
        if count > WINDOW_BYTE:
            return self.numbers.read(place, count, np.dtype(np.uint8)).tobytes()
        if not self._begin <= place <= place + count <= self._begin + len(self._held):
            self._begin = place
            self._held = self.numbers.read(place, min(WINDOW_BYTE, self.size - place), np.dtype(np.uint8)).tobytes()
        return self._held[place - self._begin : place - self._begin + count]


def elements(window: ByteWindow, begin: int, end: int, order: str) -> Iterator[Element]:
    """Yield the elements that stand end to end between two places.

    Raises
    ------
    ValueError
        Where one is longer than the room that it lies in, or they are too many.
    """
    at = begin
    for _ in range(MOST_PARTS):
        if at + 8 > end:
            return
        kind, size = struct.unpack(order + "II", window.at(at, 8))
        if kind >> 16:  # a small element: type and size share the first word
            kind, size = kind & 0xFFFF, kind >> 16
            if size > 4:
                raise ValueError("a small element is too large")
            yield Element(kind, at + 4, size)
            at += 8
            continue
        if size > end - at - 8:
            raise ValueError("an element is longer than the file")
        yield Element(kind, at + 8, size)
        at += 8 + size
        if kind != COMPRESSED:
            at += -(at - begin) % 8
    raise ValueError("parts beyond reason")


def matrix(window: ByteWindow, whole: Element, order: str, path: Path, depth: int = 0) -> tuple[str, Any] | None:
    """Return (name, value) of a matrix element; None where it lies too deep.

    A value is a :class:`FileArray`, a text, a mapping of the fields of a structure, a list of cells or structures, or
    :class:`Refused`.

    Raises
    ------
    ValueError, struct.error, KeyError, IndexError
        Where it is damaged.
    """
    if depth > DEEPEST:
        return None
    parts = list(elements(window, whole.place, whole.place + whole.size, order))
    flags = struct.unpack_from(order + "I", _bytes(window, parts[0]))[0]
    kind = flags & 0xFF
    shape = tuple(np.frombuffer(_bytes(window, parts[1]), order + "i4").tolist())
    if any(n < 0 for n in shape) or len(shape) > 32:
        raise ValueError("a size that cannot be")
    name = _bytes(window, parts[2]).decode("latin-1").rstrip("\x00")
    if kind in _CLASSES:
        if flags & COMPLEX:
            return name, Refused("holds complex numbers, which are not read")
        return name, _numbers(window, parts[3], order, kind, shape, path)
    if kind == CHAR:
        return name, _text(window, parts[3], order)
    if kind == CELL:
        cells = [matrix(window, one, order, path, depth + 1) for one in parts[3:] if one.kind == MATRIX and one.size]
        return name, [cell[1] for cell in cells if cell is not None]
    if kind == STRUCT:
        return name, _structure(window, parts, order, math.prod(shape), path, depth)
    return name, Refused("holds a sparse array, a function or an object, which are not read")


def _bytes(window: ByteWindow, part: Element) -> bytes:
    return window.at(part.place, part.size)


def _numbers(window: ByteWindow, part: Element, order: str, kind: int, shape: tuple[int, ...], path: Path) -> FileArray:
    stored = np.dtype(order + _TYPES[part.kind])
    if part.size // stored.itemsize != math.prod(shape):
        raise ValueError("a matrix is shorter than its size says")
    turned = len(shape) > 1
    return FileArray(window.numbers, path, shape, stored, np.dtype(_CLASSES[kind]), part.place, turned)


def _text(window: ByteWindow, part: Element, order: str) -> str:
    """Return a text; of one that is beyond reason, its beginning."""
    encoding = _TEXTS[part.kind]
    if encoding in ("utf-16", "utf-32"):
        encoding += "-le" if order == "<" else "-be"
    return window.at(part.place, min(part.size, LONGEST_TEXT_BYTE)).decode(encoding, "replace")


def _structure(
    window: ByteWindow, parts: list[Element], order: str, count: int, path: Path, depth: int
) -> dict[str, Any] | list[dict[str, Any]]:
    """Return a structure as fields, or a list of them for an array of structures."""
    width = struct.unpack_from(order + "i", _bytes(window, parts[3]))[0]
    if not 0 < width <= 256:
        raise ValueError("field names of no length")
    raw = _bytes(window, parts[4])
    names = [raw[at : at + width].split(b"\x00")[0].decode("latin-1") for at in range(0, len(raw), width)]
    values = [
        matrix(window, one, order, path, depth + 1) if one.size else None for one in parts[5:] if one.kind == MATRIX
    ]
    step = max(len(names), 1)
    rows = [
        {name: value[1] for name, value in zip(names, values[at : at + step], strict=False) if value is not None}
        for at in range(0, min(count, len(values) // step) * step, step)
    ]
    return rows[0] if len(rows) == 1 else rows
