"""Compiled kernels that gather what the noise model is learnt from, trace by trace.

Scales are unknown before all traces are seen, so spreads are counted on grids of powers of ten that cover every
recording, and what concerns one trace (its lowest and highest level, its jump) is kept as one number a trace.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = [
    "CROSSING_LOWEST",
    "CROSSING_PER_DECADE",
    "LEVEL_BINS",
    "LEVEL_LOWEST",
    "LEVEL_PER_DECADE",
    "SPREAD_BINS",
    "SPREAD_LOWEST",
    "SPREAD_PER_DECADE",
    "gather",
]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]

LEVEL_LOWEST, LEVEL_PER_DECADE, LEVEL_BINS = -24, 4, 128
SPREAD_LOWEST, SPREAD_PER_DECADE, SPREAD_BINS = -30, 24, 912
CROSSING_LOWEST, CROSSING_PER_DECADE, CROSSING_LEVELS = -24, 2, 64
WINDOW = 16
FLOOR_WINDOW = 32


@kernel
def _count(level: float, spread: float, histogram: Integers) -> None:
    """Count one spread at one level on the logarithmic grids."""
    if not (level > 0.0):
        return
    row = math.floor((math.log10(level) - LEVEL_LOWEST) * LEVEL_PER_DECADE)
    if row < 0 or row >= LEVEL_BINS:
        return
    column = 0
    if spread > 0.0:
        column = math.floor((math.log10(spread) - SPREAD_LOWEST) * SPREAD_PER_DECADE)
        column = min(max(column, 1), SPREAD_BINS - 1)
    histogram[row, column] += 1


@kernel
def _window_spreads(g: Floats, white: Integers, sample: Integers) -> None:
    """Count, window by window, the spread of second differences and the spread about a straight line."""
    middle = (WINDOW - 1) / 2.0
    span = WINDOW * (WINDOW * WINDOW - 1) / 12.0
    for begin in range(0, len(g) - WINDOW + 1, WINDOW):
        total, slope, bend = 0.0, 0.0, 0.0
        for i in range(WINDOW):
            total += g[begin + i]
            slope += (i - middle) * g[begin + i]
        if not math.isfinite(total):
            continue
        mean, slope = total / WINDOW, slope / span
        rest = 0.0
        for i in range(WINDOW):
            rest += (g[begin + i] - mean - slope * (i - middle)) ** 2
        for i in range(1, WINDOW - 1):
            bend += (g[begin + i - 1] - 2.0 * g[begin + i] + g[begin + i + 1]) ** 2
        _count(abs(mean), math.sqrt(bend / (6.0 * (WINDOW - 2))), white)
        _count(abs(mean), math.sqrt(rest / (WINDOW - 2)), sample)


@kernel
def _block_spread(g: Floats, size: int, histogram: Integers) -> None:
    """Count the long-run spread that second differences of block means show.

    Where the three means lie clear of zero the difference is taken in ln G, which is blind to exponential decay.
    """
    a, b = np.nan, np.nan
    for begin in range(0, len(g) - size + 1, size):
        total = 0.0
        for i in range(begin, begin + size):
            total += g[i]
        c = total / size
        if math.isfinite(a + b + c):
            bend = a - 2.0 * b + c
            low, high = min(a, b, c), max(a, b, c)
            if low > 0.1 * high and high > 0.0:
                bend = b * (math.log(a) - 2.0 * math.log(b) + math.log(c))
            _count(abs(b), abs(bend) * math.sqrt(size / 6.0), histogram)
        a, b = b, c


@kernel
def _floor_of(g: Floats) -> tuple[float, float, int, float]:
    """Return mean, standard deviation, number of samples and converter step of the lowest level that a trace holds."""
    windows = len(g) // FLOOR_WINDOW
    means, spreads, kept = np.empty(windows), np.empty(windows), 0
    for w in range(windows):
        total, square = 0.0, 0.0
        for i in range(w * FLOOR_WINDOW, (w + 1) * FLOOR_WINDOW):
            total += g[i]
        mean = total / FLOOR_WINDOW
        if not math.isfinite(mean):
            continue
        for i in range(w * FLOOR_WINDOW, (w + 1) * FLOOR_WINDOW):
            square += (g[i] - mean) ** 2
        means[kept], spreads[kept] = mean, math.sqrt(square / (FLOOR_WINDOW - 1))
        kept += 1
    if kept == 0:
        return np.nan, np.nan, 0, 0.0
    order = np.argsort(means[:kept])
    lowest = means[order[kept // 10]]
    spread = np.median(spreads[order[: kept // 5 + 1]])
    for _ in range(2):
        near = means[:kept][np.abs(means[:kept] - lowest) <= 3.0 * spread]
        if len(near) > 0:
            lowest = np.median(near)
    return _about(g, lowest, spread)


@kernel
def _about(g: Floats, level: float, spread: float) -> tuple[float, float, int, float]:
    """Return mean, standard deviation, number and step of the samples in windows that lie about a level."""
    count, total, square, taken = 0, 0.0, 0.0, 0
    values = np.empty(256)
    for w in range(len(g) // FLOOR_WINDOW):
        begin = w * FLOOR_WINDOW
        mean = 0.0
        for i in range(begin, begin + FLOOR_WINDOW):
            mean += g[i] / FLOOR_WINDOW
        if not abs(mean - level) <= 3.0 * spread:
            continue
        for i in range(begin, begin + FLOOR_WINDOW):
            away = g[i] - level
            if abs(away) <= 5.0 * spread:
                count, total, square = count + 1, total + away, square + away * away
                if taken < len(values):
                    values[taken] = g[i]
                    taken += 1
    if count < 2:
        return level, spread, 0, 0.0
    shift = total / count
    variance = max(square / count - shift * shift, 0.0)
    return level + shift, math.sqrt(variance), count, _step_of(np.sort(values[:taken]))


@kernel
def _step_of(values: Floats) -> float:
    """Return the converter step that sorted samples show, or 0: few distinct values, evenly spaced."""
    span = values[-1] - values[0]
    distances, found = np.empty(len(values)), 0
    for i in range(1, len(values)):
        away = values[i] - values[i - 1]
        if away > 1e-4 * span:
            distances[found] = away
            found += 1
    if found < 2 or found + 1 > len(values) // 3:
        return 0.0
    return np.quantile(distances[:found], 0.2)


@kernel
def _top_of(g: Floats) -> tuple[float, int]:
    """Return the highest reading of a trace and how many samples repeat it to within one part in 10,000."""
    high = -np.inf
    for value in g:
        if value > high:
            high = value
    repeats = 0
    for value in g:
        if value >= high - 1e-4 * abs(high):
            repeats += 1
    return high, repeats


@kernel
def _crossings(g: Floats, last: Integers) -> None:
    """Find the last sample at which the mean of four neighbours is at or above each level of the grid."""
    last[:] = -1
    next_level = 0
    threshold = 10.0**CROSSING_LOWEST
    for i in range(len(g) - 4, -1, -1):
        mean = 0.25 * (g[i] + g[i + 1] + g[i + 2] + g[i + 3])
        while next_level < CROSSING_LEVELS and mean >= threshold:
            last[next_level] = i + 2
            next_level += 1
            threshold = 10.0 ** (CROSSING_LOWEST + next_level / CROSSING_PER_DECADE)
        if next_level == CROSSING_LEVELS:
            break


@kernel
def _rise_of(g: Floats) -> float:
    """Return the samples from 90 to 10 % of the largest fall of a trace to below 0.3 of what it was, or NaN."""
    windows = len(g) // WINDOW
    if windows < 3:
        return np.nan
    means = np.empty(windows)
    for w in range(windows):
        total = 0.0
        for i in range(w * WINDOW, (w + 1) * WINDOW):
            total += g[i]
        means[w] = total / WINDOW
    best, place = 0.0, -1
    for w in range(windows - 2):
        fall = means[w] - means[w + 2]
        if fall > best and means[w + 2] <= 0.3 * means[w]:
            best, place = fall, w
    if place < 0:
        return np.nan
    begin, end = place * WINDOW, min((place + 8) * WINDOW, len(g))
    high, low = means[place], means[place + 2]
    for w in range(place + 2, min(place + 8, windows)):
        low = min(low, means[w])
    return _fall_time(g[begin:end], high, low)


@kernel
def _fall_time(g: Floats, high: float, low: float) -> float:
    """Return the interpolated time in samples from the last 90 % to the first 10 % of a fall."""
    upper, lower = low + 0.9 * (high - low), low + 0.1 * (high - low)
    first = -1
    for i in range(len(g)):
        if g[i] <= lower:
            first = i
            break
    if first < 1:
        return np.nan
    last = first - 1
    while last >= 0 and not g[last] >= upper:
        last -= 1
    if last < 0:
        return np.nan
    end = first - (lower - g[first]) / max(g[first - 1] - g[first], 1e-300)
    begin = last + (g[last] - upper) / max(g[last] - g[last + 1], 1e-300)
    return end - begin


@kernel
def gather(
    conductance: npt.NDArray[np.float32],
    trusted: Truths,
    starts: Integers,
    stops: Integers,
    backward: bool,
    grids: Integers,
    rows: Floats,
    last: Integers,
) -> None:
    """Gather the statistics of a block of traces.

    Parameters
    ----------
    conductance : (samples,) float32
    trusted : (samples,) bool, or (0,) where every sample is
    starts, stops : (traces,) int64
        Ranges in ``conductance``.
    backward : bool
        True where time runs from open to closed.
    grids : (4, LEVEL_BINS, SPREAD_BINS) int64
        Added to: second differences, spread about a line, block means over 4 and 8 samples.
    rows : (traces, 7) float64
        Filled: floor mean, floor sigma, floor samples, converter step, highest reading, its repeats, fall time.
    last : (traces, CROSSING_LEVELS) int64
        Filled: last sample at each crossing level, counted along the trace from closed to open; -1 where none.
    """
    for t in range(len(starts)):
        g = conductance[starts[t] : stops[t]].astype(np.float64)
        if len(trusted) > 0:
            for i in range(len(g)):
                if not trusted[starts[t] + i]:
                    g[i] = np.nan
        if backward:
            g = g[::-1].copy()
        _window_spreads(g, grids[0], grids[1])
        _block_spread(g, 4, grids[2])
        _block_spread(g, 8, grids[3])
        mean, sigma, count, step = _floor_of(g)
        high, repeats = _top_of(g)
        rows[t, 0], rows[t, 1], rows[t, 2], rows[t, 3] = mean, sigma, count, step
        rows[t, 4], rows[t, 5], rows[t, 6] = high, repeats, _rise_of(g)
        _crossings(g, last[t])


@warm_up
def _warm_up() -> None:
    grids = np.zeros((4, LEVEL_BINS, SPREAD_BINS), np.int64)
    g = np.linspace(1, 0, 128).astype(np.float32)
    bounds = np.array([0], np.int64), np.array([128], np.int64)
    for trusted in (np.ones(128, np.bool_), np.empty(0, np.bool_)):
        gather(g, trusted, *bounds, False, grids, np.empty((1, 7)), np.empty((1, CROSSING_LEVELS), np.int64))
