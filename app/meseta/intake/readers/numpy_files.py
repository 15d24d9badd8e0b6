"""NPY and NPZ files, packed or not, never unpickled.

The header is read here (NumPy Enhancement Proposal 1, "A Simple File Format for NumPy Arrays"), so that what it claims
is checked before room is made for it.
"""

from __future__ import annotations

import ast
import math
import re
import struct
import zipfile
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from lzma import LZMAError
from pathlib import Path
from typing import IO, Any, Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.file_array import FileArray, InFile, InMemory, Numbers
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.intake.readers.shared_blocks import SharedBlocks
from meseta.intake.readers.spool import Spool
from meseta.intake.readers.unpack import BOMB_BYTE, BOMB_RATIO, files_in, packing, unpacked_blocks
from meseta.recipe.intake import IntakeSettings

__all__ = ["NumpyReader"]

_NPY: Final = b"\x93NUMPY"
_FAULTS: Final = (
    ValueError, OSError, EOFError, KeyError, SyntaxError, TypeError, IndexError, OverflowError, RecursionError,
    MemoryError, RuntimeError, struct.error, zlib.error, LZMAError, zipfile.BadZipFile,
)  # fmt: skip
LARGE_BYTE: Final = 64 << 20
"""Arrays of larger files stay in them, or are put aside where they are packed."""
LONGEST_HEADER_BYTE: Final = 1 << 20
BLOCK_BYTE: Final = 4 << 20


class NumpyReader:
    """Reads NPY and NPZ files."""

    name = "NumPy"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the file is an array, or a zip of arrays."""
        return head.startswith(_NPY)

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the arrays of the file."""
        tree = Tree(attributes={"": {}})
        try:
            _add_all(tree, path)
        except _FAULTS as error:
            raise InputError(f"is damaged ({str(error)[:80]})", str(path), "save the array again") from error
        if tree.refused and not (tree.nodes or tree.values or tree.texts):
            raise InputError(tree.refused[0], str(path), "save plain arrays of numbers")
        return understood(tree, path, settings)


def _add_all(tree: Tree, path: Path) -> None:
    with path.open("rb") as file:
        kind = packing(file.read(8))
        if kind == "zip":
            _add_members(tree, path)
            return
        if not kind:
            file.seek(0)
            header = _header(file)
            _fits(header, path.stat().st_size - file.tell())
            _add(
                tree, path.stem, header, _there(header, path), file.tell(), path, kept=path.stat().st_size <= LARGE_BYTE
            )
            return
    stream = _Blocks(unpacked_blocks(path, BLOCK_BYTE))
    header = _header(stream)
    _add(tree, path.name.partition(".")[0], header, *_aside(header, stream, path, header.size_byte <= LARGE_BYTE))


def _add_members(tree: Tree, path: Path) -> None:
    """Add the arrays of a zip: as they lie there where they are large and not packed, else put aside or in memory."""
    with zipfile.ZipFile(path) as archive:
        members = files_in(archive)
        total = sum(info.file_size for info in members)
        for info in members:
            if info.file_size > BOMB_BYTE and info.file_size > BOMB_RATIO * max(info.compress_size, 1):
                raise InputError(f"'{info.filename}' unpacks beyond reason", str(path), "check where the file is from")
        if total > max(BOMB_BYTE, BOMB_RATIO * path.stat().st_size):
            raise InputError("unpacks beyond reason", str(path), "check where the file is from")
        kept, spool = total <= LARGE_BYTE, None
        for info in members:
            name = info.filename.removesuffix(".npy")
            with archive.open(info) as stream:
                if not info.filename.endswith(".npy"):
                    tree.refused.append(f"{name} is no array")
                    continue
                header = _header(stream)
                _fits(header, info.file_size - header.begin_byte)
                if header.dtype.hasobject:
                    tree.refused.append(f"{name} holds objects, which are never read")
                elif not kept and info.compress_type == zipfile.ZIP_STORED:
                    begin = _begin_of(path, info.header_offset) + header.begin_byte
                    _add(tree, name, header, _there(header, path), begin, path, kept=False)
                else:
                    spool = spool or (None if kept else Spool(path))
                    _add(tree, name, header, *_aside(header, stream, path, kept, spool))


def _begin_of(path: Path, header_byte: int) -> int:
    """Return the byte at which a member of a zip begins, by its local header."""
    with path.open("rb") as file:
        file.seek(header_byte + 26)  # lengths of name and extra field, then both
        name_byte, extra_byte = struct.unpack("<HH", file.read(4))
    return int(header_byte + 30 + name_byte + extra_byte)


