"""Compiled kernels of the histograms: counting samples in bins without a logarithm or a division a sample.

A bin is found from the top 17 bits of the float32 sample (sign, exponent, 8 bits of mantissa): a table gives the
first candidate, comparisons with the exact edges do the rest.  A float32 sample is never rounded: the edges, given as
float64, are replaced by the smallest float32 that is not below them, which changes no comparison.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = [
    "correlate_products",
    "count_explicit_grid",
    "count_flagged_rows",
    "count_rows",
    "count_stepped_grid",
    "find_window",
    "first_at_or_past",
    "fold_rows",
    "largest_product",
    "merge_rows",
    "narrow_rows",
    "permute_within",
    "place_of",
    "settle_region",
    "sum_rows",
]

GROUP = 16
"""Drive columns worked together: their tallies fit the second cache."""


@kernel
def count_rows(
    values: npt.NDArray[np.float32],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    table: npt.NDArray[np.uint16],
    thresholds: npt.NDArray[np.float32],
    most_compares: int,
    column: npt.NDArray[np.int64],
    counts: npt.NDArray[np.unsignedinteger],
    special: npt.NDArray[np.int64],
) -> None:
    """Count samples ``begin[r]`` to ``end[r]`` of every row into ``counts[r]`` and, outside the bins, ``special[r]``.

    ``column`` says where each interval between thresholds belongs: bins from 0, specials from ``counts.shape[1]`` on.
    """
    bits = values.view(np.uint32)
    places = len(thresholds)
    # four tallies, so that runs of equal samples do not wait for each other's store
    tally = np.zeros((4, places), np.uint32)
    for row in range(len(begin)):
        first, last = begin[row], end[row]
        tally[:] = 0
        if most_compares <= 1:
            whole = first + (last - first) // 4 * 4
            for at in range(first, whole, 4):
                for lane in range(4):
                    place = np.int64(table[bits[at + lane] >> 15])
                    place += values[at + lane] >= thresholds[place]
                    tally[lane, place] += 1
            for at in range(whole, last):
                place = np.int64(table[bits[at] >> 15])
                place += values[at] >= thresholds[place]
                tally[0, place] += 1
        else:
            for at in range(first, last):
                place = np.int64(table[bits[at] >> 15])
                while values[at] >= thresholds[place]:
                    place += 1
                tally[at & 3, place] += 1
        fold_rows(tally, column, counts[row], special[row])


@kernel
def count_flagged_rows(
    values: npt.NDArray[np.float32],
    quality: npt.NDArray[np.uint8],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    table: npt.NDArray[np.uint16],
    thresholds: npt.NDArray[np.float32],
    column: npt.NDArray[np.int64],
    counts: npt.NDArray[np.unsignedinteger],
    special: npt.NDArray[np.int64],
    saturated_column: int,
    untrusted_column: int,
) -> None:
    """Count like :func:`count_rows`; samples with quality bit 1 are saturated, with any other bit untrusted."""
    bits = values.view(np.uint32)
    tally = np.zeros((4, len(thresholds)), np.uint32)
    for row in range(len(begin)):
        tally[:] = 0
        for at in range(begin[row], end[row]):
            if quality[at] != 0:
                special[row, saturated_column if quality[at] & 1 else untrusted_column] += 1
                continue
            place = np.int64(table[bits[at] >> 15])
            while values[at] >= thresholds[place]:
                place += 1
            tally[at & 3, place] += 1
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
            total = np.int64(0)
            for at in range(coarse * merge, min(coarse * merge + merge, len(line))):
                total += line[at]
            merged[place, coarse] = total


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


@kernel
def settle_region(
    values: npt.NDArray[np.float32],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    below: npt.NDArray[np.float32],
    stay: npt.NDArray[np.int64],
    settled: npt.NDArray[np.int64],
) -> None:
    """Find where each row has first stayed below ``below[row]`` for ``stay[row]`` samples on end; else its end."""
    for row in range(len(begin)):
        run = 0
        settled[row] = end[row]
        for at in range(begin[row], end[row]):
            run = run + 1 if values[at] < below[row] else 0
            if run > stay[row]:
                settled[row] = at
                break


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
def find_window(
    origin: npt.NDArray[np.int64],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    start: npt.NDArray[np.float64],
    step: npt.NDArray[np.float64],
    relative: npt.NDArray[np.float32],
    zero: npt.NDArray[np.float64],
    low: float,
    high: float,
    first: npt.NDArray[np.int64],
    last: npt.NDArray[np.int64],
) -> None:
    """Find the samples ``first`` to ``last`` of each row whose drive lies from ``low`` to ``high``, from its zero.

    ``first`` is the first sample in the window, ``last`` the first after it that is beyond the end which the drive
    goes to.  Empty ranges end at the row's end.
    """
    explicit = len(relative) > 0
    for row in range(len(begin)):
        first[row] = last[row] = end[row]
        if end[row] <= begin[row] or np.isnan(zero[row]):
            continue
        if explicit:
            rising = relative[end[row] - 1] >= relative[begin[row]]
        else:
            rising = step[row] >= 0.0
        for at in range(begin[row], end[row]):
            drive = start[row] + (np.float64(relative[at]) if explicit else step[row] * (at - origin[row]))
            shifted = drive - zero[row]
            if first[row] == end[row]:
                if shifted >= low and shifted < high:
                    first[row] = at
            elif (rising and shifted >= high) or (not rising and shifted < low):
                last[row] = at
                break


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
                        place = np.int64(table[bits[at] >> 15])
                        other = np.int64(table[bits[at + 1] >> 15])
                        place += values[at] >= thresholds[place]
                        other += values[at + 1] >= thresholds[other]
                        even[place] += 1
                        odd[other] += 1
                        at += 2
                while at < until:
                    place = np.int64(table[bits[at] >> 15])
                    while values[at] >= thresholds[place]:
                        place += 1
                    even[place] += 1
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
    explicit, flagged = len(relative) > 0, len(quality) > 0
    for row in rows:
        for at in range(begin[row], end[row]):
            if flagged and quality[at] != 0:
                continue
            drive = start[row] + (np.float64(relative[at]) if explicit else step[row] * (at - origin[row]))
            shifted = drive - zero[row]
            if shifted >= drive_edges[0] and shifted < drive_edges[columns]:
                place = np.int64(table[bits[at] >> 15])
                while values[at] >= thresholds[place]:
                    place += 1
                tally[at & 1, place_of(shifted, drive_edges), place] += 1


@warm_up
def _warm_up() -> None:
    values = np.array([0.1, 1.0, 2.0, 0.5, 0.2], np.float32)
    begin, end = np.array([0], np.int64), np.array([5], np.int64)
    table, thresholds = np.zeros(1 << 17, np.uint16), np.array([0.3, np.nan], np.float32)
    column, special = np.array([0, 1], np.int64), np.zeros((1, 4), np.int64)
    for kind in (np.uint16, np.uint32):
        counts = np.zeros((1, 1), kind)
        count_rows(values, begin, end, table, thresholds, 1, column, counts, special)
        count_flagged_rows(values, np.zeros(5, np.uint8), begin, end, table, thresholds, column, counts, special, 0, 1)
    square = np.ones((2, 2), np.float32)
    for wide in (np.ones((2, 2)), np.ones((2, 2), np.int64), np.ones((2, 2), np.uint16)):
        narrow_rows(wide, square, np.zeros(2), np.zeros(2))
    correlate_products(np.ones((2, 2)), np.ones(2), 2, np.ones((2, 2)))
    permute_within(square, 2, np.ones(2, np.uint64), square.copy())
    largest_product(square)
    settle_region(values, begin, end, values[:1], end, np.zeros(1, np.int64))
    unit = np.ones(1)
    for drive in (np.zeros(0, np.float32), values):
        find_window(begin, begin, end, unit, unit, drive, unit, 0.0, 1.0, begin.copy(), begin.copy())
    for kind in (np.uint16, np.uint32):
        matrix = np.ones((2, 8), kind)
        for some in (matrix, matrix[:, :4]):  # a part of the axis is a view with gaps: another kernel
            sum_rows(some, begin, 4, np.zeros(4, np.int64), np.zeros(1, np.int64))
            for number in (np.float32, np.float64):
                merge_rows(some, begin, 4, np.zeros((1, 1), number))
    edges = np.array([0.0, 1.0])
    tally = np.zeros((2, 1, 2), np.uint32)
    count_stepped_grid(values, begin, begin, end, begin, unit, unit, unit, edges, table, thresholds, 1, tally)
    for quality in (np.zeros(0, np.uint8), np.zeros(5, np.uint8)):
        count_explicit_grid(
            values, quality, begin, begin, end, begin, unit, unit, values, unit, edges, table, thresholds, tally
        )
