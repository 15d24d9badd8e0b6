"""The points of a length series in a CSV file."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np

from meseta.errors import InputError, nearest
from meseta.peaks.decay import DecayPoints

__all__ = ["read_points"]

_NEEDED = ("length", "conductance_g0")
_OPTIONAL = ("length_error", "conductance_error_g0", "label")


def read_points(path: str | Path, length_unit: str = "") -> DecayPoints:
    """Read a length series.

    Parameters
    ----------
    path : str or Path
        CSV with a header: ``length``, ``conductance_g0``, optional ``length_error``, ``conductance_error_g0`` and
        ``label``.  Lines that begin with # are comments; empty cells of optional columns mean "not stated".
    length_unit : str
        What a length counts; "unit of length" where it is not said.

    Raises
    ------
    InputError
        Naming file, line and column.
    """
    name = str(path)
    try:
        text = Path(path).read_text(encoding="utf-8-sig")
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror})", name, "check the path") from error
    except UnicodeDecodeError as error:
        raise InputError("is not a text file in UTF-8", name, "give a CSV file") from error
    lines = [
        (number, row)
        for number, row in enumerate(csv.reader(text.splitlines()), 1)
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
            values.append(_number(cells.get(column, ""), column, f"{name}, line {number}"))
        labels.append(cells.get("label", ""))
    if not labels:
        raise InputError("has a header but no points", name, "one line a molecule")
    arrays = {column: np.array(values) for column, values in columns.items()}
    return DecayPoints(**arrays, label=np.array(labels), length_unit=length_unit or "unit of length", source=name)


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
