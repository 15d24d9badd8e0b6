"""Compiled kernels of the correlation histogram: products of columns, and the same after a shuffle."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = [
    "add_deviations",
    "band_about",
    "correlate_products",
    "largest_product",
    "narrow_rows",
    "permute_within",
]


@kernel
def narrow_rows(
    values: npt.NDArray[np.number],
    narrow: npt.NDArray[np.float32],
    total: npt.NDArray[np.float64],
    squares: npt.NDArray[np.float64],
) -> None:
    """Write rows as float32; add every column's sum to ``total`` and its sum of squares to ``squares``."""
    for row in range(values.shape[0]):
        for column in range(values.shape[1]):
            value = np.float64(values[row, column])
            narrow[row, column] = value
            total[column] += value
            squares[column] += value * value


@kernel
def correlate_products(
    products: npt.NDArray[np.float64],
    total: npt.NDArray[np.float64],
    rows: int,
    result: npt.NDArray[np.float64],
) -> None:
    """Write Pearson's correlation of columns from their sums and sums of products; NaN where a column is constant."""
    columns = len(total)
    scale = np.empty(columns)
    for column in range(columns):
        spread = rows * products[column, column] - total[column] * total[column]
        scale[column] = np.sqrt(spread) if spread > 0.0 else np.nan
    for one in range(columns):
        for other in range(columns):
            covariance = rows * products[one, other] - total[one] * total[other]
            value = covariance / (scale[one] * scale[other])
            result[one, other] = -1.0 if value < -1.0 else (1.0 if value > 1.0 else value)
        result[one, one] = 1.0 if scale[one] > 0.0 else np.nan


@kernel
def add_deviations(
    without: npt.NDArray[np.float64],
    whole: npt.NDArray[np.float64],
    total: npt.NDArray[np.float64],
    squares: npt.NDArray[np.float64],
) -> None:
    """Add how far each correlation without a part lies from the whole one, as Fisher's z, and the square of it."""
    for one in range(len(whole)):
        for other in range(len(whole)):
            deviation = math.atanh(without[one, other]) - math.atanh(whole[one, other])
            total[one, other] += deviation
            squares[one, other] += deviation * deviation


@kernel
def band_about(
    whole: npt.NDArray[np.float64],
    total: npt.NDArray[np.float64],
    squares: npt.NDArray[np.float64],
    parts: int,
    reach: float,
    low: npt.NDArray[np.float64],
    high: npt.NDArray[np.float64],
) -> None:
    """Write the band ``reach`` jackknife errors about each correlation; perfect correlations have one of no width."""
    for one in range(len(whole)):
        for other in range(len(whole)):
            value = whole[one, other]
            if abs(value) == 1.0:
                low[one, other] = high[one, other] = value
                continue
            variance = (parts - 1) / parts * (squares[one, other] - total[one, other] ** 2 / parts)
            half = reach * math.sqrt(0.0 if variance < 0.0 else variance)  # NaN stays NaN
            low[one, other] = math.tanh(math.atanh(value) - half)
            high[one, other] = math.tanh(math.atanh(value) + half)


@kernel
def permute_within(
    values: npt.NDArray[np.float32], block: int, seed: npt.NDArray[np.uint64], permuted: npt.NDArray[np.float32]
) -> None:
    """Permute every column within blocks of rows, each column on its own; ``seed`` has one number a column.

    Fisher and Yates' shuffle, with the splitmix64 generator (Steele, Lea and Flood, OOPSLA 2014).
    """
    rows, columns = values.shape
    states = seed.copy()
    permuted[:] = values
    for first in range(0, rows, block):
        last = min(first + block, rows)
        for column in range(columns):
            state = states[column]
            for row in range(last - 1, first, -1):
                state += np.uint64(0x9E3779B97F4A7C15)
                mixed = state
                mixed = (mixed ^ (mixed >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
                mixed = (mixed ^ (mixed >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
                mixed = mixed ^ (mixed >> np.uint64(31))
                other = first + int((mixed >> np.uint64(32)) * np.uint64(row - first + 1) >> np.uint64(32))
                permuted[row, column], permuted[other, column] = permuted[other, column], permuted[row, column]
            states[column] = state


@kernel
def largest_product(values: npt.NDArray[np.float32]) -> float:
    """Return the largest absolute sum of products of two different columns (four rows at a time, in order)."""
    rows, columns = values.shape
    sums = np.zeros((columns, columns), np.float32)
    whole = rows // 4 * 4
    for row in range(0, whole, 4):
        one, two, three, four = values[row], values[row + 1], values[row + 2], values[row + 3]
        for column in range(columns - 1):
            line = sums[column]
            first, second, third, fourth = one[column], two[column], three[column], four[column]
            for other in range(column + 1, columns):
                line[other] += first * one[other] + second * two[other] + third * three[other] + fourth * four[other]
    for row in range(whole, rows):
        for column in range(columns - 1):
            for other in range(column + 1, columns):
                sums[column, other] += values[row, column] * values[row, other]
    return float(np.abs(sums).max())


@warm_up
def _warm_up() -> None:
    square = np.ones((2, 2), np.float32)
    for wide in (np.ones((2, 2)), np.ones((2, 2), np.int64), np.ones((2, 2), np.uint16)):
        narrow_rows(wide, square, np.zeros(2), np.zeros(2))
    correlate_products(np.ones((2, 2)), np.ones(2), 2, np.ones((2, 2)))
    wide = np.zeros((2, 2))
    add_deviations(wide, wide, wide.copy(), wide.copy())
    band_about(wide, wide, wide, 2, 1.0, wide.copy(), wide.copy())
    permute_within(square, 2, np.ones(2, np.uint64), square.copy())
    largest_product(square)
