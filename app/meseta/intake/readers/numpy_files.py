"""NPY and NPZ files, never unpickled."""

from __future__ import annotations

import struct
import zipfile
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.intake.readers.unpack import BOMB_BYTE, BOMB_RATIO
from meseta.recipe.intake import IntakeSettings

__all__ = ["NumpyReader"]

_NPY: Final = b"\x93NUMPY"
LARGE_BYTE: Final = 64 << 20
"""Larger arrays stay in their file."""
BLOCK_BYTE: Final = 16 << 20


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
            loaded = _loaded(path, tree)
        except (
            ValueError,
            OSError,
            EOFError,
            zipfile.BadZipFile,
            KeyError,
            SyntaxError,
            TypeError,
            struct.error,
        ) as error:
            raise _fault(error, path) from error
        for name, array in loaded.items():
            _add(tree, name, array)
        return understood(tree, path, settings)


@dataclass(frozen=True)
class _FileArray:
    """An array in a file that is read in blocks: the last key may pick a range, an index, or all.

    Attributes
    ----------
    begin_byte : int
        Where its numbers begin.
    turned : bool
        Whether columns stand end to end in the file (Fortran order); then it is the transpose of what lies there.
    """

    path: Path
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    begin_byte: int
    turned: bool = False
    field: str = ""

    @property
    def size(self) -> int:
        """Number of values."""
        return int(np.prod(self.shape))

    def __getitem__(self, key: Any) -> npt.NDArray[Any]:
        """Return a part of the array: one key an axis, the others whole."""
        keys = list(key) if isinstance(key, tuple) else [key]
        keys += [slice(None)] * (len(self.shape) - len(keys))
        if not self.turned:
            return self._rows(self.shape, keys)
        return self._rows(self.shape[::-1], keys[::-1]).T

    def fields(self, name: str) -> _FileArray:
        """Return one column of a compound array."""
        return replace(self, field=name)

    def _rows(self, shape: tuple[int, ...], keys: list[Any]) -> npt.NDArray[Any]:
        """Return a part of an array whose last axis runs fastest, reading no more than a few megabytes at once."""
        first, rest = keys[0], tuple(keys[1:])
        single = isinstance(first, int)
        start, stop, step = slice(first, first + 1).indices(shape[0]) if single else first.indices(shape[0])
        if step != 1:
            raise ValueError("only whole ranges are read")
        width = int(np.prod(shape[1:]))
        rows = max(BLOCK_BYTE // max(width * self.dtype.itemsize, 1), 1)
        blocks = [self._block(low, min(low + rows, stop), shape[1:], width, rest) for low in range(start, stop, rows)]
        found = (
            np.concatenate(blocks) if len(blocks) > 1 else (blocks or [self._block(0, 0, shape[1:], width, rest)])[0]
        )
        return found[0] if single else found

    def _block(self, low: int, high: int, tail: tuple[int, ...], width: int, rest: tuple[Any, ...]) -> npt.NDArray[Any]:
        count = (high - low) * width
        flat = np.fromfile(self.path, self.dtype, count, offset=self.begin_byte + low * width * self.dtype.itemsize)
        if len(flat) != count:
            raise ValueError("the file became shorter")
        block = flat[self.field] if self.field else flat
        picked = block.reshape(high - low, *tail)[(slice(None), *rest)]
        return picked if picked.shape == (high - low, *tail) and not self.field else np.ascontiguousarray(picked)


def _loaded(path: Path, tree: Tree) -> dict[str, Any]:
    with path.open("rb") as file:
        packed = file.read(4) == b"PK\x03\x04"
    if not packed:
        return {path.stem: _file_array(path) if path.stat().st_size > LARGE_BYTE else _load(path)}
    large = {}
    with zipfile.ZipFile(path) as archive:
        for info in archive.infolist():
            if info.file_size > LARGE_BYTE and info.compress_type == zipfile.ZIP_STORED:
                large[info.filename.removesuffix(".npy")] = info.header_offset
            if info.file_size > BOMB_BYTE and info.file_size > BOMB_RATIO * max(info.compress_size, 1):
                raise InputError(f"'{info.filename}' unpacks beyond reason", str(path), "check where the file is from")
    arrays = {}
    with np.load(path, allow_pickle=False) as members:
        for name in members.files:
            try:
                arrays[name] = _stored_array(path, large[name]) if name in large else members[name]
            except ValueError as error:
                if "pickle" not in str(error).lower() and "object" not in str(error).lower():
                    raise
                tree.refused.append(f"{name} holds objects, which are not read")
    return arrays


def _load(path: Path) -> Any:
    return np.load(path, allow_pickle=False)


def _stored_array(path: Path, header_byte: int) -> _FileArray:
    """Return a large array that lies in a zip as it is."""
    with path.open("rb") as file:
        file.seek(header_byte + 26)  # of the member's local header: lengths of name and extra field, then both
        name_byte, extra_byte = struct.unpack("<HH", file.read(4))
    return _file_array(path, header_byte + 30 + name_byte + extra_byte)


def _file_array(path: Path, begin_byte: int = 0) -> _FileArray:
    """Return a large array, its samples left in the file; what its header claims is checked against the file."""
    with path.open("rb") as file:
        file.seek(begin_byte)
        version = np.lib.format.read_magic(file)
        read_header = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
        shape, turned, dtype = read_header(file)
        begin = file.tell()
    if dtype.hasobject:
        raise ValueError("object arrays are not read")
    if int(np.prod(shape, dtype=object)) * dtype.itemsize > path.stat().st_size - begin:
        raise ValueError("it claims more samples than the file holds")
    return _FileArray(path, tuple(int(n) for n in shape), dtype, begin, turned and len(shape) > 1)


def _add(tree: Tree, name: str, array: Any) -> None:
    if not isinstance(array, np.ndarray | _FileArray):
        tree.refused.append(f"{name} is no array")
    elif array.dtype.kind in "biufS" + "U" and array.size == 1:
        tree.values[f"/{name}"] = np.asarray(array[()]).reshape(-1)[0].item()
    elif array.dtype.kind == "U":
        tree.texts[f"/{name}"] = np.asarray(array[()]).reshape(-1)
    elif (array.dtype.kind in "biuf" or array.dtype.names) and array.size:
        tree.nodes.append(Node(f"/{name}", array, array.shape, array.dtype, {}))


def _fault(error: Exception, path: Path) -> InputError:
    if "pickle" in str(error).lower() or "object arrays" in str(error).lower():
        return InputError("holds Python objects, which are never read", str(path), "save plain arrays of numbers")
    return InputError(f"is damaged ({str(error)[:80]})", str(path), "save the array again")
