"""From the bits of a sample to its bin: the table that the counting kernels use."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import EXCLUDED, Grid

__all__ = ["Lookup", "float32_not_below", "lookup_of"]

_CELLS = 1 << 17
_INFINITE = 0xFF
"""Exponent of infinities and NaN."""
_SMALLEST = np.float32(1.401298464324817e-45)


@dataclass(frozen=True)
class Lookup:
    """Intervals of the float32 line, and what each of them is.

    Attributes
    ----------
    table : (2**17,) uint16
        First candidate interval of a sample, from its top 17 bits.
    thresholds : (intervals,) float32
        Upper, excluded end of each interval; NaN for the last of a run.
    most_compares : int
        How many thresholds fall into one cell of the table at most.
    column : (intervals,) int64
        Bin of each interval; ``bins + k`` for the k-th name of ``EXCLUDED``.
    """

    table: npt.NDArray[np.uint16]
    thresholds: npt.NDArray[np.float32]
    most_compares: int
    column: npt.NDArray[np.int64]


def float32_not_below(edges: npt.NDArray[np.float64]) -> npt.NDArray[np.float32]:
    """Return the smallest float32 not below each edge: ``x >= edge`` is then the same for every float32 ``x``."""
    with np.errstate(over="ignore"):
        rounded = edges.astype(np.float32)
        return np.where(rounded.astype(np.float64) < edges, np.nextafter(rounded, np.float32(np.inf)), rounded)


def lookup_of(grid: Grid, saturation_g0: float = np.inf) -> Lookup:
    """Return the table for a grid.

    On a logarithmic axis samples at or below zero are "non_positive"; on a linear axis they are bins or "under".
    Samples at or above ``saturation_g0`` are "saturated", wherever that lies.
    """
    bins = grid.bins
    place = {name: bins + k for k, name in enumerate(EXCLUDED)}
    logarithmic = grid.axis == "logarithmic"
    lowest = place["non_positive"] if logarithmic else place["under"]
    edges = float32_not_below(grid.edges_g0)
    cuts = np.concatenate([[_SMALLEST] if logarithmic else [], edges]).astype(np.float32)
    column = np.concatenate(
        [[lowest] if logarithmic else [], [place["under"]], np.arange(bins), [place["over"]]]
    ).astype(np.int64)
    top = place["over"]
    if np.isfinite(saturation_g0):
        limit = float32_not_below(np.array([saturation_g0]))[0]
        at = int(np.searchsorted(cuts, limit, side="left"))
        cuts = np.insert(cuts, at, limit)
        column = np.insert(column, at + 1, place["saturated"])
        column[at + 1 :] = top = place["saturated"]
    regular = len(column)
    # infinities and NaN share cells of the table: a threshold that only the infinity passes keeps them apart
    thresholds = np.concatenate([cuts, [np.nan, 0.0, np.nan, -np.inf, np.nan]]).astype(np.float32)
    column = np.concatenate([column, [place["nan"], top, place["nan"], lowest]]).astype(np.int64)
    table, most = _table(cuts, regular)
    return Lookup(table, thresholds, most, column)


def _table(cuts: npt.NDArray[np.float32], regular: int) -> tuple[npt.NDArray[np.uint16], int]:
    """Return, for every cell, the number of cuts not above its smallest value, and the most cuts within a cell.

    Positive cells ascend with their number, negative ones descend.
    """
    half = _CELLS // 2
    bits = cuts.view(np.uint32)
    cell = np.where(cuts == 0, 0, bits >> 15).astype(np.int64)
    at_edge = (bits & 0x7FFF == np.where(cuts < 0, 0x7FFF, 0)) | (cuts == 0)
    steps, within = np.zeros(_CELLS, np.int32), np.zeros(_CELLS, np.int32)
    np.add.at(steps, cell, 1)
    np.add.at(within, cell[~at_edge], 1)
    table = np.empty(_CELLS, np.uint16)
    fallen = np.cumsum(steps[half:][::-1], dtype=np.int32)[::-1]
    table[half:] = fallen - within[half:]
    table[:half] = fallen[0] + np.cumsum(steps[:half], dtype=np.int32) - within[:half]
    table[_INFINITE << 8 : half] = regular
    table[half + (_INFINITE << 8) :] = regular + 2
    within[half] += np.count_nonzero(cuts == 0)  # the cell of minus zero, which is not below a cut at zero
    return table, max(1, int(within.max()))
