"""Igor binary waves (one wave a file) of versions 2, 3 and 5.

The layout is that of the format's technical note TN003, "Igor Binary Format".  Every size in a header is checked
against the file; the numbers of large waves stay in it.
"""

from __future__ import annotations

import math
import struct
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.file_array import FileArray, InFile
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.recipe.intake import IntakeSettings

__all__ = ["IgorReader"]

_TYPES: Final = {2: "f4", 4: "f8", 8: "i1", 16: "i2", 32: "i4", 72: "u1", 80: "u2", 96: "u4"}
_COMPLEX: Final = 1
_DATA_BYTE: Final = {2: 126, 3: 130, 5: 384}
"""By version, the byte at which the numbers begin."""
LARGE_BYTE: Final = 64 << 20
"""Larger waves stay in their file."""
LONGEST_NOTE_BYTE: Final = 1 << 20
LONGEST_UNIT_BYTE: Final = 256
PADDING_BYTE: Final = 16
"""Behind the numbers of versions 2 and 3."""


@dataclass(frozen=True)
class _Wave:
    """What the header of a wave says; the sizes that it claims are of the wave, then of what follows its numbers."""

    version: int
    order: str
    type_code: int
    shape: tuple[int, ...]
    name: str
    unit: str
    axis_unit: str
    step: float
    claimed: tuple[int, ...]
    before_note_byte: int
    note_byte: int
    unit_byte: int = 0


class IgorReader:
    """Reads Igor binary waves."""

    name = "Igor"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the first word is a version, and the words of the header sum to zero."""
        return any(_words_sum_to_zero(head, order, version) for order, version in _versions(head))

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the wave with what its note says."""
        size = path.stat().st_size
        with path.open("rb") as file:
            head = file.read(max(_DATA_BYTE.values()))
        found = next(iter(_versions(head)), None)
        if found is None or len(head) < _DATA_BYTE[found[1]]:
            raise InputError("is damaged (its header is not whole)", str(path), "save the wave again")
        wave = _version_5(head, found[0]) if found[1] == 5 else _version_2_or_3(head, *found)
        kind = _TYPES.get(wave.type_code)
        if kind is None:
            raise InputError(_refusal(wave.type_code), str(path), "save a wave of real numbers")
        stored = np.dtype(wave.order + kind)
        behind = _DATA_BYTE[wave.version] + math.prod(wave.shape) * stored.itemsize
        sizes = (*wave.claimed, *wave.shape)
        if not all(0 <= n <= size for n in sizes) or behind + sum(wave.claimed[1:]) > size:
            raise InputError(
                "is damaged (its header claims more than the file holds)", str(path), "save the wave again"
            )
        return understood(_tree(wave, stored, behind, size > LARGE_BYTE, path), path, settings)


def _versions(head: bytes) -> list[tuple[str, int]]:
    """Return byte order and version that the first word may mean."""
    if len(head) < 2:
        return []
    found = [(order, struct.unpack_from(order + "h", head)[0]) for order in "<>"]
    return [(order, version) for order, version in found if version in _DATA_BYTE]


def _words_sum_to_zero(head: bytes, order: str, version: int) -> bool:
    """Return whether the header's 16-bit words sum to zero, as the format's checksum demands."""
    size = _DATA_BYTE[version]
    if len(head) < size:
        return False
    words = np.frombuffer(head[:size], order + "i2").astype(np.int64)
    return int(words.sum()) & 0xFFFF == 0


def _refusal(type_code: int) -> str:
    if type_code == 0:
        return "holds texts, not numbers"
    if type_code & _COMPLEX and type_code & ~_COMPLEX in _TYPES:
        return "holds complex numbers, which are not read"
    return "is damaged (its numbers are of no known type)"


def _version_5(head: bytes, order: str) -> _Wave:
    wave_byte, formula_byte, note_byte, unit_byte = struct.unpack_from(order + "4i", head, 4)
    points, type_code = struct.unpack_from(order + "ih", head, 76)
    sizes = struct.unpack_from(order + "4i", head, 132)
    shape = tuple(n for n in sizes if n != 0) or (points,)
    if math.prod(shape) != points:
        shape = (max(points, *shape),)  # which the file cannot hold, or which is no wave
    return _Wave(
        version=5,
        order=order,
        type_code=type_code,
        shape=shape,
        name=_text(head[92:124]),
        unit=_text(head[212:216]),
        axis_unit=_text(head[216:220]),
        step=struct.unpack_from(order + "d", head, 148)[0],
        claimed=(wave_byte, formula_byte, note_byte, unit_byte),
        before_note_byte=formula_byte,
        note_byte=note_byte,
        unit_byte=unit_byte,
    )


def _version_2_or_3(head: bytes, order: str, version: int) -> _Wave:
    wave_byte, note_byte = struct.unpack_from(order + "2i", head, 2)
    formula_byte = struct.unpack_from(order + "i", head, 10)[0] if version == 3 else 0
    begin = _DATA_BYTE[version] - 110  # of the wave's own header
    return _Wave(
        version=version,
        order=order,
        type_code=struct.unpack_from(order + "h", head, begin)[0],
        shape=struct.unpack_from(order + "i", head, begin + 42),
        name=_text(head[begin + 6 : begin + 26]),
        unit=_text(head[begin + 34 : begin + 38]),
        axis_unit=_text(head[begin + 38 : begin + 42]),
        step=struct.unpack_from(order + "d", head, begin + 48)[0],
        claimed=(wave_byte, note_byte, formula_byte),
        before_note_byte=PADDING_BYTE,
        note_byte=note_byte,
    )


def _tree(wave: _Wave, stored: np.dtype[Any], behind: int, large: bool, path: Path) -> Tree:
    """Return the wave with its note; ``behind`` is the byte behind its numbers."""
    with path.open("rb") as file:
        file.seek(behind + wave.before_note_byte)
        note = file.read(min(wave.note_byte, LONGEST_NOTE_BYTE))
        file.seek(behind + wave.before_note_byte + wave.note_byte)
        unit = wave.unit or _text(file.read(min(wave.unit_byte, LONGEST_UNIT_BYTE)))
    tree = Tree(attributes={"": _note(_text(note))})
    if wave.axis_unit == "s" and wave.step > 0:
        tree.attributes[""].setdefault("sample_interval_second", wave.step)
    begin = _DATA_BYTE[wave.version]
    array = FileArray(InFile(path), path, wave.shape, stored, stored.newbyteorder("="), begin, len(wave.shape) > 1)
    if array.size > 1:
        attributes = {"unit": unit} if unit else {}
        name = f"/{wave.name.replace('/', '_') or path.stem}"
        tree.nodes.append(Node(name, array if large else array[()], array.shape, array.dtype, attributes))
    return tree


def _text(raw: bytes) -> str:
    return raw.split(b"\x00")[0].decode("utf-8", "replace").strip()


def _note(text: str) -> dict[str, Any]:
    found = {}
    for line in text.replace("\r", "\n").split("\n"):
        key, separator, value = line.partition(":" if ":" in line else "=")
        if separator and key.strip() and value.strip():
            found[key.strip()] = value.strip()
    return found
