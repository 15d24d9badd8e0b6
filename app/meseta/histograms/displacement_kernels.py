"""Compiled kernels of the 2D histogram: samples into bins of displacement and conductance."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.histograms.lookup_kernels import interval_near, interval_of
from meseta.histograms.region_kernels import drive_at
from meseta.kernels import kernel, warm_up

__all__ = ["count_explicit_grid", "count_stepped_grid", "first_at_or_past", "place_of"]

GROUP = 16
"""Drive columns worked together: their tallies fit the second cache."""


@kernel
def first_at_or_past(bound: float, start: float, step: float, zero: float, last: int) -> int:
    """Return the first sample, at most ``last``, whose drive is at or past a bound in the direction of its steps.

    Rising drives are past at ``drive - zero >= bound``, falling ones at ``drive - zero < bound``.  The quotient only
    proposes the sample; the drive, computed as everywhere, decides.
    """
    guess = (bound + zero - start) / step
    at = 0 if not guess > 0.0 else (last if guess > last else int(guess))
    if step > 0.0:
        while at > 0 and (start + step * (at - 1)) - zero >= bound:
            at -= 1
        while at < last and (start + step * at) - zero < bound:
            at += 1
    else:
        while at > 0 and (start + step * (at - 1)) - zero < bound:
            at -= 1
        while at < last and (start + step * at) - zero >= bound:
            at += 1
    return at


@kernel
def place_of(shifted: float, edges: npt.NDArray[np.float64]) -> int:
    """Return the half-open interval of nearly equally spaced edges that holds a value inside them."""
    columns = len(edges) - 1
    place = int(min(max((shifted - edges[0]) / (edges[columns] - edges[0]) * columns, 0.0), columns - 1.0))
    while place > 0 and shifted < edges[place]:
        place -= 1
    while place < columns - 1 and shifted >= edges[place + 1]:
        place += 1
    return place


@kernel
def count_stepped_grid(
    values: npt.NDArray[np.float32],
    rows: npt.NDArray[np.int64],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    origin: npt.NDArray[np.int64],
    start: npt.NDArray[np.float64],
    step: npt.NDArray[np.float64],
    zero: npt.NDArray[np.float64],
    drive_edges: npt.NDArray[np.float64],
    table: npt.NDArray[np.uint16],
    thresholds: npt.NDArray[np.float32],
    most_compares: int,
    tally: npt.NDArray[np.uint32],
) -> None:
    """Count trusted samples of the chosen rows into (2, drive column, interval), for a drive of equal steps.

    The drive of sample ``at`` is ``start + step * (at - origin)``; its column is the half-open interval of
    ``drive_edges`` that holds ``drive - zero``.  A few columns are worked at a time over all rows, so that their
    tallies stay in the cache.
    """
    bits = values.view(np.uint32)
    columns = len(drive_edges) - 1
    reached = np.zeros(len(rows), np.int64)
    for chosen in range(len(rows)):
        row = rows[chosen]
        bound = drive_edges[0] if step[row] > 0.0 else drive_edges[columns]
        after = first_at_or_past(bound, start[row], step[row], zero[row], end[row] - origin[row])
        reached[chosen] = max(begin[row] - origin[row], after)
    for group in range(0, columns, GROUP):
        for chosen in range(len(rows)):
            row = rows[chosen]
            rising, last, first = step[row] > 0.0, end[row] - origin[row], reached[chosen]
            for turn in range(group, min(group + GROUP, columns)):
                if first >= last:
                    break
                # rising drives pass the edges upwards, falling ones downwards
                column = turn if rising else columns - 1 - turn
                bound = drive_edges[column + 1 if rising else column]
                stop = max(first, first_at_or_past(bound, start[row], step[row], zero[row], last))
                even, odd = tally[0, column], tally[1, column]
                at, until = origin[row] + first, origin[row] + stop
                if most_compares <= 1:
                    while at + 1 < until:
                        even[interval_near(values[at], bits[at], table, thresholds)] += 1
                        odd[interval_near(values[at + 1], bits[at + 1], table, thresholds)] += 1
                        at += 2
                while at < until:
                    even[interval_of(values[at], bits[at], table, thresholds)] += 1
                    at += 1
                first = stop
            reached[chosen] = first


@kernel
def count_explicit_grid(
    values: npt.NDArray[np.float32],
    quality: npt.NDArray[np.uint8],
    rows: npt.NDArray[np.int64],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    origin: npt.NDArray[np.int64],
    start: npt.NDArray[np.float64],
    step: npt.NDArray[np.float64],
    relative: npt.NDArray[np.float32],
    zero: npt.NDArray[np.float64],
    drive_edges: npt.NDArray[np.float64],
    table: npt.NDArray[np.uint16],
    thresholds: npt.NDArray[np.float32],
    tally: npt.NDArray[np.uint32],
) -> None:
    """Count like :func:`count_stepped_grid`, sample by sample: explicit drive, or samples with quality flags."""
    bits = values.view(np.uint32)
    columns = len(drive_edges) - 1
    flagged = len(quality) > 0
    for row in rows:
        for at in range(begin[row], end[row]):
            if flagged and quality[at] != 0:
                continue
            shifted = drive_at(relative, at, origin[row], start[row], step[row]) - zero[row]
            if shifted >= drive_edges[0] and shifted < drive_edges[columns]:
                place = interval_of(values[at], bits[at], table, thresholds)
                tally[at & 1, place_of(shifted, drive_edges), place] += 1


@warm_up
def _warm_up() -> None:
    values, first, whole = np.ones(5, np.float32), np.zeros(1, np.int64), np.array([5], np.int64)
    table, thresholds = np.zeros(1 << 17, np.uint16), np.array([0.3, np.nan], np.float32)
    unit, edges, tally = np.ones(1), np.array([0.0, 1.0]), np.zeros((2, 1, 2), np.uint32)
    count_stepped_grid(values, first, first, whole, first, unit, unit, unit, edges, table, thresholds, 1, tally)
    count_explicit_grid(
        values, np.zeros(5, np.uint8), first, first, whole, first, unit, unit, values, unit, edges, table, thresholds,
        tally,
    )  # fmt: skip
