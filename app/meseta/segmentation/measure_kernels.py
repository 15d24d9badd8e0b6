"""Compiled kernels that measure every trace: highest and lowest reading, crossings, tunnelling slope, floor."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["COLUMNS", "measure"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

BLOCK = 16
COLUMNS = 9
CROSSING_RUN = 3
"""Samples in a row at or above a level that are more than a spike."""
FEWEST_FOR_SLOPE = 8


@kernel
def _extremes(g: Floats, zero: int) -> tuple[float, float]:
    """Return the 99th percentile up to the rupture (of all samples without one) and the first percentile of all."""
    finite = g[np.isfinite(g)]
    if len(finite) == 0:
        return np.nan, np.nan
    before = g[: zero + 1] if zero >= 0 else g
    before = before[np.isfinite(before)]
    if len(before) == 0:
        before = finite
    return np.quantile(before, 0.99), np.quantile(finite, 0.01)


@kernel
def _last_crossing(g: Floats, drive: Floats, level: float) -> float:
    """Return the interpolated drive at which g is at or above the level for the last time; NaN where it never falls.

    A run of fewer than ``CROSSING_RUN`` samples is a spike and does not count; missing samples do not end a run.
    """
    last, run = -1, 0
    for i in range(len(g) - 1, -1, -1):
        if not math.isfinite(g[i]):
            continue
        if g[i] < level:
            last, run = -1, 0
            continue
        last, run = (i if run == 0 else last), run + 1
        if run == CROSSING_RUN:
            break
    if run < CROSSING_RUN:
        last = -1
    if last < 0:
        return np.nan
    after = last + 1
    while after < len(g) and not math.isfinite(g[after]):
        after += 1
    if after >= len(g):
        return np.nan
    share = (g[last] - level) / (g[last] - g[after])
    return drive[last] + share * (drive[after] - drive[last])


@kernel
def _reforms(g: Floats, level: float) -> bool:
    """Return whether the contact opens (8 samples below a tenth of the level) and closes again (3 samples at it)."""
    low, high, opened = 0, 0, False
    for value in g:
        low = low + 1 if value < 0.1 * level else 0
        opened = opened or low >= 8
        high = high + 1 if value >= level else 0
        if opened and high >= 3:
            return True
    return False


@kernel
def _slope_between(g: Floats, drive: Floats, begin: int, low: float, high: float) -> tuple[float, float]:
    """Return the slope of log10 g against drive from the first sample below ``high`` to the first below ``low``.

    Second, the standard deviation about that line, in decades.
    """
    count, x, y, xx, xy, yy = 0, 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(begin, len(g)):
        if g[i] >= high or not math.isfinite(g[i]):
            continue
        if g[i] < low:
            break
        dx, dy = drive[i] - drive[begin], math.log10(g[i])
        count, x, y = count + 1, x + dx, y + dy
        xx, xy, yy = xx + dx * dx, xy + dx * dy, yy + dy * dy
    spread = xx - x * x / count if count > 0 else 0.0
    if count < FEWEST_FOR_SLOPE or spread <= 0.0:
        return np.nan, np.nan
    slope = (xy - x * y / count) / spread
    rest = yy - y * y / count - slope * slope * spread
    return slope, math.sqrt(max(rest, 0.0) / (count - 2))


@kernel
def _at_floor(g: Floats, begin: int, floor: float, sigma: float, restless: float) -> tuple[int, float]:
    """Return the number of blocks at the floor after ``begin`` and the standard deviation of their samples."""
    blocks, count, total, square = 0, 0, 0.0, 0.0
    for start in range(begin, len(g) - BLOCK + 1, BLOCK):
        mean = 0.0
        for i in range(start, start + BLOCK):
            mean += (g[i] - floor) / BLOCK
        if not abs(mean) <= 2.0 * max(sigma, restless):
            continue
        blocks += 1
        for i in range(start, start + BLOCK):
            away = g[i] - floor
            count, total, square = count + 1, total + away, square + away * away
    if count < 2:
        return blocks, np.nan
    return blocks, math.sqrt(max(square - total * total / count, 0.0) / (count - 1))


@kernel
def measure(
    conductance: npt.NDArray[np.float32],
    drive: Floats,
    starts: Integers,
    stops: Integers,
    backward: bool,
    zeros: Integers,
    level: float,
    floor: float,
    sigma: float,
    restless: float,
    low: float,
    high: float,
    clear: float,
    saturation: float,
) -> Floats:
    """Measure a block of traces.

    Returns
    -------
    (traces, COLUMNS) float64
        highest, lowest, crossing length, tunnelling slope, blocks at the floor, floor noise, reforms, missing samples,
        standard deviation about the tunnelling slope (decades).
    """
    out = np.full((len(starts), COLUMNS), np.nan)
    for t in range(len(starts)):
        g = conductance[starts[t] : stops[t]].astype(np.float64)
        z = drive[starts[t] : stops[t]]
        zero = zeros[t]
        if backward:
            g, z = g[::-1].copy(), -z[::-1]
            zero = len(g) - 1 - zero if zero >= 0 else -1
        row = out[t]
        row[0], row[1] = _extremes(g, zero)
        row[2] = _last_crossing(g, z, low) - _last_crossing(g, z, high)
        begin = max(zero, 0)
        row[3], row[8] = _slope_between(g, z, begin, floor + 10.0 * sigma, clear)
        row[4], row[5] = _at_floor(g, begin, floor, sigma, restless)
        row[6] = 1.0 if _reforms(g, level) else 0.0
        row[7] = len(g) - np.isfinite(g).sum()
    return out


@warm_up
def _warm_up() -> None:
    g = np.linspace(1, 0, 64).astype(np.float32)
    bounds = np.array([0], np.int64), np.array([64], np.int64)
    zeros = np.array([32], np.int64)
    drive = np.arange(64.0)
    measure(g, drive, *bounds, False, zeros, 0.5, 0.0, 0.01, 0.01, 0.5, 1.2, 0.01, 10.0)
