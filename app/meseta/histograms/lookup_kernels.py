"""Compiled look-up of a sample's interval, without a logarithm or a division a sample.

The top 17 bits of the float32 sample (sign, exponent, 8 bits of mantissa) lead through a table to the first candidate;
comparisons with the exact edges do the rest.  A float32 sample is never rounded: the edges, given as float64, are
replaced by the smallest float32 that is not below them, which changes no comparison.  What an interval stands for, a
bin or one of the exclusions (NaN, saturated, not positive, under, over), is the business of
:class:`meseta.histograms.lookup.Lookup`: no loop over samples asks for it.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["interval_near", "interval_of"]


@kernel
def interval_of(
    value: np.float32, bits: np.uint32, table: npt.NDArray[np.uint16], thresholds: npt.NDArray[np.float32]
) -> np.int64:
    """Return the interval of a float32 sample, whose bits are given as uint32, among any thresholds."""
    place = np.int64(table[bits >> 15])
    while value >= thresholds[place]:
        place += 1
    return place


@kernel
def interval_near(
    value: np.float32, bits: np.uint32, table: npt.NDArray[np.uint16], thresholds: npt.NDArray[np.float32]
) -> np.int64:
    """Return the same without a branch, where no cell of the table holds more than one threshold."""
    place = np.int64(table[bits >> 15])
    return place + (value >= thresholds[place])


@warm_up
def _warm_up() -> None:
    table, thresholds = np.zeros(1 << 17, np.uint16), np.array([0.3, np.nan], np.float32)
    for find in (interval_of, interval_near):
        find(np.float32(0.1), np.uint32(0), table, thresholds)
