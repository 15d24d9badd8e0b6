"""What the views draw, made off the window's thread from results of the analysis; no number is made here.

Each function is the body of a request: it takes frozen inputs and returns a frozen picture of arrays.  Densities,
counts, plateaus and alignments are the engine's; this module only reduces them to the size of a screen.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from meseta.window.envelope import Curve, gapped, reduced
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.histograms import ConductanceHistogram, CountMatrix, DisplacementHistogram
    from meseta.intake import Alignment
    from meseta.segmentation import PlateauTable

__all__ = [
    "OverlayPicture",
    "StripPicture",
    "SubsetPicture",
    "TracePicture",
    "histogram_of",
    "overlay_picture",
    "scaled_image",
    "strip_picture",
    "trace_picture",
    "usual_top",
]

Floats = npt.NDArray[np.float64]
TRACE_POINTS = 4000
OVERLAY_TRACES = 300
OVERLAY_POINTS = 400
STRIP_COLUMNS = 2000
STRIP_BINS = 120


@dataclass(frozen=True)
class TracePicture:
    """One trace to draw.

    Attributes
    ----------
    trace : int
    curve : Curve
        Displacement from the zero (from the trace's start where it has none), conductance in G0.
    unit : str
        Unit of the drive.
    aligned : bool
        Whether the displacement counts from the zero.
    plateaus : PlateauTable
        Plateaus of this trace alone; empty where none are known yet.
    plateaus_known : bool
    x_start, x_stop : (plateaus,) float64
        Ends of each plateau on the drawn axis.
    """

    trace: int
    curve: Curve
    unit: str
    aligned: bool
    plateaus: PlateauTable
    plateaus_known: bool
    x_start: Floats
    x_stop: Floats
    preview: bool


def _zero_of(analysis: Analysis, trace: int, work: Work) -> float:
    """Return the drive at the zero of one trace; NaN where it has none."""
    if analysis.ready("alignment"):
        alignment: Alignment = analysis.result("alignment", work)
        return float(alignment.zero_drive[trace])
    return float(analysis.preview("alignment", trace, work).zero_drive[0])


def _plateaus_of(analysis: Analysis, trace: int, work: Work) -> PlateauTable | None:
    """Return the plateaus of one trace: those of all traces where at hand, else found for this trace alone."""
    if analysis.ready("plateaus"):
        table: PlateauTable = analysis.result("plateaus", work)
        first, last = np.searchsorted(table.trace, [trace, trace + 1])
        return table.take(np.arange(first, last))
    if analysis.ready("noise"):
        preview: PlateauTable = analysis.preview("plateaus", trace, work)
        return preview
    return None


def trace_picture(analysis: Analysis, trace: int, work: Work) -> TracePicture:
    """Return one trace with its plateaus."""
    one = analysis.traces.block(trace, trace + 1)
    drive = one.trace_drive(0)
    zero = _zero_of(analysis, trace, work)
    aligned = bool(np.isfinite(zero))
    origin = zero if aligned else (float(drive[0]) if len(drive) else 0.0)
    found = _plateaus_of(analysis, trace, work)
    from meseta.segmentation import PlateauTable

    plateaus = PlateauTable.empty() if found is None else found
    x = drive - origin
    last = np.clip(plateaus.stop - 1, 0, max(len(x) - 1, 0))
    return TracePicture(
        trace=trace,
        curve=reduced(x, one.conductance, TRACE_POINTS),
        unit=one.drive.unit,
        aligned=aligned,
        plateaus=plateaus,
        plateaus_known=found is not None,
        x_start=x[plateaus.start] if len(plateaus) else np.empty(0),
        x_stop=x[last] if len(plateaus) else np.empty(0),
        preview=not analysis.ready("plateaus"),
    )


@dataclass(frozen=True)
class OverlayPicture:
    """Many traces as one broken line; ``drawn`` of ``asked`` traces, evenly spread where there are too many."""

    curve: Curve
    drawn: int
    asked: int


def overlay_picture(analysis: Analysis, rows: npt.NDArray[np.int64], work: Work) -> OverlayPicture:
    """Return the traces in ``rows``, or 300 of them evenly spread along the record, as one line."""
    chosen = rows
    if len(rows) > OVERLAY_TRACES:
        chosen = rows[np.linspace(0, len(rows) - 1, OVERLAY_TRACES).round().astype(np.int64)]
    alignment: Alignment | None = analysis.result("alignment", work) if analysis.ready("alignment") else None
    curves = []
    for row in chosen:
        work.check()
        trace = int(row)
        drive = analysis.traces.trace_drive(trace)
        zero = np.nan if alignment is None else alignment.zero_drive[trace]
        if not len(drive) or (alignment is not None and np.isnan(zero)):
            continue
        origin = drive[0] if np.isnan(zero) else zero
        curves.append(reduced(drive - origin, analysis.traces.trace_conductance(trace), OVERLAY_POINTS))
    return OverlayPicture(gapped(curves), len(curves), len(rows))


def histogram_of(analysis: Analysis, mask: npt.NDArray[np.bool_], work: Work) -> ConductanceHistogram:
    """Return the conductance histogram of some traces, without a band: the engine's own masked sum."""
    from meseta import histograms

    counts: CountMatrix = analysis.result("counts", work)
    return histograms.conductance_histogram(counts, mask, analysis.recipe.histogram, None)


def displacement_histogram_of(analysis: Analysis, mask: npt.NDArray[np.bool_], work: Work) -> DisplacementHistogram:
    """Return the 2D histogram of some traces, exact: the engine counts the smaller of them and the others."""
    from meseta import histograms
    from meseta.analysis import phases_of

    names = ("noise", "alignment", "displacement_edges", "displacement_zero")
    noise, alignment, edges, zero = (analysis.result(name, work) for name in names)
    recipe, source = analysis.recipe, analysis.traces.only("conductance")

    def count(span: tuple[int, int], chosen: npt.NDArray[np.bool_]) -> DisplacementHistogram:
        first, last = span
        return histograms.displacement_counts(
            source.block(first, last),
            recipe.displacement_histogram,
            recipe.histogram,
            noise,
            alignment.block(first, last),
            chosen[first:last],
            phases_of(recipe.histogram.direction),
            edges,
            zero.block(first, last),
        )

    everything = analysis.result("displacement_all", work)
    return histograms.displacement_of_selection(everything, mask, count, source.blocks(work), work)


@dataclass(frozen=True)
class SubsetPicture:
    """What the conditions pick: which traces, and their own distributions over the whole."""

    mask: npt.NDArray[np.bool_]
    of: int
    histogram: ConductanceHistogram | None
    sentence: str


@dataclass(frozen=True)
class StripPicture:
    """The temporal histogram at several coarsenesses.

    Attributes
    ----------
    levels : tuple of (columns, bins) float32
        Counts a trace, averaged over 2**k consecutive traces at level k + ``first_level``.
    u_low, u_high : float
        Ends of the conductance axis as drawn.
    scale : str
        How the images divide their colours.
    images : tuple of (columns, bins) uint8
        The levels as places in a colour table.
    """

    levels: tuple[npt.NDArray[np.float32], ...]
    traces: int
    axis: str
    u_low: float
    u_high: float
    scale: str
    images: tuple[npt.NDArray[np.uint8], ...]

    def level_for(self, first: float, last: float) -> int:
        """Return the level that shows traces ``first`` to ``last`` in at most about 2,000 columns."""
        span = max(last - first, 1.0)
        level = max(int(np.ceil(np.log2(span / STRIP_COLUMNS))), 0)
        return min(level, len(self.levels) - 1)


def strip_picture(counts: CountMatrix, scale: str, work: Work) -> StripPicture:
    """Return the pyramid of the temporal histogram, with its images on a colour scale."""
    edges = counts.grid.u_edges
    merge = max(counts.grid.bins // STRIP_BINS, 1)
    bins = counts.grid.bins // merge
    traces = len(counts.counts)
    base = np.empty((traces, bins), np.float32)
    for first in range(0, traces, 2000):
        work.check()
        block = counts.counts[first : first + 2000, : bins * merge]
        base[first : first + 2000] = block.reshape(len(block), bins, merge).sum(axis=2, dtype=np.uint32)
    levels = [base]
    while len(levels[-1]) > STRIP_COLUMNS // 2:
        work.check()
        levels.append(_halved(levels[-1]))
    images = []
    for level in levels:
        work.check()
        images.append(scaled_image(level, scale, usual_top(level[:: max(len(level) // 500, 1)])))
    ends = float(edges[0]), float(edges[bins * merge])
    return StripPicture(tuple(levels), traces, counts.grid.axis, *ends, scale, tuple(images))


def _halved(columns: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    """Return the means of neighbouring columns; a last odd one stands alone."""
    pairs = len(columns) // 2 * 2
    halved: npt.NDArray[np.float32] = (columns[0:pairs:2] + columns[1:pairs:2]) / np.float32(2)
    return np.concatenate([halved, columns[pairs:]]) if pairs < len(columns) else halved


def usual_top(density: npt.NDArray[np.floating]) -> float:
    """Return a density that only one filled cell in 50 exceeds: the last colour stands for it and above."""
    positive = density[density > 0]
    return float(np.quantile(positive, 0.98)) if positive.size else 0.0


def scaled_image(density: npt.NDArray[np.floating], scale: str, top: float | None = None) -> npt.NDArray[np.uint8]:
    """Return densities as places 0..255 in a colour table; 0 is reserved for empty.

    Parameters
    ----------
    density : array
        Not negative; NaN counts as empty.
    scale : str
        "linear", "square_root" or "logarithmic" (from the smallest density above zero).
    top : float, optional
        Density of the last colour; the largest where not given.
    """
    values = np.nan_to_num(np.asarray(density, np.float32), nan=0.0)
    largest = float(values.max(initial=0.0)) if top is None else float(top)
    if largest <= 0:
        return np.zeros(values.shape, np.uint8)
    positive = values > 0
    if scale == "logarithmic":
        smallest = float(values[positive].min())
        decades = max(np.log10(largest / smallest), 1e-3)
        with np.errstate(divide="ignore"):
            share = np.where(positive, 0.08 + 0.92 * np.log10(values / smallest) / decades, 0.0)
    else:
        share = values / largest
        if scale == "square_root":
            share = np.sqrt(share)
    image = np.clip(share * 255, 0, 255).astype(np.uint8)
    image[positive & (image == 0)] = 1
    return image