# -- the header -------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Header:
    """What the header of an array says, and at which byte its numbers begin."""

    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    turned: bool
    begin_byte: int

    @property
    def size_byte(self) -> int:
        """Bytes that the numbers take."""
        return math.prod(self.shape) * self.dtype.itemsize


def _header(stream: IO[bytes] | _Blocks) -> _Header:
    """Return the header of an array; its literal is read as one and never evaluated."""
    start = stream.read(8)
    if len(start) < 8 or not start.startswith(_NPY) or start[6] not in (1, 2, 3):
        raise ValueError("no header of an array")
    width = 2 if start[6] == 1 else 4
    length = int.from_bytes(stream.read(width), "little")
    if length > LONGEST_HEADER_BYTE:
        raise ValueError("a header beyond reason")
    raw = stream.read(length)
    if len(raw) < length:
        raise ValueError("the file ends in its header")
    text = raw.decode("utf-8" if start[6] == 3 else "latin-1")
    if start[6] < 3:
        text = re.sub(r"(?<=\d)L\b", "", text)  # whole numbers as an earlier Python wrote them
    said = ast.literal_eval(text.strip())
    shape, turned = said["shape"], said["fortran_order"]
    if not isinstance(shape, tuple) or not all(type(n) is int and n >= 0 for n in shape):
        raise ValueError("no shape of an array")
    dtype = np.lib.format.descr_to_dtype(said["descr"])
    if dtype.itemsize == 0:
        raise ValueError("values of no size")
    return _Header(shape, dtype, bool(turned) and len(shape) > 1, 8 + width + length)


def _fits(header: _Header, there_byte: int) -> None:
    if not header.dtype.hasobject and header.size_byte > there_byte:
        raise ValueError("it claims more samples than the file holds")


# -- the numbers ------------------------------------------------------------------------------------------------------


class _Blocks:
    """Blocks of bytes as a stream."""

    def __init__(self, blocks: Iterator[bytes]) -> None:
        self._blocks, self._rest = blocks, b""

    def read(self, count: int) -> bytes:
        """Return so many bytes; fewer at the end."""
        parts, there = [self._rest], len(self._rest)
        while there < count and (block := next(self._blocks, b"")):
            parts.append(block)
            there += len(block)
        data = b"".join(parts)
        self._rest = data[count:]
        return data[:count]


def _there(header: _Header, path: Path) -> Numbers:
    """Return the bytes of a file, in blocks that the columns of an array share where they take turns."""
    takes_turns = header.dtype.names is not None or (len(header.shape) > 1 and not header.turned)
    return SharedBlocks(path) if takes_turns else InFile(path)


def _parts(stream: IO[bytes] | _Blocks, size_byte: int) -> Iterator[bytes]:
    """Yield so many bytes of a stream in blocks."""
    while size_byte:
        block = stream.read(min(size_byte, BLOCK_BYTE))
        if not block:
            raise ValueError("it claims more samples than the file holds")
        size_byte -= len(block)
        yield block


def _aside(
    header: _Header, stream: IO[bytes] | _Blocks, path: Path, kept: bool, spool: Spool | None = None
) -> tuple[Numbers, int, Path, bool]:
    """Return the bytes of an array that is packed: in memory, or put aside in a temporary file."""
    if header.dtype.hasobject:
        return InMemory(b""), 0, path, kept
    if kept:
        return InMemory(b"".join(_parts(stream, header.size_byte))), 0, path, kept
    spool = spool or Spool(path)
    return spool, spool.append(_parts(stream, header.size_byte)), path, kept


def _add(tree: Tree, name: str, header: _Header, numbers: Numbers, begin_byte: int, path: Path, kept: bool) -> None:
    """Add an array to what was found; ``kept`` brings it into memory."""
    dtype, size = header.dtype, math.prod(header.shape)
    if dtype.hasobject:
        tree.refused.append(f"{name} holds objects, which are never read")
        return
    array: Any = FileArray(numbers, path, header.shape, dtype, dtype, begin_byte, header.turned)
    if dtype.kind in "biufSU" and size == 1:
        tree.values[f"/{name}"] = array[()].reshape(-1)[0].item()
    elif dtype.kind == "U" and header.size_byte <= LARGE_BYTE:
        tree.texts[f"/{name}"] = array[()].reshape(-1)
    elif (dtype.kind in "biuf" or dtype.names) and size:
        tree.nodes.append(Node(f"/{name}", array[()] if kept else array, header.shape, dtype, {}))
    elif dtype.kind == "c":
        tree.refused.append(f"{name} holds complex numbers, which are not read")
