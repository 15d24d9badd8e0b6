"""Igor binary waves (one wave a file)."""

from __future__ import annotations

import struct
from pathlib import Path
from typing import Any, Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.readers.contents import Contents
from meseta.intake.readers.hdf5 import understood
from meseta.intake.readers.hdf5_tree import Node, Tree
from meseta.recipe.intake import IntakeSettings

__all__ = ["IgorReader"]

_VERSIONS: Final = (2, 3, 5)
_FAULTS: Final = (
    ValueError, KeyError, EOFError, OSError, IndexError, TypeError, OverflowError, struct.error, AttributeError,
    AssertionError, NotImplementedError, MemoryError, UnicodeDecodeError,
)  # fmt: skip


class IgorReader:
    """Reads Igor binary waves."""

    name = "Igor"

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return whether the version word fits and the file carries the format's ending or its sizes."""
        if len(head) < 128:
            return False
        for order in ("<", ">"):
            version = struct.unpack_from(order + "h", head)[0]
            if version in _VERSIONS and _words_sum_to_zero(head, order, version):
                return True
        return False

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Return the wave with what its note says."""
        from igor2 import binarywave

        if not _sizes_fit(path):
            raise InputError(
                "is damaged (its header claims more than the file holds)", str(path), "save the wave again"
            )
        try:
            wave = binarywave.load(str(path))["wave"]
            return understood(_tree(wave, path), path, settings)
        except _FAULTS as error:
            raise InputError(f"is damaged ({str(error)[:60]})", str(path), "save the wave again") from error


def _sizes_fit(path: Path) -> bool:
    """Return whether every size in the header fits the file; the parser would allocate whatever is claimed."""
    size = path.stat().st_size
    with path.open("rb") as file:
        head = file.read(384)
    if len(head) < 2:
        return False
    order = "<" if struct.unpack_from("<h", head)[0] in _VERSIONS else ">"
    version = struct.unpack_from(order + "h", head)[0]
    if version not in _VERSIONS or len(head) < {2: 126, 3: 130, 5: 384}[version]:
        return False
    if version == 5:
        claimed = struct.unpack_from(order + "15i", head, 4)
        points, dimensions = struct.unpack_from(order + "i", head, 76)[0], struct.unpack_from(order + "4i", head, 132)
        product = 1
        for count in dimensions:
            product *= max(count, 1)
    else:
        claimed = struct.unpack_from(order + ("2i" if version == 2 else "3i"), head, 2)
        points = product = struct.unpack_from(order + "i", head, {2: 16, 3: 20}[version] + 42)[0]
        dimensions = ()
    every = (*claimed, points, product, *dimensions)
    return all(0 <= count <= size for count in every)


def _words_sum_to_zero(head: bytes, order: str, version: int) -> bool:
    """Return whether the header's 16-bit words sum to zero, as the format's checksum demands."""
    size = {2: 16 + 110, 3: 20 + 110, 5: 64 + 320}[version]
    if len(head) < size:
        return False
    words = np.frombuffer(head[:size], order + "i2").astype(np.int64)
    return int(words.sum()) & 0xFFFF == 0


def _tree(wave: dict[str, Any], path: Path) -> Tree:
    data = np.asarray(wave["wData"])
    header = wave["wave_header"]
    name = _text(header.get("bname", b"")) or path.stem
    tree = Tree(attributes={"": _note(_text(wave.get("note", b"")))})
    step = header.get("sfA", header.get("hsA", 0.0))
    first = float(np.asarray(step).reshape(-1)[0]) if np.size(step) else 0.0
    axis = _text(b"".join(header["dimUnits"][0])) if "dimUnits" in header else _text(header.get("xUnits", b""))
    if axis == "s" and first > 0:
        tree.attributes[""].setdefault("sample_interval_second", first)
    unit = _text(b"".join(header["dataUnits"])) if "dataUnits" in header else ""
    if data.dtype.kind in "biuf" and data.size > 1:
        tree.nodes.append(Node(f"/{name}", data, data.shape, data.dtype, {"unit": unit} if unit else {}))
    return tree


def _text(value: Any) -> str:
    raw = value if isinstance(value, bytes) else b"".join(value) if isinstance(value, list) else str(value).encode()
    return raw.split(b"\x00")[0].decode("utf-8", "replace").strip()


def _note(text: str) -> dict[str, str]:
    found = {}
    for line in text.replace("\r", "\n").split("\n"):
        key, separator, value = line.partition(":" if ":" in line else "=")
        if separator and key.strip() and value.strip():
            found[key.strip()] = value.strip()
    return found
