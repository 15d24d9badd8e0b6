"""The 2D conductance-displacement histogram."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
import numpy.typing as npt

from meseta.histograms import displacement_kernels
from meseta.histograms.counting import saturation_level
from meseta.histograms.grids import anchored_grid, axis_range
from meseta.histograms.lookup import Lookup, lookup_of
from meseta.histograms.region import Region, region_of
from meseta.histograms.results import DisplacementHistogram, Grid
from meseta.intake.alignment import Alignment
from meseta.recipe.histogram import DisplacementHistogramSettings, HistogramSettings
from meseta.segmentation.results import NoiseModel, PlateauTable
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["displacement_counts", "displacement_edges", "displacement_of_selection", "displacement_zero"]


def displacement_counts(
    traces: TraceSet,
    frame: DisplacementHistogramSettings,
    settings: HistogramSettings,
    noise: NoiseModel,
    alignment: Alignment,
    kept: npt.NDArray[np.bool_],
    phases: Sequence[str],
    edges: npt.NDArray[np.float64] | None = None,
    zero: Alignment | None = None,
) -> DisplacementHistogram:
    """Count the samples of the kept, aligned traces of a block by displacement and conductance.

    Parameters
    ----------
    traces : TraceSet
        A block of traces in memory.
    frame : DisplacementHistogramSettings
        ``[displacement_histogram]``.
    settings : HistogramSettings
        Axis, range and region of ``[histogram]``.
    noise, alignment
        Of the same traces.
    kept : (traces,) bool
        Traces that take part; those without a zero of displacement are left out and counted.
    phases : sequence of str
    edges : (columns + 1,) float64, optional
        Of the displacement axis, from :func:`displacement_edges`; ``frame`` in the drive's unit where not given.
    zero : Alignment, optional
        What the displacement is counted from, from :func:`displacement_zero`; the zero of ``alignment`` (on which the
        region rests in any case) where not given.

    Returns
    -------
    DisplacementHistogram
        Half-open bins on float64 edges on both axes.
    """
    grid = displacement_grid(frame, settings, noise)
    if edges is None:
        edges = np.linspace(frame.low_nm, frame.high_nm, frame.bins + 1)
    region = region_of(traces, settings, noise, alignment, phases)
    used = np.asarray(kept, bool) & (region.phase_end > region.phase_begin)
    origin = (zero or alignment).zero_drive
    rows = np.flatnonzero(used & np.isfinite(origin)).astype(np.int64)
    lookup = lookup_of(grid, saturation_level(noise))
    counts = _count(traces, rows, region, origin, edges, lookup, grid.bins)
    empty = np.empty((0, 0))
    unit = f"counts / trace / {traces.drive.unit} / {'decade' if grid.axis == 'logarithmic' else 'G0'}"
    frame_only = DisplacementHistogram(grid, edges, traces.drive.unit, counts, 0, 0, empty, unit)
    return frame_only.with_counts(frame_only.counts, len(rows), int(used.sum()) - len(rows))


def _count(
    traces: TraceSet,
    rows: npt.NDArray[np.int64],
    region: Region,
    zero: npt.NDArray[np.float64],
    edges: npt.NDArray[np.float64],
    lookup: Lookup,
    bins: int,
) -> npt.NDArray[np.int64]:
    """Return the (columns, bins) counts of the chosen rows."""
    drive, origin = traces.drive, traces.offsets[:-1]
    values = np.ascontiguousarray(traces.conductance)
    start, step = np.ascontiguousarray(drive.start), np.ascontiguousarray(drive.step)
    tally = np.zeros((2, len(edges) - 1, len(lookup.column)), np.uint32)
    if drive.relative is None and traces.quality is None and (step[rows] != 0).all():
        displacement_kernels.count_stepped_grid(
            values, rows, region.begin, region.end, origin, start, step, zero, edges,
            lookup.table, lookup.thresholds, lookup.most_compares, tally,
        )  # fmt: skip
    else:
        quality = np.empty(0, np.uint8) if traces.quality is None else traces.quality.read(0, traces.samples)
        relative = np.empty(0, np.float32) if drive.relative is None else drive.relative.read(0, traces.samples)
        displacement_kernels.count_explicit_grid(
            values, np.ascontiguousarray(quality), rows, region.begin, region.end, origin, start, step,
            np.ascontiguousarray(relative), zero, edges, lookup.table, lookup.thresholds, tally,
        )  # fmt: skip
    counts = np.zeros((len(edges) - 1, bins), np.int64)
    inside = np.flatnonzero(lookup.column < bins)  # no two intervals are the same bin
    counts[:, lookup.column[inside]] = tally[0, :, inside].T.astype(np.int64) + tally[1, :, inside].T
    return counts


def displacement_zero(
    traces: TraceSet, frame: DisplacementHistogramSettings, alignment: Alignment, plateaus: PlateauTable | None
) -> Alignment:
    """Return what the displacement of every trace is counted from.

    Parameters
    ----------
    traces : TraceSet
    frame : DisplacementHistogramSettings
        ``aligned_at``; with plateaus, the last one of a trace between ``event_low_g0`` and ``event_high_g0`` counts.
    alignment : Alignment
        Returned as it is where ``aligned_at`` is "zero".
    plateaus : PlateauTable, optional
        Of all traces; needed for the other events.

    Returns
    -------
    Alignment
        The drive half way between the last sample before the event and the first after it; NaN where a trace has none.
    """
    if frame.aligned_at == "zero" or plateaus is None:
        return alignment
    inside = (plateaus.level_g0 >= frame.event_low_g0) & (plateaus.level_g0 < frame.event_high_g0)
    trace = plateaus.trace[inside]
    edge = (plateaus.start if frame.aligned_at == "plateau_start" else plateaus.stop)[inside]
    last = np.flatnonzero(np.diff(trace, append=-1))  # rows are sorted by trace, then start
    before = np.full(traces.traces, -1, np.int64)
    before[trace[last]] = edge[last] - 1
    zero = np.full(traces.traces, np.nan)
    found = np.flatnonzero(before >= 0)
    zero[found] = _drive_after(traces, found, before[found])
    return Alignment(zero, before, np.where(np.isfinite(zero), 0, 1).astype(np.uint8), alignment.level_g0)


def _drive_after(
    traces: TraceSet, rows: npt.NDArray[np.int64], sample: npt.NDArray[np.int64]
) -> npt.NDArray[np.float64]:
    """Return the drive half way between a sample of each row and the next one."""
    drive = traces.drive
    if drive.relative is None:
        middle: npt.NDArray[np.float64] = drive.start[rows] + drive.step[rows] * (sample + 0.5)
        return middle
    at = traces.offsets[rows] + sample
    ends = np.minimum(at + 2, traces.offsets[rows + 1])
    pairs = [drive.relative.read(int(first), int(last)) for first, last in zip(at, ends, strict=True)]
    return drive.start[rows] + np.array([float(pair.mean(dtype=np.float64)) for pair in pairs])


def displacement_edges(
    traces: TraceSet, frame: DisplacementHistogramSettings, alignment: Alignment
) -> npt.NDArray[np.float64]:
    """Return the edges of the displacement axis.

    The recipe's where the drive is in nm.  A drive in its own unit has no such scale: the axis then runs to where nine
    of ten aligned traces end, and a quarter of that to the other side of the zero (from at most 200 traces).
    """
    rows = np.flatnonzero(np.isfinite(alignment.zero_drive))
    if traces.drive.is_displacement or len(rows) == 0:
        return np.linspace(frame.low_nm, frame.high_nm, frame.bins + 1)
    rows = rows[np.linspace(0, len(rows) - 1, min(200, len(rows))).astype(np.int64)]
    ends = np.array([_drive_ends(traces, int(row)) for row in rows]) - alignment.zero_drive[rows, None]
    high = float(np.quantile(ends.max(1), 0.9))
    if not high > 0:
        return np.linspace(float(ends.min()), 0.0, frame.bins + 1)
    low = max(float(np.quantile(ends.min(1), 0.1)), -high / 4)
    return np.linspace(min(low, 0.0), high, frame.bins + 1)


def _drive_ends(traces: TraceSet, row: int) -> tuple[float, float]:
    """Return the drive at the first and the last sample of a trace."""
    begin, end = int(traces.offsets[row]), int(traces.offsets[row + 1])
    start = float(traces.drive.start[row])
    if traces.drive.relative is not None:
        return start, start + float(traces.drive.relative.read(end - 1, end)[0])
    return start, start + float(traces.drive.step[row]) * (end - begin - 1)


def displacement_grid(frame: DisplacementHistogramSettings, settings: HistogramSettings, noise: NoiseModel) -> Grid:
    """Return the conductance axis of the 2D histogram: the range of the 1D one, in its own bins of equal width."""
    if settings.edges_g0:
        low, high = settings.edges_g0[0], settings.edges_g0[-1]
    else:
        low, high = axis_range(settings.axis, settings.low_g0, settings.high_g0, noise)
    return anchored_grid(settings.axis, low, high, frame.bins_per_decade, frame.bin_width_g0)


def displacement_of_selection(
    everything: DisplacementHistogram,
    kept: npt.NDArray[np.bool_],
    count: Callable[[tuple[int, int], npt.NDArray[np.bool_]], DisplacementHistogram],
    spans: Sequence[tuple[int, int]],
    work: Work,
) -> DisplacementHistogram:
    """Return the exact 2D histogram of a selection, counting only the smaller of it and its complement.

    Parameters
    ----------
    everything : DisplacementHistogram
        Of all traces.
    kept : (traces,) bool
    count : callable
        Counts the chosen traces of one span of traces; ``chosen`` covers all traces.
    spans : sequence of (int, int)
        Blocks of traces; those without a chosen trace are not read.
    work : Work
    """
    if kept.all():
        return everything
    few = bool(2 * kept.sum() <= len(kept))
    chosen = kept if few else ~kept
    needed = [span for span in spans if chosen[span[0] : span[1]].any()]
    if not needed:
        return everything.with_counts(np.zeros_like(everything.counts), 0, 0)
    sizes = [last - first for first, last in needed]
    parts = work.each(lambda span: count(span, chosen), needed, "selecting in the 2D histogram", sizes=sizes)
    part = DisplacementHistogram.summed(parts)
    if few:
        return part
    return everything.with_counts(
        everything.counts - part.counts, everything.traces - part.traces, everything.not_aligned - part.not_aligned
    )
