"""The floor along the record, from what traces end with: which of them reach it, and its running median.

The floor drifts, by more than a molecule conducts on some records, and many traces may end on a plateau above it.  So
who reaches the floor is told among neighbours: it is where their ends agree most closely, once the drift seen so far is
taken off.
"""

from __future__ import annotations

from typing import Final

import numpy as np
import numpy.typing as npt

__all__ = ["LEAST_TRACES", "offset_error", "running_offset"]

Floats = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]
LEAST_TRACES: Final = 5
WINDOWS: Final = (101, 51, 25, 13)
"""Traces that share a running median: as many as the drift allows."""
CLEARLY_BETTER: Final = 0.95
NEIGHBOURS: Final = 61
SMOOTHED: Final = 31
HELD_SHARE: Final = 1 / 3
ROUNDS: Final = 3
AGREEMENT_SIGMAS: Final = 4.0
CLEARLY_SHARED: Final = 3.0
"""Standard deviations that the covariance of neighbours must stand out of what chance gives."""
MAD_TO_SIGMA: Final = 1.482602218505602


def running_offset(tails: Floats, noise: Floats) -> tuple[Floats, Mask]:
    """Return the offset at every trace, and which traces were shown to reach the floor.

    Parameters
    ----------
    tails : (traces,) float64
        Median of the last stretch of each trace; NaN where it has none.
    noise : (traces,) float64
        Standard error of that median.

    Returns
    -------
    offset : (traces,) float64
        Running median over at most :data:`WINDOWS` traces that reach the floor, carried between them; NaN everywhere
        where fewer than :data:`LEAST_TRACES` do.
    reaches : (traces,) bool
    """
    finite = np.isfinite(tails)
    nowhere = np.full(len(tails), np.nan), np.zeros(len(tails), bool)
    if finite.sum() < LEAST_TRACES:
        return nowhere
    values = tails[finite]
    trend, spread = _trend(values)
    spread = max(spread, float(np.nanmedian(noise[finite])))
    reaches = np.zeros(len(tails), bool)
    reaches[np.flatnonzero(finite)] = np.abs(values - trend) <= AGREEMENT_SIGMAS * spread
    rows = np.flatnonzero(reaches)
    if len(rows) < LEAST_TRACES:
        return nowhere
    running = _followed(tails[rows], _window_for(tails[rows]))
    return np.interp(np.arange(len(tails)), rows, running), reaches


def offset_error(tails: Floats, reaches: Mask, offset: Floats) -> float | None:
    """Return the standard error of the running offset over all traces.

    Two halves of the traces give two offsets with nothing in common but the drift; their mean is known twice as well as
    their difference scatters (JCGM 100:2008, 5.1.2).  It holds the scatter of plain floor, sqrt(pi / 2n) sigma for the
    median of n traces, what drift adds, and what the floor moves without the median following.  A single jump of the
    floor misleads the few traces beside it by more.  None where there are too few traces.
    """
    values = tails[reaches]
    if len(values) < 2 * LEAST_TRACES:
        return None
    window = _window_for(values) // 2
    place = np.arange(len(values))
    halves = [np.interp(place, place[begin::2], _followed(values[begin::2], window)) for begin in (0, 1)]
    followed = 0.25 * float(np.mean((halves[0] - halves[1]) ** 2))
    return float(np.sqrt(followed + _unfollowed(tails, reaches, offset)))


def _unfollowed(tails: Floats, reaches: Mask, offset: Floats) -> float:
    """Return the mean square of what the floor moves and the running offset does not follow; 0 where it follows.

    What neighbours share in their distance from the offset is no scatter of single traces: it is the covariance of one
    with the next (the autocovariance at lag 1, as of white noise about a slow signal).  Traces count that reach the
    floor, and those clearly off on the side where no plateau can lie, fewer than on the other: they are floor beside a
    jump, and stand for as many that cannot be told from plateaus.
    """
    known = np.isfinite(tails)
    away, floor = (tails - offset)[known], reaches[known]
    off_side = min(away[~floor] > 0, away[~floor] < 0, key=np.count_nonzero)
    weight = floor.astype(np.float64)
    weight[~floor] = 2.0 * off_side
    scatter = MAD_TO_SIGMA * float(np.median(np.abs(np.diff(tails[reaches])))) / np.sqrt(2.0)
    pairs = np.minimum(weight[1:], weight[:-1]) > 0
    heavy = np.maximum(weight[1:], weight[:-1])[pairs]
    shared = float(np.average((away[1:] * away[:-1])[pairs], weights=heavy)) if pairs.any() else 0.0
    by_chance = CLEARLY_SHARED * scatter**2 / np.sqrt(max(int(pairs.sum()), 1))
    return shared if shared > by_chance else 0.0


