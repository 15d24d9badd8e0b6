"""Compiled kernels for numbers as they are stored: scaled into float32, turned from columns into rows."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["SCALED_TYPES", "scale_into", "turn_into"]

SCALED_TYPES = ("int16", "uint16", "int32", "float32", "float64")
"""Types of stored numbers that the kernels are compiled for."""
SQUARE = 32


@kernel
def scale_into(
    stored: npt.NDArray[Any],
    scale: float,
    offset: float,
    factor: float,
    shift: float,
    first_divisor: float,
    second_divisor: float,
    target: npt.NDArray[np.float32],
) -> None:
    """Fill ``target`` with (((stored scale + offset) factor) - shift) / first_divisor / second_divisor.

    Each step in float64 and in this order, so that the bits are those of the same steps one after the other on arrays.
    """
    for index in range(len(stored)):
        value = np.float64(stored[index])
        if scale != 1.0:
            value *= scale
        if offset != 0.0:
            value += offset
        value = value * factor - shift
        if first_divisor != 1.0:
            value /= first_divisor
        if second_divisor != 1.0:
            value /= second_divisor
        target[index] = np.float32(value)


@kernel
def turn_into(array: npt.NDArray[Any], target: npt.NDArray[Any]) -> None:
    """Fill ``target`` (columns, rows) with an array (rows, columns), square by square so that both stay at hand."""
    rows, columns = array.shape
    for first_row in range(0, rows, SQUARE):
        last_row = min(first_row + SQUARE, rows)
        for first_column in range(0, columns, SQUARE):
            for column in range(first_column, min(first_column + SQUARE, columns)):
                for row in range(first_row, last_row):
                    target[column, row] = array[row, column]


@warm_up
def _compile() -> None:
    for kind in SCALED_TYPES:
        stored = np.zeros(2, kind)
        for _ in ("writable", "read-only"):
            scale_into(stored, 1.0, 0.0, 1.0, 0.0, 1.0, 1.0, np.empty(2, np.float32))
            turn_into(stored.reshape(1, 2), np.empty((2, 1), kind))
            stored.flags.writeable = False
