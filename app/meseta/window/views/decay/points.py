"""The points of a length series as cells of text: in from a table or the clipboard, out as what the engine fits."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from meseta.errors import InputError

if TYPE_CHECKING:
    from meseta.peaks import DecayPoints

__all__ = ["COLUMNS", "Cells", "cells_of", "pasted", "points_of"]

COLUMNS = ("length", "conductance_g0", "length_error", "conductance_error_g0", "label")
Cells = tuple[tuple[str, ...], ...]
"""Rows of :data:`COLUMNS`."""


def points_of(cells: Cells, unit: str) -> DecayPoints | None:
    """Return the points in cells; None where no row has anything in it.

    Raises
    ------
    InputError
        Naming row and column, where something is not a number.
    """
    rows = [(number, row) for number, row in enumerate(cells, 1) if any(cell.strip() for cell in row[:4])]
    if not rows:
        return None
    from meseta.peaks import DecayPoints

    numbers = np.array([[_number(row[at], number, at) for at in range(4)] for number, row in rows], float)
    return DecayPoints(
        length=numbers[:, 0],
        conductance_g0=numbers[:, 1],
        length_error=numbers[:, 2],
        conductance_error_g0=numbers[:, 3],
        label=np.array([row[4].strip() for _, row in rows]),
        length_unit=unit.strip() or "unit of length",
        source="points",
    )


def _number(text: str, row: int, column: int) -> float:
    plain = text.strip().replace("−", "-")
    if not plain:
        if column > 1:
            return float("nan")
        raise InputError(f"row {row} has no {COLUMNS[column]}", "points", "give length and conductance")
    try:
        return float(plain)
    except ValueError:
        raise InputError(
            f"'{text.strip()}' in row {row} is not a number", "points", "use a point for decimals"
        ) from None


def cells_of(points: DecayPoints) -> Cells:
    """Return points as cells."""
    numbers = [points.length, points.conductance_g0, points.length_error, points.conductance_error_g0]
    return tuple(
        (*("" if np.isnan(column[row]) else f"{column[row]:.10g}" for column in numbers), str(points.label[row]))
        for row in range(len(points.length))
    )


def pasted(text: str) -> Cells:
    """Return the cells of copied text: columns apart by tabs, semicolons, commas or spaces, with or without a heading.

    Without a heading that names :data:`COLUMNS`, columns come in the order length, conductance, error of conductance,
    label.
    """
    lines = [line for line in text.splitlines() if line.strip() and not line.lstrip().startswith("#")]
    if not lines:
        return ()
    sign = next((one for one in "\t;," if one in lines[0]), " ")
    rows = [[cell.strip() for cell in row] for row in csv.reader(lines, delimiter=sign, skipinitialspace=True)]
    names: Sequence[str] = ("length", "conductance_g0", "conductance_error_g0", "label")
    if not _is_number(rows[0][0]):
        names, rows = [name.lower() for name in rows[0]], rows[1:]
    found = [dict(zip(names, row, strict=False)) for row in rows]
    return tuple(tuple(row.get(name, "") for name in COLUMNS) for row in found)


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True