def _trend(values: Floats) -> tuple[Floats, float]:
    """Return (floor at every trace, standard deviation of a trace's end round it).

    Plateaus lie on one side of the floor, so that a running quartile on the other side shows the drift, if not the
    level; either side is tried.  The level is then where residuals lie closest together.
    """
    size = min(NEIGHBOURS, len(values))
    tried = []
    for quartile in (0.25, 0.75):
        windows = np.lib.stride_tricks.sliding_window_view(values, size)
        trend = _extended(_running_median(np.quantile(windows, quartile, axis=1), SMOOTHED), len(values))
        spread = 0.0
        for _ in range(ROUNDS):
            centres, widths = _densest(values - trend, size)
            spread = MAD_TO_SIGMA * float(np.median(widths))
            trend = trend + _extended(_running_median(centres, SMOOTHED), len(values))
        tried.append((spread, trend))
    spread, trend = min(tried, key=lambda one: one[0])
    return trend, spread


def _densest(values: Floats, size: int) -> tuple[Floats, Floats]:
    """Return for each window (centre of where a third of it lies closest together, median distance from there).

    The distance is that of the nearest half of those within three times the stretch that holds the third: of normal
    noise, two thirds of the standard deviation.
    """
    ordered = np.sort(np.lib.stride_tricks.sliding_window_view(values, size), axis=1)
    held = min(max(int(size * HELD_SHARE), LEAST_TRACES - 1), size - 1)
    widths = ordered[:, held:] - ordered[:, : size - held]
    place = np.argmin(widths, axis=1)
    row = np.arange(len(ordered))
    centres = ordered[row, place + held // 2]
    reach = 3.0 * widths[row, place]
    away = np.abs(ordered - centres[:, None])
    inside = np.where(away <= reach[:, None], away, np.nan)
    return centres, np.nanmedian(inside, axis=1)


def _extended(centres: Floats, length: int) -> Floats:
    """Return what windows say of every trace: at their middles, and straight on beyond the first and last middle."""
    middles = np.arange(len(centres)) + (length - len(centres)) / 2.0
    found = np.interp(np.arange(length), middles, centres)
    near = min(len(centres), NEIGHBOURS)
    if near > 2:
        for side, place in (
            (slice(None, near), np.arange(length) < middles[0]),
            (slice(-near, None), np.arange(length) > middles[-1]),
        ):
            line = np.polynomial.Polynomial.fit(middles[side], centres[side], 1)
            found[place] = line(np.flatnonzero(place))
    return found


def _window_for(values: Floats) -> int:
    """Return how many traces share a median: the most of which a trace is foretold about as well as by fewer."""
    errors = [_foretold(values, window) for window in WINDOWS]
    best = min(errors)
    return next(window for window, error in zip(WINDOWS, errors, strict=True) if CLEARLY_BETTER * error <= best)


def _foretold(values: Floats, window: int) -> float:
    """Return the mean distance of values from the running median of others, with wild ones cut."""
    if len(values) < 2:
        return 0.0
    away = np.abs(values - _followed(values, window))
    return float(np.mean(np.minimum(away, 5.0 * np.median(away)))) / (1.0 - 1.0 / min(window, len(values)))


def _followed(values: Floats, window: int) -> Floats:
    """Return the running median, and once more that of what it leaves: drift that bends is followed, too.

    Smoothing the residuals once more is "twicing" (Tukey, Exploratory Data Analysis, 1977, chapter 16).
    """
    first = _running_median(values, window)
    return first + _running_median(values - first, window)


def _running_median(values: Floats, window: int) -> Floats:
    """Return the median over windows that are even on both sides; near the ends they are shorter, at least 3 wide."""
    half = window // 2
    found = np.empty(len(values))
    if len(values) > 2 * half:
        found[half : len(values) - half] = np.median(
            np.lib.stride_tricks.sliding_window_view(values, 2 * half + 1), axis=1
        )
    for place in range(len(values)):
        if half <= place < len(values) - half:
            continue
        reach = max(min(half, place, len(values) - 1 - place), LEAST_TRACES)
        found[place] = np.median(values[max(0, place - reach) : place + reach + 1])
    return found
