"""MAT files of version 4: variables end to end, each a header of five whole numbers, a name, and numbers.

The format is documented by its maker ("MAT-File Format", level 4).  Nothing in such a file says what it is, so that the
first variable must fit in every number of its header before it is taken for one.
"""

from __future__ import annotations

import re
import struct
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final, NamedTuple

import numpy as np

from meseta.intake.readers.file_array import FileArray, InFile
from meseta.intake.readers.mat_parts import LONGEST_TEXT_BYTE, ByteWindow, Refused

__all__ = ["fits_version_4", "variables_4"]

_TYPES: Final = ("f8", "f4", "i4", "i2", "u2", "u1")
_NUMBERS, _TEXT, _SPARSE = 0, 1, 2
HEADER_BYTE: Final = 20
LONGEST_NAME_BYTE: Final = 64


class _Header(NamedTuple):
    """Header of one variable."""

    stored: np.dtype[Any]
    kind: int
    shape: tuple[int, int]
    is_complex: bool
    name_byte: int

    @property
    def size(self) -> int:
        """Bytes of its numbers."""
        return self.shape[0] * self.shape[1] * self.stored.itemsize * (2 if self.is_complex else 1)


def _header(raw: bytes) -> _Header | None:
    """Return the header of a variable; None where one of its numbers cannot be."""
    for order, machine in (("<", 0), (">", 1)):
        code, rows, columns, imaginary, name_byte = struct.unpack(order + "5i", raw)
        thousands, hundreds, tens, ones = (code // 10**place % 10 for place in (3, 2, 1, 0))
        known = thousands == machine and hundreds == 0 and tens < len(_TYPES) and ones <= _SPARSE and 0 <= code < 10_000
        if known and rows >= 0 and columns >= 0 and imaginary in (0, 1) and 1 < name_byte <= LONGEST_NAME_BYTE:
            stored = np.dtype(order + _TYPES[tens])
            return _Header(stored, ones, (rows, columns), bool(imaginary), name_byte)
    return None


def _name(raw: bytes) -> str:
    """Return the name of a variable; empty where it is none."""
    found = re.fullmatch(rb"([A-Za-z]\w*)\x00+", raw)
    return found[1].decode("ascii") if found else ""


def fits_version_4(head: bytes, size_byte: int) -> bool:
    """Return whether the first bytes of a file are those of a variable that the file can hold."""
    if len(head) < HEADER_BYTE:
        return False
    header = _header(head[:HEADER_BYTE])
    if header is None or not _name(head[HEADER_BYTE : HEADER_BYTE + header.name_byte]):
        return False
    return HEADER_BYTE + header.name_byte + header.size <= size_byte


def variables_4(path: Path, size_byte: int) -> Iterator[tuple[str, Any]]:
    """Yield name and value of each variable.

    Raises
    ------
    ValueError
        Where one is damaged.
    """
    window, at = ByteWindow(InFile(path), size_byte), 0
    while at < size_byte:
        header = _header(window.at(at, HEADER_BYTE))
        name = _name(window.at(at + HEADER_BYTE, header.name_byte)) if header else ""
        if header is None or not name:
            raise ValueError(f"no variable begins at byte {at}")
        begin = at + HEADER_BYTE + header.name_byte
        at = begin + header.size
        if at > size_byte:
            raise ValueError(f"'{name}' is longer than the file")
        if header.kind == _TEXT:
            yield name, _text(window, header, begin)
        elif header.kind == _SPARSE or header.is_complex:
            yield name, Refused("is sparse or complex and was not read")
        else:
            native = header.stored.newbyteorder("=")
            yield name, FileArray(InFile(path), path, header.shape, header.stored, native, begin, turned=True)


def _text(window: ByteWindow, header: _Header, begin: int) -> str:
    """Return a text, whose letters are stored as numbers."""
    count = min(header.shape[0] * header.shape[1], LONGEST_TEXT_BYTE // header.stored.itemsize)
    codes = np.frombuffer(window.at(begin, count * header.stored.itemsize), header.stored)
    letters = [int(code) for code in codes.tolist() if np.isfinite(code) and 0 <= code < 0x110000]
    return "".join(chr(letter) for letter in letters)
