"""What the plateau finder does on traces like these: plateaus of known make are planted, and looked for."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.intake.alignment import Alignment
from meseta.recipe.plateaus import PlateauSettings
from meseta.segmentation.expected import Expectation, poisson_interval, wilson_interval
from meseta.segmentation.finder import METAL_FROM_G0, find_plateaus, shortest_molecule
from meseta.segmentation.planting import plant
from meseta.segmentation.results import NoiseModel, PlateauTable
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["expect"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

LEVEL_WITHIN_DECADES: Final = 0.1
OVERLAP: Final = 0.5
DETECTED: Final = 0.9
"""Efficiency at which a plateau counts as detectable."""


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
        are used.  They are read block by block.
    settings, noise, alignment, phases
        As for :func:`~meseta.segmentation.find_plateaus`.
    conductance_g0, length : (k,), (m,) array_like, optional
        Grid of planted conductances, and lengths in drive units; by default 8 from 3 floor sigma to 1e-2 G0, and 5 from
        a quarter above the shortest plateau that the settings take (20 samples at least) to 500 samples or ten times
        the shortest.  At the shortest itself half are lost to a boundary that lies a sample off.
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

    Notes
    -----
    What is planted is straight and keeps still.  Molecules that drift, bend or switch between two levels are found less
    often: on simulated traces of another make with telegraph noise, drift of up to 0.9 decades/nm and 0.1 decade of
    noise of their own, 0.94 where 0.99 was expected above 5 floor sigma, 0.83 for 0.94 from 3.5 to 5, and 0.25 for 0.63
    below.
    """
    work = work or Work()
    traces = traces.only("conductance")
    molecules = _molecules(traces, settings, noise, alignment, phases, work)
    fit = (molecules == 0) | blank
    fit &= alignment.zero_sample >= 0
    rows = np.flatnonzero(fit)
    if not len(rows):
        raise CallError(
            "no trace is fit to plant plateaus in", "expect", "give traces that rupture and hold no molecule"
        )
    levels, lengths = _grid(traces, settings, noise, conductance_g0, length)
    shape = (len(levels), len(lengths))
    planted, found = np.zeros(shape, np.int64), np.zeros(shape, np.int64)
    level_bias, length_bias = np.full(shape, np.nan), np.full(shape, np.nan)
    rng = np.random.Generator(np.random.PCG64(seed))
    for cell, (a, b) in enumerate(np.ndindex(shape)):
        work.tell("planting plateaus", cell, len(levels) * len(lengths), "cells")
        chosen = np.sort(rng.permutation(rows)[:each])
        level, long = float(levels[a]), float(lengths[b])
        away: list[float] = []
        longer: list[float] = []
        for rows_now in _parts(chosen, traces.lengths, work.block_samples):
            part, start, stop = plant(traces, rows_now, level, long, slope_decades, noise, phases, rng)
            table = find_plateaus(part, settings, noise, _taken(alignment, rows_now), phases)
            more_away, more_longer = _matched(table, start, stop, level, part)
            away, longer = away + more_away, longer + more_longer
            planted[a, b] += int((stop > start).sum())
        found[a, b] = len(away)
        if away:
            level_bias[a, b], length_bias[a, b] = float(np.median(away)), float(np.median(longer))
    low, high = wilson_interval(found, planted)
    with np.errstate(invalid="ignore", divide="ignore"):
        efficiency = found / planted
    false = int(molecules[rows].sum()) if blank else 0
    false_low, false_high = poisson_interval(false)
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


def _molecules(
    traces: TraceSet,
    settings: PlateauSettings,
    noise: NoiseModel,
    alignment: Alignment,
    phases: Sequence[str],
    work: Work,
) -> Integers:
    """Return the number of plateaus below 0.1 G0 in each trace as it is."""
    counts = np.zeros(traces.traces, np.int64)
    spans = traces.blocks(work)
    for done, (first, last) in enumerate(spans):
        work.tell("looking at the traces as they are", done, len(spans), "blocks")
        block = traces.block(first, last)
        table = find_plateaus(block, settings, noise, _taken(alignment, np.arange(first, last)), phases)
        np.add.at(counts, first + table.trace[table.level_g0 < METAL_FROM_G0], 1)
    return counts


def _parts(rows: Integers, lengths: Integers, samples: int) -> list[Integers]:
    """Return the rows in parts of about ``samples`` samples each."""
    part = np.cumsum(lengths[rows]) // max(samples, 1)
    return np.split(rows, np.flatnonzero(np.diff(part)) + 1)


def _grid(
    traces: TraceSet,
    settings: PlateauSettings,
    noise: NoiseModel,
    conductance_g0: npt.ArrayLike | None,
    length: npt.ArrayLike | None,
) -> tuple[Floats, Floats]:
    """Return the conductances and lengths to plant, ascending."""
    if conductance_g0 is None:
        low = 3 * noise.floor_sigma_g0
        conductance_g0 = np.geomspace(low, max(1e-2, 10 * low), 8)
    if length is None:
        step = np.nanmedian(np.abs(np.diff(traces.block(0, 1).trace_drive(0)))) if traces.lengths[0] > 1 else 1.0
        shortest = shortest_molecule(settings, noise, traces.drive.is_displacement, float(step))
        shortest = max(1.25 * shortest, 20 * step)
        length = np.geomspace(shortest, max(500 * step, 10 * shortest), 5)
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
) -> tuple[list[float], list[float]]:
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
    return away, longer


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
