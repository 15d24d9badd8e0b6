"""All readers, in the order in which they look at a file.

To add a format: write a module with a class that follows :class:`meseta.intake.readers.contents.Reader`, and name it
here; or publish it under the entry-point group ``meseta.readers``.
"""

from __future__ import annotations

import importlib
from functools import cache
from importlib.metadata import entry_points
from pathlib import Path
from typing import Final

from meseta.errors import InputError, nearest
from meseta.intake.readers.contents import Reader

__all__ = ["find_reader", "readers"]

_READERS: Final = (
    "meseta.intake.readers.hdf5:Hdf5Reader",
    "meseta.intake.readers.numpy_files:NumpyReader",
    "meseta.intake.readers.mat:MatReader",
    "meseta.intake.readers.tdms:TdmsReader",
    "meseta.intake.readers.igor:IgorReader",
    "meseta.intake.readers.text:TextReader",
    "meseta.intake.readers.binary:BinaryReader",
)


@cache
def readers() -> tuple[Reader, ...]:
    """Return one of every reader, own ones first."""
    made = []
    for entry in _READERS:
        module, _, name = entry.partition(":")
        made.append(getattr(importlib.import_module(module), name)())
    made += [point.load()() for point in entry_points(group="meseta.readers")]
    return tuple(made)


def find_reader(head: bytes, path: Path, wanted: str | None) -> Reader:
    """Return the reader for a file: the wanted one, else the first that recognises the content.

    Raises
    ------
    InputError
        Where there is no such reader, or none recognises the file.
    """
    if wanted is not None:
        for reader in readers():
            if reader.name.lower() == wanted.lower():
                return reader
        raise InputError(
            f"there is no reader '{wanted}'", "intake.reader", nearest(wanted, [reader.name for reader in readers()])
        )
    for reader in readers():
        if reader.sniff(head, path):
            return reader
    raise InputError(
        _not_recognised(head, path),
        str(path),
        "see which files Meseta takes: `meseta peek --help`, or set intake.reader",
    )


def _not_recognised(head: bytes, path: Path) -> str:
    if path.suffix.lower() in (".h5", ".hdf5", ".hdf", ".he5"):
        return "is named like HDF5 but is not an HDF5 file, nor any other known format"
    if 0 < head.count(0) < 0.01 * len(head) and sum(byte > 127 for byte in head[:4096]) < 0.1 * len(head[:4096]):
        return "is a text with NUL bytes in it"
    if b"\x00" in head:
        return "is binary and of no known format"
    return "holds no rows of numbers"
