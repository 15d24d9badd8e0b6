"""The filter line over a table: comparisons of columns joined by "and", or plain words to look for."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError, nearest

__all__ = ["mask_for"]

_COMPARISON = re.compile(r"^\s*(\w+)\s*(<=|>=|==|!=|=|<|>)\s*(.+?)\s*$")
_RANGE = re.compile(r"^\s*(\w+)\s+in\s+(\S+?)\s*\.\.\s*(\S+)\s*$")


def mask_for(text: str, columns: Mapping[str, npt.NDArray[Any]]) -> npt.NDArray[np.bool_] | None:
    """Return which rows a filter line asks for; None where it is empty.

    ``level_g0 > 1e-4 and kind = molecule``, ``trace in 100..200`` (half-open), or words that any text column contains.

    Raises
    ------
    CallError
        Where a column is unknown or a number is none.
    """
    if not text.strip():
        return None
    rows = len(next(iter(columns.values())))
    mask = np.ones(rows, bool)
    for part in re.split(r"\s+and\s+", text.strip()):
        mask &= _one(part, columns)
    return mask


def _one(part: str, columns: Mapping[str, npt.NDArray[Any]]) -> npt.NDArray[np.bool_]:
    within = _RANGE.match(part)
    if within:
        column = _column(within.group(1), columns)
        low, high = (_number(end, part) for end in within.groups()[1:])
        return np.asarray((column >= low) & (column < high), bool)
    comparison = _COMPARISON.match(part)
    if comparison:
        return _compared(_column(comparison.group(1), columns), comparison.group(2), comparison.group(3), part)
    word = part.strip().strip("\"'").lower()
    texts = [column for column in columns.values() if np.asarray(column).dtype.kind in "UT"]
    found = np.zeros(len(next(iter(columns.values()))), bool)
    for column in texts:
        found |= np.char.find(np.char.lower(column.astype(np.str_)), word) >= 0
    return found


def _compared(column: npt.NDArray[Any], sign: str, value: str, part: str) -> npt.NDArray[np.bool_]:
    if column.dtype.kind in "UT":
        equal = column == value.strip("\"'")
        if sign in ("=", "=="):
            return np.asarray(equal, bool)
        if sign == "!=":
            return np.asarray(~equal, bool)
        raise CallError(f"'{part}' compares text by size", "filter", "write = or !=")
    if column.dtype.kind == "b":
        wanted = value.lower() in ("yes", "true", "1")
        return np.asarray((column == wanted) == (sign != "!="), bool)
    number = _number(value, part)
    compare = {"<": np.less, "<=": np.less_equal, ">": np.greater, ">=": np.greater_equal, "!=": np.not_equal}
    return np.asarray(compare.get(sign, np.equal)(column, number), bool)


def _column(name: str, columns: Mapping[str, npt.NDArray[Any]]) -> npt.NDArray[Any]:
    if name not in columns:
        raise CallError(f"there is no column '{name}'", "filter", nearest(name, columns))
    return np.asarray(columns[name])


def _number(text: str, part: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise CallError(
            f"'{text}' in '{part}' is not a number", "filter", "write for example level_g0 > 1e-4"
        ) from None
