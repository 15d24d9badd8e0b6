"""The count matrix: samples of every trace in every bin, in one pass."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from meseta.histograms import counting_kernels
from meseta.histograms.grids import axis_range, histogram_grid, stored_grid
from meseta.histograms.lookup import Lookup, lookup_of
from meseta.histograms.region import nm_a_sample, region_of
from meseta.histograms.results import EXCLUDED, CountMatrix, Grid
from meseta.intake.alignment import Alignment
from meseta.recipe.histogram import HistogramSettings
from meseta.segmentation.results import NoiseModel
from meseta.traces import TraceSet

__all__ = ["count_traces", "saturation_level", "with_bins"]

_FULL_SCALE_SHARE = 0.99
_SMALL = 65_535


def saturation_level(noise: NoiseModel) -> float:
    """Return the conductance from which a sample counts as saturated: 99 % of what the amplifier can show."""
    return noise.saturation_g0 * _FULL_SCALE_SHARE if np.isfinite(noise.saturation_g0) else np.inf


def count_traces(
    traces: TraceSet,
    settings: HistogramSettings,
    noise: NoiseModel,
    alignment: Alignment,
    phases: Sequence[str],
) -> CountMatrix:
    """Count the samples of every trace on the stored grid.

    Every sample of the phase is counted once: in a bin, or in exactly one column of ``excluded``.

    Parameters
    ----------
    traces : TraceSet
        A block of traces in memory.
    settings : HistogramSettings
        Axis, range and region of ``[histogram]``.
    noise : NoiseModel
    alignment : Alignment
        Rows of the same traces.
    phases : sequence of str
        Phases that take part.

    Returns
    -------
    CountMatrix
        uint16 counts, uint32 where a trace has more than 65,535 samples.

    Notes
    -----
    Bins are half-open on float64 edges; a float32 sample is compared as the number it is, and the top edge counts as
    over.  NaN, infinities, subnormals and zeros of both signs are told apart.
    """
    grid = stored_grid(settings, noise)
    region = region_of(traces, settings, noise, alignment, phases)
    counts, excluded = count_ranges(traces, grid, lookup_of(grid, saturation_level(noise)), region.begin, region.end)
    excluded[:, EXCLUDED.index("outside")] += region.outside
    excluded[:, EXCLUDED.index("floor")] += region.floor
    return CountMatrix(grid, counts, excluded, nm_a_sample(traces, region), region.phase_end > region.phase_begin)


def count_ranges(
    traces: TraceSet,
    grid: Grid,
    lookup: Lookup,
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
) -> tuple[npt.NDArray[np.unsignedinteger], npt.NDArray[np.int64]]:
    """Count samples ``begin`` to ``end`` of each trace; return counts (traces, bins) and exclusions by reason."""
    longest = int((end - begin).max(initial=0))
    counts = np.zeros((traces.traces, grid.bins), np.uint16 if longest <= _SMALL else np.uint32)
    excluded = np.zeros((traces.traces, len(EXCLUDED)), np.int64)
    quality = np.empty(0, np.uint8) if traces.quality is None else traces.quality.read(0, traces.samples)
    counting_kernels.count_rows(
        np.ascontiguousarray(traces.conductance), np.ascontiguousarray(quality, np.uint8), begin, end,
        lookup.table, lookup.thresholds, lookup.most_compares, lookup.column, counts, excluded,
        EXCLUDED.index("saturated"), EXCLUDED.index("untrusted"),
    )  # fmt: skip
    return counts, excluded


def with_bins(counts: CountMatrix, settings: HistogramSettings, noise: NoiseModel) -> CountMatrix:
    """Return the same counts on the fine bins within the histogram's ends, and how many make one of its bins.

    Nothing is counted anew; stored bins beyond the ends become under or over.

    Raises
    ------
    RecipeError
        Where the bins are no sum of the stored ones.
    """
    if counts.grid.given:
        return counts
    low, high = axis_range(settings.axis, settings.low_g0, settings.high_g0, noise)
    first, last, merge = histogram_grid(counts.grid, low, high, settings.bins_per_decade, settings.bin_width_g0)
    return counts.trimmed(first, last, merge)
