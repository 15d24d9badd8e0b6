"""NPY and NPZ files, never unpickled."""

from __future__ import annotations

import zipfile
from pathlib import Path
from typing import Any, Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.intake.readers.unpack import BOMB_BYTE, BOMB_RATIO
from meseta.recipe.intake import IntakeSettings

__all__ = ["NumpyReader"]

_NPY: Final = b"\x93NUMPY"


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
        except (ValueError, OSError, EOFError, zipfile.BadZipFile, KeyError, SyntaxError, TypeError) as error:
            raise _fault(error, path) from error
        for name, array in loaded.items():
            _add(tree, name, array)
        return understood(tree, path, settings)


def _loaded(path: Path, tree: Tree) -> dict[str, Any]:
    with path.open("rb") as file:
        packed = file.read(4) == b"PK\x03\x04"
    if not packed:
        return {path.stem: np.load(path, allow_pickle=False)}
    with zipfile.ZipFile(path) as archive:
        for info in archive.infolist():
            if info.file_size > BOMB_BYTE and info.file_size > BOMB_RATIO * max(info.compress_size, 1):
                raise InputError(f"'{info.filename}' unpacks beyond reason", str(path), "check where the file is from")
    arrays = {}
    with np.load(path, allow_pickle=False) as members:
        for name in members.files:
            try:
                arrays[name] = members[name]
            except ValueError as error:
                if "pickle" not in str(error).lower() and "object" not in str(error).lower():
                    raise
                tree.refused.append(f"{name} holds objects, which are not read")
    return arrays


def _add(tree: Tree, name: str, array: Any) -> None:
    if not isinstance(array, np.ndarray):
        tree.refused.append(f"{name} is no array")
    elif array.dtype.kind in "biufS" + "U" and array.size == 1:
        tree.values[f"/{name}"] = array.reshape(-1)[0].item()
    elif array.dtype.kind == "U":
        tree.texts[f"/{name}"] = array.reshape(-1)
    elif (array.dtype.kind in "biuf" or array.dtype.names) and array.size:
        tree.nodes.append(Node(f"/{name}", array, array.shape, array.dtype, {}))


def _fault(error: Exception, path: Path) -> InputError:
    if "pickle" in str(error).lower() or "object arrays" in str(error).lower():
        return InputError("holds Python objects, which are never read", str(path), "save plain arrays of numbers")
    return InputError(f"is damaged ({str(error)[:80]})", str(path), "save the array again")
