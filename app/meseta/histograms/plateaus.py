"""The plateau histogram: distribution of plateau conductance, one plateau one vote, or weighted by length."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import EXCLUDED, ConductanceHistogram, Grid, Resampling
from meseta.segmentation.results import PlateauTable

__all__ = ["plateau_histogram"]

Floats = npt.NDArray[np.float64]


def plateau_histogram(
    plateaus: PlateauTable,
    grid: Grid,
    resampling: Resampling,
    by_length: bool,
    weak_traces: int = 20,
) -> ConductanceHistogram:
    """Build the histogram of plateau conductances of the kept traces, on the bins of the conductance histogram.

    Parameters
    ----------
    plateaus : PlateauTable
        Of all traces; those of traces that do not take part are left out.
    grid : Grid
    resampling : Resampling
        Whose rows take part, and whose draws of traces make the band.
    by_length : bool
        Weight every plateau by its length in the drive's unit instead of by 1.
    weak_traces : int
        Bins that fewer traces reach are weak.

    Returns
    -------
    ConductanceHistogram
        ``counts`` are plateaus in each bin; the density is plateaus (or length) per trace per decade or G0.  Plateaus
        below, above or without a conductance are in ``excluded``.
    """
    place_of = np.full(int(max(resampling.rows.max(initial=-1), plateaus.trace.max(initial=-1))) + 1, -1, np.int64)
    place_of[resampling.rows] = np.arange(len(resampling.rows))
    mine = plateaus.take(place_of[plateaus.trace] >= 0)
    traces = len(resampling.rows)
    at = np.searchsorted(grid.edges_g0, mine.level_g0, side="right") - 1
    finite = np.isfinite(mine.level_g0)
    inside = finite & (at >= 0) & (at < grid.bins)
    row, place = place_of[mine.trace[inside]], at[inside]
    weight = mine.length_drive[inside] if by_length else np.ones(len(row))
    votes = np.bincount(place, minlength=grid.bins).astype(np.int64)
    density = np.bincount(place, weight, grid.bins) / (max(traces, 1) * grid.widths)
    low, high = resampling.interval(density, _replicates(row, place, weight, resampling, grid))
    unit = mine.drive_unit[0] if by_length and len(mine) else "plateaus"
    excluded = dict.fromkeys(EXCLUDED, 0)
    excluded["under"] = int((finite & (at < 0)).sum())
    excluded["over"] = int((finite & (at >= grid.bins)).sum())
    excluded["nan"] = int((~finite).sum())
    return ConductanceHistogram(
        grid=grid,
        counts=votes,
        traces=traces,
        traces_in_bin=np.bincount(np.unique(row * grid.bins + place) % grid.bins, minlength=grid.bins).astype(np.int64),
        density=density,
        density_low=np.maximum(low, 0.0),
        density_high=high,
        density_unit=f"{unit} / trace / {'decade' if grid.axis == 'logarithmic' else 'G0'}",
        excluded=excluded,
        scheme=resampling.scheme,
        scale=np.where(votes > 0, density / np.maximum(votes, 1), 1 / (max(traces, 1) * grid.widths)),
        weak_traces=weak_traces,
    )


def _replicates(
    row: npt.NDArray[np.int64], place: npt.NDArray[np.int64], weight: Floats, drawn: Resampling, grid: Grid
) -> Floats:
    """Return the density of every replicate (replicates, bins)."""
    order = np.argsort(place, kind="stable")
    row, place, weight = row[order], place[order], weight[order]
    result = np.zeros((len(drawn.weights), grid.bins))
    cuts = np.searchsorted(place, np.arange(grid.bins + 1))
    for column in np.unique(place):
        span = slice(cuts[column], cuts[column + 1])
        result[:, column] = drawn.weights[:, row[span]] @ weight[span]
    size = np.maximum(drawn.weights.sum(1, dtype=np.int64), 1)[:, None]
    return result / (size * grid.widths)
