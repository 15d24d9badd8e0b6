"""The points of a length series in a text table."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np

from meseta.errors import InputError, nearest
from meseta.intake.readers.text_encoding import decode_head
from meseta.intake.readers.unpack import read_bytes
from meseta.peaks.decay import DecayPoints

__all__ = ["read_points"]

LARGEST_BYTE = 8 << 20
_NEEDED = ("length", "conductance_g0")
_OPTIONAL = ("length_error", "conductance_error_g0", "label")


def read_points(path: str | Path, length_unit: str = "") -> DecayPoints:
    """Read a length series.

    Parameters
    ----------
    path : str or Path
        Table with a header: ``length``, ``conductance_g0``, optional ``length_error``, ``conductance_error_g0`` and
        ``label``; comma, semicolon, tab or blanks between the cells, decimal point or comma, any of the encodings that
        recordings have, packed or not.  Lines that begin with # are comments; empty cells of optional columns mean
        "not stated".
    length_unit : str
        What a length counts; "unit of length" where it is not said.

    Raises
    ------
    InputError
        Naming file, line and column.
    """
    name = str(path)
    text = _text(Path(path))
    delimiter = _delimiter(text)
    lines = [
        (number, row)
        for number, row in enumerate(csv.reader(text.splitlines(), delimiter=delimiter, skipinitialspace=True), 1)
        if any(cell.strip() for cell in row) and not row[0].lstrip().startswith("#")
    ]
    if not lines:
        raise InputError("is empty", name, f"the first line names the columns: {', '.join(_NEEDED)}")
    header = [cell.strip() for cell in lines[0][1]]
    _check_header(header, name)
    columns: dict[str, list[float]] = {column: [] for column in (*_NEEDED, *_OPTIONAL[:2])}
    labels = []
    for number, row in lines[1:]:
        cells = dict(zip(header, [cell.strip() for cell in row], strict=False))
        if len(row) > len(header):
            raise InputError(
                f"has {len(row)} cells, the header {len(header)}", f"{name}, line {number}", "check commas"
            )
        for column, values in columns.items():
            cell = cells.get(column, "")
            cell = cell.replace(",", ".") if delimiter != "," and cell.count(",") == 1 and "." not in cell else cell
            values.append(_number(cell, column, f"{name}, line {number}"))
        labels.append(cells.get("label", ""))
    if not labels:
        raise InputError("has a header but no points", name, "one line a molecule")
    arrays = {column: np.array(values) for column, values in columns.items()}
    return DecayPoints(**arrays, label=np.array(labels), length_unit=length_unit or "unit of length", source=name)


def _text(path: Path) -> str:
    """Return the text of a file, unpacked and decoded.

    Raises
    ------
    InputError
        Where it cannot be read, is too large for a few points, or is no text.
    """
    try:
        found = read_bytes(path, LARGEST_BYTE)
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror})", str(path), "check the path") from error
    if found is None:
        raise InputError("is too large for a length series", str(path), "give a table with one line a molecule")
    encoding = decode_head(found[0])
    if b"\x00" in found[0] and not encoding.startswith("utf-16"):
        raise InputError("is no text", str(path), "give a table with one line a molecule")
    return found[0].decode(encoding, "replace").replace("\r\n", "\n").replace("\r", "\n")


def _delimiter(text: str) -> str:
    """Return what stands between the names of the columns: the first of tab, semicolon, comma, blank in that line."""
    lines = (line.strip() for line in text.splitlines())
    header = next((line for line in lines if line and not line.startswith("#")), "")
    return next((sign for sign in "\t;, " if sign in header), ",")


def _check_header(header: list[str], name: str) -> None:
    known = (*_NEEDED, *_OPTIONAL)
    for column in _NEEDED:
        if column not in header:
            raise InputError(f"has no column '{column}'", name, f"columns: {', '.join(known)}")
    for column in header:
        if column not in known:
            raise InputError(f"has an unknown column '{column}'", name, nearest(column, known))
    if len(set(header)) < len(header):
        raise InputError("names a column twice", name, f"columns: {', '.join(known)}")


def _number(cell: str, column: str, where: str) -> float:
    if not cell and column not in _NEEDED:
        return float("nan")
    try:
        value = float(cell)
    except ValueError:
        raise InputError(f"'{cell}' in column '{column}' is not a number", where, "use a point for decimals") from None
    if not np.isfinite(value):
        raise InputError(f"'{cell}' in column '{column}' is not a finite number", where, "leave the line out")
    return value
