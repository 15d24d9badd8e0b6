"""Compiled kernels of the intake room."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = [
    "drive_piece",
    "drive_steps",
    "find_crossings",
    "find_turns",
    "power_of_ten",
    "rising_rows",
]

ALIGNED, NEVER_REACHES, ENDS_ABOVE, NO_SAMPLES = 0, 1, 2, 3


@kernel
def _stays_below(values: npt.NDArray[np.float32], at: int, end: int, step: int, level: float, stay: int) -> bool:
    """Return whether the next ``stay`` finite samples after ``at`` (in direction ``step``) all lie below."""
    seen = 0
    index = at + step
    while index != end and seen < stay:
        value = values[index]
        if value >= level:
            return False
        if not math.isnan(value):
            seen += 1
        index += step
    return seen == stay


@kernel
def _crossing(
    values: npt.NDArray[np.float32], begin: int, end: int, step: int, level: float, first: bool, stay: int
) -> tuple[int, int]:
    """Return (sample, status) of the crossing in one trace, walked from ``begin`` to ``end`` (exclusive)."""
    if begin == end:
        return -1, NO_SAMPLES
    last = -1
    index = begin
    while index != end:
        if values[index] >= level:
            last = index
            if first and _stays_below(values, index, end, step, level, stay):
                return index, ALIGNED
        index += step
    if last < 0:
        return -1, NEVER_REACHES
    if not first and _stays_below(values, last, end, step, level, stay):
        return last, ALIGNED
    return -1, ENDS_ABOVE


@kernel
def find_crossings(
    values: npt.NDArray[np.float32],
    offsets: npt.NDArray[np.int64],
    start: npt.NDArray[np.int64],
    stop: npt.NDArray[np.int64],
    backwards: bool,
    level: float,
    first: bool,
    stay: int,
    sample: npt.NDArray[np.int64],
    following: npt.NDArray[np.int64],
    fraction: npt.NDArray[np.float64],
    status: npt.NDArray[np.uint8],
) -> None:
    """Find in every trace the sample before the fall through ``level`` and the way to the next, in log G.

    ``backwards`` walks each trace from its end (closing traces).  ``following`` is the next finite sample in walking
    direction, ``fraction`` the share of the way there at which log G crosses the level; 0 where it is not above zero.
    """
    for trace in range(len(start)):
        base = offsets[trace]
        begin, end, step = base + start[trace], base + stop[trace], 1
        if backwards and end > begin:
            begin, end, step = end - 1, begin - 1, -1
        found, state = _crossing(values, begin, end, step, level, first, stay)
        status[trace] = state
        sample[trace] = following[trace] = found - base if state == ALIGNED else -1
        fraction[trace] = 0.0
        if state == ALIGNED:
            there = found + step
            while math.isnan(values[there]):  # _stays_below has seen a finite one
                there += step
            following[trace] = there - base
            here, after = np.float64(values[found]), np.float64(values[there])
            if after > 0.0:
                fraction[trace] = (math.log(here) - math.log(level)) / (math.log(here) - math.log(after))


@kernel
def find_jumps(
    values: npt.NDArray[np.float32],
    offsets: npt.NDArray[np.int64],
    start: npt.NDArray[np.int64],
    stop: npt.NDArray[np.int64],
    backwards: bool,
    level: float,
    deepest: float,
    stay: int,
    sample: npt.NDArray[np.int64],
    following: npt.NDArray[np.int64],
    fraction: npt.NDArray[np.float64],
    status: npt.NDArray[np.uint8],
) -> None:
    """Find in every trace the sample before the largest fall of ln G, between means over ``stay`` samples.

    Falls count whose mean lies at or above half the level before and below it after, all samples there below the
    level; values below ``deepest`` count as it.  NaN samples are passed over.  The last of equal falls wins; the zero
    lies half way to the next finite sample.
    """
    middle = math.log(0.5 * level) * stay
    for trace in range(len(start)):
        base = offsets[trace]
        length = stop[trace] - start[trace]
        place = np.empty(length, np.int64)
        logs = np.empty(length)
        count, highest = 0, -np.inf
        for step in range(length):
            index = base + (stop[trace] - 1 - step if backwards else start[trace] + step)
            value = np.float64(values[index])
            if math.isnan(value):
                continue
            place[count] = index
            logs[count] = math.log(max(value, deepest))
            highest = max(highest, value)
            count += 1
        best, found = 0.0, -1
        for at in range(stay - 1, count - stay):
            before, after, largest = 0.0, 0.0, -np.inf
            for near in range(stay):
                before += logs[at - near]
                after += logs[at + 1 + near]
                largest = max(largest, np.float64(values[place[at + 1 + near]]))
            if before >= middle and after < middle and largest < level and before - after >= best:
                best, found = before - after, at
        sample[trace], following[trace], fraction[trace] = -1, -1, 0.0
        if found >= 0:
            status[trace], sample[trace], fraction[trace] = ALIGNED, place[found] - base, 0.5
            following[trace] = place[found + 1] - base
        else:
            status[trace] = NO_SAMPLES if length == 0 else (ENDS_ABOVE if highest >= level else NEVER_REACHES)


@kernel
def find_turns(
    values: npt.NDArray[np.float64], base: int, threshold: float, state: npt.NDArray[np.float64]
) -> list[int]:
    """Return the turning points of a drive signal: extremes between swings of at least ``threshold``.

    Called block after block; ``state`` (direction, low, its sample, high, its sample, samples seen) carries over.  NaN
    samples are passed over.  The extreme of the last swing is left in ``state``.
    """
    turns = [0]
    turns.pop()
    for index in range(len(values)):
        value = values[index]
        if math.isnan(value):
            continue
        at = float(base + index)
        if state[5] == 0.0:
            state[1], state[2], state[3], state[4] = value, at, value, at
        state[5] += 1.0
        if value > state[3]:
            state[3], state[4] = value, at
        if value < state[1]:
            state[1], state[2] = value, at
        if state[0] <= 0.0 and value - state[1] >= threshold:
            turns.append(int(state[2]))
            state[0], state[3], state[4] = 1.0, value, at
        elif state[0] >= 0.0 and state[3] - value >= threshold:
            turns.append(int(state[4]))
            state[0], state[1], state[2] = -1.0, value, at
    return turns


@kernel
def power_of_ten(exponents: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    """Return 10**x; in a kernel so that every machine gives the same bits."""
    result = np.empty_like(exponents)
    for index in range(len(exponents)):
        result[index] = math.pow(10.0, exponents[index])
    return result


@kernel
def drive_steps(
    values: npt.NDArray[np.float64],
    offsets: npt.NDArray[np.int64],
    tolerance: float,
    start: npt.NDArray[np.float64],
    step: npt.NDArray[np.float64],
    relative: npt.NDArray[np.float32],
) -> bool:
    """Fill start, mean step and relative drive of every trace; return whether all steps are equal.

    Steps are equal where no value is off the straight line from first to last by more than ``tolerance`` times the
    largest value; NaN is never on a line.
    """
    largest = 0.0
    for value in values:
        if abs(value) > largest:
            largest = abs(value)
    bound, straight = tolerance * largest, True
    for trace in range(len(offsets) - 1):
        begin, end = offsets[trace], offsets[trace + 1]
        if end == begin:
            start[trace], step[trace] = np.nan, 0.0
            continue
        first = values[begin]
        slope = (values[end - 1] - first) / (end - begin - 1) if end - begin > 1 else 0.0
        start[trace], step[trace] = first, slope
        for index in range(begin, end):
            away = values[index] - first
            relative[index] = away
            if not abs(away - slope * (index - begin)) <= bound:
                straight = False
    return straight


@kernel
def drive_piece(
    values: npt.NDArray[np.float64],
    base: int,
    start: float,
    step: float,
    tolerance: float,
    relative: npt.NDArray[np.float32],
) -> bool:
    """Fill the relative drive of a piece of one trace, from its sample ``base`` on; return whether steps are equal.

    ``start`` and ``step`` are those of the whole trace; equal is meant as in :func:`drive_steps`.
    """
    largest = 0.0
    for value in values:
        if abs(value) > largest:
            largest = abs(value)
    bound, straight = tolerance * largest, True
    for index in range(len(values)):
        away = values[index] - start
        relative[index] = away
        if not abs(away - step * (base + index)) <= bound:
            straight = False
    return straight


@kernel
def _median_size(values: npt.NDArray[np.float32], scratch: npt.NDArray[np.float32]) -> float:
    """Return the lower median of the sizes of the finite values; NaN where there are none."""
    count = 0
    for value in values:
        if math.isfinite(value):
            size, place = abs(value), count
            while place > 0 and scratch[place - 1] > size:
                scratch[place] = scratch[place - 1]
                place -= 1
            scratch[place] = size
            count += 1
    return float(scratch[(count - 1) // 2]) if count else np.nan


@kernel
def rising_rows(
    values: npt.NDArray[np.float32],
    offsets: npt.NDArray[np.int64],
    rows: npt.NDArray[np.int64],
    ends: int,
    factor: float,
    rising: npt.NDArray[np.bool_],
) -> None:
    """Fill for each row whether the median size of its last samples is more than ``factor`` times that of its first."""
    scratch = np.empty(ends, np.float32)
    for place in range(len(rows)):
        begin, end = offsets[rows[place]], offsets[rows[place] + 1]
        reach = min(ends, end - begin)
        early = _median_size(values[begin : begin + reach], scratch)
        late = _median_size(values[end - reach : end], scratch)
        rising[place] = late > factor * early


@warm_up
def _compile() -> None:
    values = np.array([2.0, 1.0, 0.1, 0.1, 0.1], np.float32)
    bounds = np.array([0, 5], np.int64)
    sample, fraction, status = np.empty(1, np.int64), np.empty(1), np.empty(1, np.uint8)
    following = np.empty(1, np.int64)
    for _ in ("writable", "read-only"):
        find_crossings(
            values, bounds, bounds[:1], bounds[1:], False, 0.5, False, 3, sample, following, fraction, status
        )
        find_jumps(values, bounds, bounds[:1], bounds[1:], False, 0.5, 1e-4, 3, sample, following, fraction, status)
        rising_rows(values, bounds, bounds[:1], 2, 10.0, np.empty(1, np.bool_))
        drive = values.astype(np.float64)
        drive.flags.writeable = values.flags.writeable
        drive_steps(drive, bounds, 1e-7, np.empty(1), np.empty(1), np.empty(5, np.float32))
        drive_piece(drive, 0, 0.0, 1.0, 1e-7, np.empty(5, np.float32))
        values = values.copy()
        values.flags.writeable = False
    find_turns(np.array([0.0, 1.0, 0.0]), 0, 0.5, np.zeros(6))
    power_of_ten(np.array([0.0, -1.0]))
