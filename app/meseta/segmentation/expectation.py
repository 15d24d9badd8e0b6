"""What the plateau finder does on traces like these: plateaus of known make are planted, and looked for.

A planted plateau is a conductance in parallel with what the trace shows anyway, so noise of the floor, pickup, leakage
and the tunnelling beneath it are the recording's own; only its relative noise
and the rise of the amplifier come from the noise model.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import numpy.typing as npt
from scipy.ndimage import uniform_filter1d
from scipy.signal import lfilter

from meseta.errors import CallError
from meseta.intake.alignment import Alignment
from meseta.recipe.plateaus import PlateauSettings
from meseta.segmentation.finder import METAL_FROM_G0, find_plateaus
from meseta.segmentation.noise import phase_bounds, runs_backward
from meseta.segmentation.results import NoiseModel, PlateauTable
from meseta.traces import Channel, TraceSet
from meseta.work import Work

__all__ = ["Expectation", "expect", "plant"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

LEVEL_WITHIN_DECADES: Final = 0.1
OVERLAP: Final = 0.5
NORMAL_95: Final = 1.959963984540054
SMOOTHING: Final = 9
"""Samples of the running mean in which the place of a plateau is looked for."""
DETECTED: Final = 0.9
"""Efficiency at which a plateau counts as detectable."""


@dataclass(frozen=True)
class Expectation:
    """Detection of planted plateaus over conductance and length, at the present settings.

    A planted plateau is found if one found plateau overlaps it by at least half of their union and its conductance lies
    within 0.1 decade.

    Attributes
    ----------
    conductance_g0 : (k,) float64
    length : (m,) float64
        In ``drive_unit``.
    slope_decades : float
        Slope of the planted plateaus, decades per drive unit.
    planted, found : (k, m) int64
    efficiency, efficiency_low, efficiency_high : (k, m) float64
        found / planted with the 95 % interval of Wilson (1927); NaN where none was planted.
    level_bias_decades, length_bias : (k, m) float64
        Median of found minus planted; NaN where none was found.
    limit_g0 : (m,) float64
        Lowest conductance from which on the efficiency is at least 0.9; NaN where there is none.
    false_a_trace, false_low, false_high : float
        Plateaus below 0.1 G0 found in the traces as they are, with the 95 % interval of a Poisson count; an upper bound
        where the traces are not known to be blank.
    traces : int
        Traces that took part.
    blank : bool
        Whether the traces were stated to be blank.
    """

    conductance_g0: Floats
    length: Floats
    drive_unit: str
    slope_decades: float
    planted: Integers
    found: Integers
    efficiency: Floats
    efficiency_low: Floats
    efficiency_high: Floats
    level_bias_decades: Floats
    length_bias: Floats
    limit_g0: Floats
    false_a_trace: float
    false_low: float
    false_high: float
    traces: int
    blank: bool

    def efficiency_at(self, conductance_g0: float, length: float) -> float:
        """Return the efficiency interpolated in log conductance and length; NaN beyond the grid."""
        from scipy.interpolate import RegularGridInterpolator

        grid = (np.log10(self.conductance_g0), self.length)
        between = RegularGridInterpolator(grid, self.efficiency, bounds_error=False)
        return float(between((np.log10(conductance_g0), length)))


def expect(
    traces: TraceSet,
    settings: PlateauSettings,
    noise: NoiseModel,
    alignment: Alignment,
    phases: Sequence[str],
    *,
    conductance_g0: npt.ArrayLike | None = None,
    length: npt.ArrayLike | None = None,
    slope_decades: float = 0.0,
    each: int = 200,
    blank: bool = False,
    seed: int = 0,
    work: Work | None = None,
) -> Expectation:
    """Plant plateaus into traces and look for them.

    Parameters
    ----------
    traces : TraceSet
        The user's own, blank or tunnelling-only where ``blank`` says so; else those without a plateau below 0.1 G0
        are used.
    settings, noise, alignment, phases
        As for :func:`~meseta.segmentation.find_plateaus`.
    conductance_g0, length : (k,), (m,) array_like, optional
        Grid of planted conductances, and lengths in drive units; by default 8 from 3 floor sigma to 1e-2 G0, and 5 from
        20 to 500 samples.
    slope_decades : float
        Slope of the planted plateaus, decades per drive unit.
    each : int
        Most planted plateaus a cell, each in another trace.
    seed : int
    work : Work, optional

    Raises
    ------
    CallError
        Where no trace is fit to plant in.
    """
    work = work or Work()
    plain = find_plateaus(traces, settings, noise, alignment, phases)
    molecules = plain.take(plain.level_g0 < METAL_FROM_G0)
    fit = np.ones(traces.traces, bool) if blank else ~np.isin(np.arange(traces.traces), molecules.trace)
    fit &= alignment.zero_sample >= 0
    rows = np.flatnonzero(fit)
    if not len(rows):
        raise CallError(
            "no trace is fit to plant plateaus in", "expect", "give traces that rupture and hold no molecule"
        )
    levels, lengths = _grid(traces, noise, conductance_g0, length)
    shape = (len(levels), len(lengths))
    planted, found = np.zeros(shape, np.int64), np.zeros(shape, np.int64)
    level_bias, length_bias = np.full(shape, np.nan), np.full(shape, np.nan)
    rng = np.random.Generator(np.random.PCG64(seed))
    for cell, (a, b) in enumerate(np.ndindex(shape)):
        work.tell("planting plateaus", cell, len(levels) * len(lengths), "cells")
        chosen = np.sort(rng.permutation(rows)[:each])
        level, long = float(levels[a]), float(lengths[b])
        part, start, stop = plant(traces, chosen, level, long, slope_decades, noise, phases, rng)
        table = find_plateaus(part, settings, noise, _taken(alignment, chosen), phases)
        away, longer = _matched(table, start, stop, level, part)
        planted[a, b], found[a, b] = int((stop > start).sum()), len(away)
        if len(away):
            level_bias[a, b], length_bias[a, b] = float(np.median(away)), float(np.median(longer))
    low, high = _wilson(found, planted)
    with np.errstate(invalid="ignore", divide="ignore"):
        efficiency = found / planted
    false = len(molecules) if blank else 0
    false_low, false_high = _poisson(false)
    return Expectation(
        conductance_g0=levels,
        length=lengths,
        drive_unit=traces.drive.unit,
        slope_decades=slope_decades,
        planted=planted,
        found=found,
        efficiency=efficiency,
        efficiency_low=low,
        efficiency_high=high,
        level_bias_decades=level_bias,
        length_bias=length_bias,
        limit_g0=_limits(levels, efficiency),
        false_a_trace=false / len(rows) if blank else float("nan"),
        false_low=false_low / len(rows) if blank else float("nan"),
        false_high=false_high / len(rows) if blank else float("nan"),
        traces=len(rows),
        blank=blank,
    )


def plant(
    traces: TraceSet,
    rows: Integers,
    level_g0: float,
    length: float,
    slope_decades: float,
    noise: NoiseModel,
    phases: Sequence[str],
    rng: np.random.Generator,
) -> tuple[TraceSet, Integers, Integers]:
    """Return the chosen traces with a plateau planted in each, and its range of samples.

    The plateau begins where the trace falls below its conductance for the last time; the stretch in which the trace
    falls on to a twentieth of that is left out, as the bridge forms at once (its samples are made up at the end by the
    trace's own last ones).  A trace too short for the plateau stays as it is, with an empty range.
    """
    part = traces.take(rows)
    begin, end = phase_bounds(part, phases)
    backward = runs_backward(phases)
    drive = part.drive_values(0, part.traces)
    values = part.conductance.astype(np.float64)
    start, stop = np.zeros(len(rows), np.int64), np.zeros(len(rows), np.int64)
    for k in range(len(rows)):
        span = slice(int(begin[k]), int(end[k]))
        order = slice(None, None, -1) if backward else slice(None)
        g = values[span][order]
        step = abs(drive[span][-1] - drive[span][0]) / max(len(g) - 1, 1) if len(g) > 1 else np.nan
        samples = round(length / step) if step > 0 else 0
        first, late = _place(g - noise.floor_g0, level_g0, noise.floor_sigma_g0)
        if samples < 2 or late + samples > len(g):
            continue
        g = np.concatenate([g[:first], g[late:], g[::-1][: late - first]])
        g[first : first + samples + 64] += _plateau(level_g0, samples, step * slope_decades, noise, rng)[
            : len(g) - first
        ]
        values[span] = g[order]
        inside = (len(g) - first - samples, len(g) - first) if backward else (first, first + samples)
        start[k], stop[k] = (int(begin[k] - part.offsets[k]) + edge for edge in inside)
    channels = {"conductance": Channel.of(values, "G0")}
    return replace(part, channels=channels, key=f"{part.key}+planted"), start, stop


def _place(g: Floats, level: float, sigma: float) -> tuple[int, int]:
    """Return the sample at which the trace falls below the level, and below a twentieth of it or the floor."""
    smooth = uniform_filter1d(np.where(np.isfinite(g), g, 0.0), SMOOTHING)
    above = np.flatnonzero(smooth >= level)
    first = int(above[-1]) + 1 if len(above) else len(g)
    away = np.flatnonzero(smooth[first:] < max(0.05 * level, sigma))
    return first, first + int(away[0]) if len(away) else len(g)


def _plateau(level: float, samples: int, slope: float, noise: NoiseModel, rng: np.random.Generator) -> Floats:
    """Return a plateau and 64 samples after it: relative noise of the recording, edges as slow as its amplifier."""
    shape = np.zeros(samples + 64)
    x = np.arange(samples) - 0.5 * (samples - 1)
    floor = noise.floor_sigma_g0
    single = float(noise.sigma(level)) ** 2 - floor**2
    white = min(float(np.interp(level, noise.level_g0, noise.white_g0)) ** 2, max(single, 0.0)) if single > 0 else 0.0
    slow = max(single - white, 0.0)
    relative = np.sqrt(white) * rng.standard_normal(samples) + np.sqrt(slow) * _slow_noise(samples, rng)
    shape[:samples] = level * 10 ** (slope * x) * (1 + relative / level)
    keep = float(np.exp(-2.2 / max(noise.rise_samples, 1e-9))) if noise.rise_samples > 1 else 0.0
    return np.asarray(lfilter([1 - keep], [1, -keep], shape), float)


def _slow_noise(samples: int, rng: np.random.Generator, kept: float = 0.9) -> Floats:
    """Return correlated noise of unit variance (first-order autoregressive)."""
    fresh = rng.standard_normal(samples) * np.sqrt(1 - kept**2)
    fresh[0] /= np.sqrt(1 - kept**2)
    return np.asarray(lfilter([1.0], [1.0, -kept], fresh), float)


def _grid(
    traces: TraceSet, noise: NoiseModel, conductance_g0: npt.ArrayLike | None, length: npt.ArrayLike | None
) -> tuple[Floats, Floats]:
    """Return the conductances and lengths to plant, ascending."""
    if conductance_g0 is None:
        low = 3 * noise.floor_sigma_g0
        conductance_g0 = np.geomspace(low, max(1e-2, 10 * low), 8)
    if length is None:
        step = np.nanmedian(np.abs(np.diff(traces.block(0, 1).trace_drive(0)))) if traces.lengths[0] > 1 else 1.0
        length = step * np.array([20.0, 50.0, 100.0, 200.0, 500.0])
    levels, lengths = np.sort(np.ravel(conductance_g0).astype(float)), np.sort(np.ravel(length).astype(float))
    if not (len(levels) and len(lengths) and levels[0] > 0 and lengths[0] > 0):
        raise CallError("conductances and lengths to plant must be above zero", "expect", "give positive numbers")
    return levels, lengths


def _taken(alignment: Alignment, rows: Integers) -> Alignment:
    return Alignment(
        alignment.zero_drive[rows], alignment.zero_sample[rows], alignment.status[rows], alignment.level_g0
    )


def _matched(
    table: PlateauTable, start: Integers, stop: Integers, level: float, traces: TraceSet
) -> tuple[Floats, Floats]:
    """Return level error (decades) and length error (drive) of every planted plateau that was found."""
    away, longer = [], []
    drive_step = np.abs(traces.drive_values(0, 1)[1:2] - traces.drive_values(0, 1)[:1])
    step = float(drive_step[0]) if len(drive_step) else np.nan
    for trace in np.flatnonzero(stop > start):
        for row in range(*np.searchsorted(table.trace, [trace, trace + 1])):
            common = min(stop[trace], table.stop[row]) - max(start[trace], table.start[row])
            union = max(stop[trace], table.stop[row]) - min(start[trace], table.start[row])
            error = abs(np.log10(table.level_g0[row] / level)) if table.level_g0[row] > 0 else np.inf
            if common >= OVERLAP * union and error <= LEVEL_WITHIN_DECADES:
                away.append(float(np.log10(table.level_g0[row] / level)))
                longer.append(float(table.stop[row] - table.start[row] - stop[trace] + start[trace]) * step)
                break
    return np.array(away), np.array(longer)


def _wilson(found: Integers, planted: Integers) -> tuple[Floats, Floats]:
    """Return the 95 % score interval of a share (Wilson, J. Am. Stat. Assoc. 22, 209 (1927))."""
    z2 = NORMAL_95**2
    with np.errstate(invalid="ignore", divide="ignore"):
        share = found / planted
        middle = (share + z2 / (2 * planted)) / (1 + z2 / planted)
        half = NORMAL_95 * np.sqrt(share * (1 - share) / planted + z2 / (4 * planted**2)) / (1 + z2 / planted)
    return np.maximum(middle - half, 0.0), np.minimum(middle + half, 1.0)


def _poisson(count: int) -> tuple[float, float]:
    """Return the exact 95 % interval of a Poisson mean (Garwood, Biometrika 28, 437 (1936))."""
    from scipy.stats import chi2

    low = 0.5 * float(chi2.ppf(0.025, 2 * count)) if count else 0.0
    return low, 0.5 * float(chi2.ppf(0.975, 2 * count + 2))


def _limits(levels: Floats, efficiency: Floats) -> Floats:
    """Return for each length the lowest conductance from which on everything planted is detectable."""
    limits = np.full(efficiency.shape[1], np.nan)
    for column in range(efficiency.shape[1]):
        good = np.nan_to_num(efficiency[:, column], nan=0.0) >= DETECTED
        bad = np.flatnonzero(~good)
        first = int(bad[-1]) + 1 if len(bad) else 0
        if first < len(levels):
            limits[column] = levels[first]
    return limits
