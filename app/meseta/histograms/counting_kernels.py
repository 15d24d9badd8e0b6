"""Compiled kernels of the count matrix: samples into bins, trace by trace, and sums over its rows."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.histograms.lookup_kernels import interval_near, interval_of
from meseta.kernels import kernel, warm_up

__all__ = ["count_rows", "fold_rows", "merge_rows", "merged_bin", "sum_rows"]


@kernel
def count_rows(
    values: npt.NDArray[np.float32],
    quality: npt.NDArray[np.uint8],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    table: npt.NDArray[np.uint16],
    thresholds: npt.NDArray[np.float32],
    most_compares: int,
    column: npt.NDArray[np.int64],
    counts: npt.NDArray[np.unsignedinteger],
    special: npt.NDArray[np.int64],
    saturated_column: int,
    untrusted_column: int,
) -> None:
    """Count samples ``begin[r]`` to ``end[r]`` of every row into ``counts[r]`` and, outside the bins, ``special[r]``.

    ``column`` says where each interval between thresholds belongs: bins from 0, specials from ``counts.shape[1]`` on.
    Samples with bit 1 of ``quality`` are saturated, those with any other bit untrusted; an empty one flags none.
    """
    bits = values.view(np.uint32)
    flagged = len(quality) > 0
    # four tallies, so that runs of equal samples do not wait for each other's store
    tally = np.zeros((4, len(thresholds)), np.uint32)
    for row in range(len(begin)):
        at, last = begin[row], end[row]
        tally[:] = 0
        if most_compares <= 1 and not flagged:
            while at + 3 < last:
                for lane in range(4):
                    tally[lane, interval_near(values[at + lane], bits[at + lane], table, thresholds)] += 1
                at += 4
        while at < last:
            if flagged and quality[at] != 0:
                special[row, saturated_column if quality[at] & 1 else untrusted_column] += 1
            else:
                tally[at & 3, interval_of(values[at], bits[at], table, thresholds)] += 1
            at += 1
        fold_rows(tally, column, counts[row], special[row])


@kernel
def fold_rows(
    tally: npt.NDArray[np.uint32],
    column: npt.NDArray[np.int64],
    counts: npt.NDArray[np.unsignedinteger],
    special: npt.NDArray[np.int64],
) -> None:
    """Add the tallies of the intervals to the bins and specials that they belong to."""
    bins = len(counts)
    for place in range(tally.shape[1]):
        number = tally[0, place] + tally[1, place] + tally[2, place] + tally[3, place]
        if number:
            if column[place] < bins:
                counts[column[place]] += counts.dtype.type(number)
            else:
                special[column[place] - bins] += number


@kernel
def sum_rows(
    counts: npt.NDArray[np.unsignedinteger],
    rows: npt.NDArray[np.int64],
    merge: int,
    total: npt.NDArray[np.int64],
    reached: npt.NDArray[np.int64],
) -> None:
    """Add the chosen rows to ``total``; ``reached`` counts the rows that have any in each ``merge`` bins."""
    for row in rows:
        line = counts[row]
        for place in range(len(total)):
            total[place] += line[place]
        if merge == 4:
            for coarse in range(len(reached)):
                at = 4 * coarse
                reached[coarse] += (line[at] | line[at + 1] | line[at + 2] | line[at + 3]) != 0
        else:
            for coarse in range(len(reached)):
                some = line[coarse * merge]
                for place in range(coarse * merge + 1, coarse * merge + merge):
                    some |= line[place]
                reached[coarse] += some != 0


@kernel
def merged_bin(line: npt.NDArray[np.unsignedinteger], coarse: int, merge: int) -> np.int64:
    """Return the sum of the ``merge`` fine bins of one bin, fewer where the row ends."""
    total = np.int64(0)
    for at in range(coarse * merge, min(coarse * merge + merge, len(line))):
        total += line[at]
    return total


@kernel
def merge_rows(
    counts: npt.NDArray[np.unsignedinteger],
    rows: npt.NDArray[np.int64],
    merge: int,
    merged: npt.NDArray[np.floating],
) -> None:
    """Write the chosen rows, ``merge`` fine bins summed to one, as floating-point numbers (exact below 2**24)."""
    bins = merged.shape[1]
    for place in range(len(rows)):
        line = counts[rows[place]]
        for coarse in range(bins):
            merged[place, coarse] = merged_bin(line, coarse, merge)


@warm_up
def _warm_up() -> None:
    values, whole = np.array([0.1, 1.0, 2.0, 0.5, 0.2], np.float32), np.array([5], np.int64)
    table, thresholds = np.zeros(1 << 17, np.uint16), np.array([0.3, np.nan], np.float32)
    column, special, first = np.array([0, 1], np.int64), np.zeros((1, 4), np.int64), np.zeros(1, np.int64)
    for kind in (np.uint16, np.uint32):
        count_rows(
            values, np.zeros(5, np.uint8), first, whole, table, thresholds, 1, column, np.zeros((1, 1), kind), special,
            0, 1,
        )  # fmt: skip
        matrix = np.ones((2, 8), kind)
        for some in (matrix, matrix[:, :4]):  # a part of the axis is a view with gaps: another kernel
            sum_rows(some, first, 4, np.zeros(4, np.int64), np.zeros(1, np.int64))
            for number in (np.float32, np.float64):
                merge_rows(some, first, 4, np.zeros((1, 1), number))
