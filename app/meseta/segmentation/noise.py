"""The noise model of a recording, learnt from all of its traces.

Every trace contributes robust spreads at many conductances; lower quartiles over all traces leave out windows that hold
a jump.  White noise shows in second differences, filtered and 1/f noise in second differences of block means, mains
pickup and drift in the spread of the floor itself.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.recipe.noise import NoiseSettings
from meseta.segmentation import noise_kernels as kernels
from meseta.segmentation.ranges import phase_bounds, runs_backward, trusted_samples
from meseta.segmentation.results import NoiseModel
from meseta.traces import TraceSet

__all__ = ["NoiseStatistics", "noise_block", "noise_model"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

QUARTILE_OF: Final = (0.7902, 0.8515, 0.3186, 0.3186)
"""Lower quartile of each spread for white noise of unit variance: means over 14 second differences and over 16
samples about a line (computed by simulation, 400,000 windows), and the normal quartile for single differences."""
CLEAR_OF_CONTACT_G0: Final = 1e-2
"""Tunnelling is measured below this conductance; nearer to contact the decay is faster (Krans et al., 1993)."""
FEWEST_WINDOWS: Final = 30
GROWTH: Final = 1.2
"""Ratio of long-run spreads over blocks of 8 and 4 samples that tells 1/f noise (1.41) from white noise (1)."""
DECADES_OF_RISE: Final = 0.954
"""log10 of 0.9 / 0.1: what an exponential falls in a rise time."""
DECAYS_DIFFER: Final = 0.08
"""Relative quartile distance beyond which fall times are not those of one amplifier (a few per cent)."""
FASTEST_DECAY: Final = 5.0
"""Falls within fewer samples count as jumps."""
ROUNDING: Final = 2.0**-23
"""Relative rounding of float32: no recording knows its conductance better."""


@dataclass(frozen=True)
class NoiseStatistics:
    """What one block of traces says of the noise.

    Attributes
    ----------
    spread_place, spread_count : four (k,) int64 arrays each
        Occupied cells of the (level, spread) grids: white, sample, block means of 4 and of 8.
    rows : (traces, 7) float64
        Floor mean, floor sigma, floor samples, converter step, highest reading, its repeats, fall time of each trace.
    slope_level : (m,) int64
        Crossing level at the lower end of an interval of half a decade.
    slope : (m,) float64
        Drive per interval, as decades per drive unit (negative).
    slope_samples : (m,) int64
        Samples that the trace spends in the interval.
    """

    spread_place: tuple[Integers, ...]
    spread_count: tuple[Integers, ...]
    rows: Floats
    slope_level: Integers
    slope: Floats
    slope_samples: Integers


def noise_block(traces: TraceSet, settings: NoiseSettings, phases: Sequence[str]) -> NoiseStatistics:
    """Return what a block of traces says of the noise.

    Parameters
    ----------
    traces : TraceSet
        In memory.  Windows that hold a NaN or an untrusted sample are left out.
    settings : NoiseSettings
        Not used here; statistics are the same whatever is stated.
    phases : sequence of str
        Phases to look at.
    """
    starts, stops = phase_bounds(traces, phases)
    grids = np.zeros((4, kernels.LEVEL_BINS, kernels.SPREAD_BINS), np.int64)
    rows = np.empty((traces.traces, 7))
    last = np.empty((traces.traces, kernels.CROSSING_LEVELS), np.int64)
    conductance = np.ascontiguousarray(traces.conductance)
    backward = runs_backward(phases)
    kernels.gather(conductance, trusted_samples(traces), starts, stops, backward, grids, rows, last)
    places = tuple(np.flatnonzero(grid) for grid in grids)
    level, slope, samples = _slopes(traces, starts, stops, last, backward)
    counts = tuple(grid.ravel()[place] for grid, place in zip(grids, places, strict=True))
    return NoiseStatistics(places, counts, rows, level, slope, samples)


def _slopes(
    traces: TraceSet, starts: Integers, stops: Integers, last: Integers, backward: bool
) -> tuple[Integers, Floats, Integers]:
    """Return level, slope and samples of every half decade that a trace crosses for the last time."""
    trace, level = np.nonzero((last[:, 1:] >= 0) & (last[:, :-1] > last[:, 1:]))
    lower, upper = last[trace, level], last[trace, level + 1]
    if backward:
        lower, upper = (stops - starts)[trace] - 1 - lower, (stops - starts)[trace] - 1 - upper
    drive = traces.drive_values(0, traces.traces)
    distance = np.abs(drive[starts[trace] + lower] - drive[starts[trace] + upper])
    seen = distance > 0
    slope = -1.0 / kernels.CROSSING_PER_DECADE / distance[seen]
    return level[seen], slope, np.abs(lower - upper)[seen]


def noise_model(statistics: Sequence[NoiseStatistics], settings: NoiseSettings) -> NoiseModel:
    """Return the noise model that all blocks together support.

    Parameters
    ----------
    statistics : sequence of NoiseStatistics
        Of all blocks, in order.
    settings : NoiseSettings
        What the recipe states instead of the recording.

    Returns
    -------
    NoiseModel
        Where no trace reaches a floor, ``floor_g0`` is 0 and ``floor_sigma_g0`` the noise of the lowest readings.
    """
    rows = np.concatenate([part.rows for part in statistics]) if statistics else np.empty((0, 7))
    high = _typical_high(rows)
    floor, sigma, members = _floor(rows, high)
    step = _converter_step(rows)
    sigma = max(sigma, step / np.sqrt(12), abs(floor) * ROUNDING) or high * ROUNDING
    floor = floor if settings.floor_g0 is None else settings.floor_g0
    sigma = sigma if settings.floor_sigma_g0 is None else settings.floor_sigma_g0
    level, white, sample, long_run, growing = _table(statistics, floor, sigma, step, high)
    if settings.relative_noise is not None:
        sample = np.hypot(sigma, settings.relative_noise * level)
        long_run = sample * np.maximum(long_run / np.maximum(sample, white), 1.0)
    pace = _samples_a_decade(statistics, floor + 10 * sigma)
    rise = _rise(rows, pace) if settings.rise_samples is None else settings.rise_samples
    saturation = _saturation(rows, sample / level) if settings.saturation_g0 is None else settings.saturation_g0
    fewest = max(3, len(rows) // 4)
    slope = _tunnelling_slope(statistics, floor + 10 * sigma, CLEAR_OF_CONTACT_G0 * min(1.0, high), rise, fewest)
    stated = tuple(info.name for info in settings.fields() if getattr(settings, info.name) is not None)
    return NoiseModel(
        floor, sigma, members, level, sample, long_run, rise, step, saturation, slope, stated, white, growing
    )


def _typical_high(rows: Floats) -> float:
    """Return the median over traces of the highest reading; 1 where there is none."""
    highs = rows[np.isfinite(rows[:, 4]) & (rows[:, 4] > 0), 4]
    return float(np.median(highs)) if len(highs) else 1.0


def _floor(rows: Floats, high: float) -> tuple[float, float, int]:
    """Return mean, standard deviation and number of traces of the floor.

    The lowest level of each trace is a candidate.  Those that agree with one another within their own noise, at the
    lower end of all candidates, are the floor; a level that is a sizeable share of the highest readings is none.
    """
    usable = np.isfinite(rows[:, 0]) & (rows[:, 2] > 0)
    means, sigmas = rows[usable, 0], rows[usable, 1]
    if not len(means):
        return 0.0, high * ROUNDING, 0
    order = np.argsort(means, kind="stable")
    quarter = order[: len(order) // 4 + 1]
    level, spread = float(np.median(means[quarter])), float(np.median(sigmas[quarter]))
    members = np.ones(len(means), bool)
    for _ in range(4):
        members = np.abs(means - level) <= 4 * (spread or high * ROUNDING)
        if not members.any():
            break
        level = float(np.median(means[members]))
        between = 1.4826 * float(np.median(np.abs(means[members] - level)))
        spread = float(np.hypot(np.median(sigmas[members]), between))
    shown = int(members.sum())
    if shown < max(1, len(means) // 100) or level > 0.05 * high:
        return 0.0, float(np.min(sigmas)) or high * ROUNDING, 0
    return level, spread, shown


def _converter_step(rows: Floats) -> float:
    """Return the converter step near the floor, where at least half of the traces show one; else 0."""
    steps = rows[np.isfinite(rows[:, 0]) & (rows[:, 2] > 0), 3]
    shown = steps[steps > 0]
    return float(np.median(shown)) if len(shown) * 2 > len(steps) else 0.0


def _samples_a_decade(statistics: Sequence[NoiseStatistics], low: float) -> float:
    """Return the median number of samples in which traces fall by a decade above ``low``; NaN where none does."""
    level = np.concatenate([part.slope_level for part in statistics] or [np.empty(0, np.int64)])
    samples = np.concatenate([part.slope_samples for part in statistics] or [np.empty(0, np.int64)])
    above = 10.0 ** (kernels.CROSSING_LOWEST + level / kernels.CROSSING_PER_DECADE) >= low
    return float(np.median(samples[above])) * kernels.CROSSING_PER_DECADE if above.any() else float("nan")


def _rise(rows: Floats, samples_a_decade: float) -> float:
    """Return the rise time in samples: the lower quartile of the largest falls, as a contact may only be slower.

    Contacts without a neck show no jump: their largest fall is the tunnelling decay, as slow as all the rest of it and
    different from trace to trace.  It says nothing of the amplifier, which is then taken to be fast.
    """
    falls = rows[np.isfinite(rows[:, 6]), 6]
    if not len(falls):
        return 1.0
    quarter, middle, rest = np.quantile(falls, [0.25, 0.5, 0.75])
    decay = DECADES_OF_RISE * samples_a_decade
    if rest - quarter > DECAYS_DIFFER * middle and 0.4 * decay <= middle <= 2.5 * decay and middle > FASTEST_DECAY:
        return 1.0
    return max(1.0, float(quarter))


def _saturation(rows: Floats, relative: Floats) -> float:
    """Return the reading at which the traces pile up, or infinity.

    The highest readings of many traces agree to one part in 1,000 and repeat, although the signal is noisy.  A few
    traces may show more (a spike, a missing sample written as a number), but not a tenth of those that agree.
    """
    highs, repeats = rows[:, 4], rows[:, 5]
    finite = np.isfinite(highs) & (highs > 0)
    if not finite.any() or float(np.median(relative)) < 1e-5:
        return np.inf
    every, piled = np.sort(highs[finite]), np.sort(highs[finite & (repeats >= 8)])
    first, beyond = np.searchsorted(piled, 0.999 * piled), np.searchsorted(piled, piled, side="right")
    agree = beyond - first
    higher = len(every) - np.searchsorted(every, 1.001 * piled, side="right")
    good = np.flatnonzero((agree >= max(2, 0.01 * len(every))) & (higher <= 0.1 * agree))
    return float(np.median(piled[first[good[-1]] : beyond[good[-1]]])) if len(good) else np.inf


def _tunnelling_slope(
    statistics: Sequence[NoiseStatistics], low: float, high: float, rise: float, fewest: int
) -> float:
    """Return the median slope over all half decades between the bounds that were not crossed by a jump.

    NaN where there are fewer than ``fewest``: where tunnelling lies below the floor the few slow ones are plateaus.
    """
    slope = np.concatenate([part.slope for part in statistics] or [np.empty(0)])
    level = np.concatenate([part.slope_level for part in statistics] or [np.empty(0, np.int64)])
    samples = np.concatenate([part.slope_samples for part in statistics] or [np.empty(0, np.int64)])
    lower = 10.0 ** (kernels.CROSSING_LOWEST + level / kernels.CROSSING_PER_DECADE)
    upper = lower * 10.0 ** (1 / kernels.CROSSING_PER_DECADE)
    slow = (lower >= low) & (upper <= high * 1.0001) & (samples > max(2.0, 1.5 * rise))
    return float(np.median(slope[slow])) if slow.sum() >= fewest else float("nan")


def _pooled(statistics: Sequence[NoiseStatistics], which: int) -> Integers:
    """Return one pooled (level, spread) grid."""
    grid = np.zeros(kernels.LEVEL_BINS * kernels.SPREAD_BINS, np.int64)
    for part in statistics:
        grid[part.spread_place[which]] += part.spread_count[which]
    return grid.reshape(kernels.LEVEL_BINS, kernels.SPREAD_BINS)


def _quartile(counts: Integers, which: int) -> float:
    """Return the lower quartile of a row of spread counts, made one sigma."""
    cumulated = np.cumsum(counts)
    quarter = cumulated[-1] / 4
    place = int(np.searchsorted(cumulated, quarter))
    if place == 0:
        return 0.0
    share = (quarter - cumulated[place - 1]) / max(int(counts[place]), 1)
    return float(10.0 ** (kernels.SPREAD_LOWEST + (place + share) / kernels.SPREAD_PER_DECADE) / QUARTILE_OF[which])


def _at_levels(statistics: Sequence[NoiseStatistics], which: int, at_floor: Integers, rows: Integers) -> Floats:
    """Return the spread at the floor and at each level bin; NaN where few windows.

    A level that few windows visit (between plateaus, in the jumps) is pooled with its neighbours, spreads taken as a
    share of the level, until it holds a twentieth of all windows above the floor.  Windows without any spread are those
    of a saturated amplifier and are left out, unless most windows are such (a recording without noise).
    """
    grid = _pooled(statistics, which)
    silent = grid[:, 0].copy() if 2 * grid[rows, 0].sum() > grid[rows].sum() else np.zeros(len(grid), np.int64)
    grid[rows, 0] = 0
    shift = kernels.SPREAD_PER_DECADE // kernels.LEVEL_PER_DECADE
    enough = max(FEWEST_WINDOWS, grid[rows].sum() // 20)
    found = np.full(len(rows) + 1, np.nan)
    if grid[at_floor].sum() >= FEWEST_WINDOWS:
        found[0] = _quartile(grid[at_floor].sum(axis=0), which)
    for place, row in enumerate(rows):
        for reach in range(9):
            near = rows[max(place - reach, 0) : place + reach + 1]
            counts = np.sum([np.roll(grid[other], shift * (row - other)) for other in near], axis=0)
            counts[0] = silent[near].sum()
            if counts.sum() >= enough:
                found[place + 1] = _quartile(counts, which)
                break
    return found


def _table(
    statistics: Sequence[NoiseStatistics], floor: float, sigma: float, step: float, high: float
) -> tuple[Floats, Floats, Floats, Floats, npt.NDArray[np.bool_]]:
    """Return level above the floor, white, single-sample and long-run spread, and where the last one still grows."""
    edges = 10.0 ** (kernels.LEVEL_LOWEST + np.arange(kernels.LEVEL_BINS + 1) / kernels.LEVEL_PER_DECADE)
    centres = np.sqrt(edges[:-1] * edges[1:])
    at_floor = np.flatnonzero(centres < abs(floor) + 2.5 * sigma)
    rows = np.flatnonzero((centres - floor > 3 * sigma) & (centres < 1e3 * high))
    white, sample, short, long = (_at_levels(statistics, which, at_floor, rows) for which in range(4))
    level = np.concatenate([[sigma], centres[rows] - floor])
    least = np.maximum(step / np.sqrt(12), level * 4 * ROUNDING)
    # The noise of the floor is there at every conductance.
    white, sample, short, long = (_raised(_filled(part, level, sigma), least) for part in (white, sample, short, long))
    sample = np.maximum(sample, white)
    sample[0] = max(sample[0], 0.5 * sigma)
    growing = (long > GROWTH * short) & (long > GROWTH * sample)
    return level, white, sample, np.maximum(np.maximum(sample, short), long), growing


def _raised(values: Floats, least: Floats) -> Floats:
    """Return the values, none below the first (the floor) or below what the converter and the format resolve."""
    raised: Floats = np.maximum(np.maximum(values, values[0]), least)
    return raised


def _filled(values: Floats, level: Floats, sigma: float) -> Floats:
    """Fill levels that no trace visits: interpolated as a share of the level, the nearest share beyond."""
    known = np.isfinite(values)
    if not known.any():
        return np.hypot(sigma, 0.01 * level)
    share = np.interp(np.log(level), np.log(level[known]), (values / level)[known])
    result: Floats = np.where(known, values, share * level)
    return result
