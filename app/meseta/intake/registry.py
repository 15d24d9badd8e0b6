"""All readers, in the order in which they look at a file.

To add a format: write a module with a class that follows :class:`meseta.intake.readers.contents.Reader`, and name it
here; or publish it under the entry-point group ``meseta.readers``.
"""

from __future__ import annotations

import importlib
from dataclasses import dataclass
from functools import cache
from importlib.metadata import EntryPoint, entry_points
from pathlib import Path
from typing import Final

from meseta.errors import InputError, nearest
from meseta.intake.readers.contents import Contents, Reader
from meseta.recipe.intake import IntakeSettings

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


_FOREIGN: Final = {
    b"CDF\x01": "a netCDF 3 file",
    b"CDF\x02": "a netCDF 3 file",
    b"CDF\x05": "a netCDF 3 file",
    b"PAR1": "a Parquet file",
    b"ARROW1": "an Arrow file",
    b"SQLite format 3": "a database",
    bytes.fromhex("d0cf11e0a1b11ae1"): "an office document of the old kind",
}
"""First bytes of formats that are not read (their published descriptions)."""
_LAST: Final = 2
"""So many of the own readers take what no other does: they are asked after those of other packages."""


@dataclass
class _Broken:
    """A reader of another package that cannot be loaded: it recognises nothing, and says why where it is named."""

    name: str
    fault: str

    def sniff(self, head: bytes, path: Path) -> bool:
        """Return False."""
        return False

    def open(self, path: Path, settings: IntakeSettings) -> Contents:
        """Raise what is wrong with the reader."""
        raise InputError(f"reader '{self.name}' cannot be loaded ({self.fault})", str(path), "repair its package")


@cache
def readers() -> tuple[Reader, ...]:
    """Return one of every reader: own ones, those of other packages, last the ones that take any text or numbers."""
    own: list[Reader] = []
    for entry in _READERS:
        module, _, name = entry.partition(":")
        own.append(getattr(importlib.import_module(module), name)())
    others = [_loaded(point) for point in entry_points(group="meseta.readers")]
    return (*own[:-_LAST], *others, *own[-_LAST:])


def _loaded(point: EntryPoint) -> Reader:
    try:
        made: Reader = point.load()()
    except Exception as error:  # noqa: BLE001  whatever another package does wrong must not stop all reading
        return _Broken(point.name, f"{type(error).__name__}: {error}")
    return made


def find_reader(head: bytes, path: Path, wanted: str | None, is_described: bool = False) -> Reader:
    """Return the reader for a file: the wanted one, else the first that recognises the content.

    Parameters
    ----------
    head : bytes
        The first bytes.
    path : Path
    wanted : str, optional
        Name of a reader.
    is_described : bool
        Whether the recipe says how numbers without a header stand in a file that no reader recognises.

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
        is_no_text = _foreign(head) or (is_described and _is_binary(head))
        if reader.sniff(head, path) and not (reader.name == "text" and is_no_text):
            return reader
    if is_described:
        return next(reader for reader in readers() if reader.name == "binary")
    raise InputError(_not_recognised(head, path), str(path), _remedy(head))


def _is_binary(head: bytes) -> bool:
    """Return whether bytes with zeros among them have no mark that makes them a text."""
    return b"\x00" in head and not head.startswith((b"\xff\xfe", b"\xfe\xff"))


def _foreign(head: bytes) -> str:
    """Return what a file of a well-known format is that is not read; empty where it is of none."""
    return next((words for mark, words in _FOREIGN.items() if head.startswith(mark)), "")


def _remedy(head: bytes) -> str:
    if head.startswith(b"CDF"):
        return "save it as netCDF 4, which is HDF5, or as text"
    if _foreign(head):
        return "save the table as text (CSV), NPZ or HDF5"
    if _is_binary(head):
        return (
            "for numbers without a header give intake.binary_type (for example int16), intake.binary_channels and, if "
            "they apply, binary_order and binary_header_byte; the help page Files says what else is read"
        )
    return "see the help page Files for what is read, or set intake.reader"


def _not_recognised(head: bytes, path: Path) -> str:
    if _foreign(head):
        return f"is {_foreign(head)}, which is not read"
    if path.suffix.lower() in (".h5", ".hdf5", ".hdf", ".he5"):
        return "is named like HDF5 but is not an HDF5 file, nor any other known format"
    if 0 < head.count(0) < 0.01 * len(head) and sum(byte > 127 for byte in head[:4096]) < 0.1 * len(head[:4096]):
        return "is a text with NUL bytes in it"
    if b"\x00" in head:
        return "is binary and of no known format"
    return "holds no rows of numbers"
