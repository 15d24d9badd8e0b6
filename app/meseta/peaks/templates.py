"""Backgrounds with a given shape: a blank recording, or the traces without a plateau, with the noise of that shape."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter1d

from meseta.errors import CallError
from meseta.histograms.resampling import replicate_counts
from meseta.histograms.results import ConductanceHistogram, CountMatrix, Resampling
from meseta.peaks.windows import rebinned
from meseta.recipe.peaks import PeakSettings
from meseta.segmentation.results import PlateauTable
from meseta.work import Work

__all__ = ["Template", "background_template"]

Floats = npt.NDArray[np.float64]
Truths = npt.NDArray[np.bool_]

_SEED = 20_000
_MANY_TRACES = 300
"""So many traces and more are the shape as they are."""
_WIDTHS_BINS = (0.0, 0.7, 1.0, 1.5, 2.0, 3.0, 4.0, 6.0, 8.0)
_POOLED_BINS = 2.0
"""Running mean that tells how sure each bin is, when widths are compared."""


@dataclass(frozen=True)
class Template:
    """Shape of a background on the bins of the histogram.

    Attributes
    ----------
    counts : (bins,) float64
        Empty where the background has a formula.
    draws : (replicates, bins) float64
        The same from resampled traces, draw by draw beside those of the histogram; empty where the shape's own traces
        are not known: then its noise is not in the intervals.
    """

    counts: Floats = field(default_factory=lambda: np.empty(0))
    draws: Floats = field(default_factory=lambda: np.empty((0, 0)))


def background_template(
    histogram: ConductanceHistogram,
    settings: PeakSettings,
    counts: CountMatrix | None,
    plateaus: PlateauTable | None,
    resampling: Resampling | None = None,
    given: npt.ArrayLike | None = None,
    blank: Truths | None = None,
    work: Work | None = None,
) -> Template:
    """Return the shape of a template background; an empty one where none is wanted.

    Parameters
    ----------
    given : (bins,) array_like, optional
        Counts on the histogram's bins that take the place of traces.
    blank : (traces,) bool, optional
        Traces of a blank recording, for "template".

    Raises
    ------
    CallError
        Where a shape is needed and none is at hand.

    Notes
    -----
    In every replicate the shape is made of the traces that were drawn, with the weights of the histogram's own draw;
    traces that take no part in the histogram (a blank's) are drawn independently of it.

    Fewer than 300 traces are smoothed, shape and replicates alike, by the width with which each half of them foretells
    the other best (cross-validation; Stone, J. R. Stat. Soc. B 36, 111 (1974)): else their noise, bin by bin, would
    pass for structure of the background.
    """
    if settings.background not in ("template", "tunnelling"):
        return Template()
    if given is not None:
        shape = np.ascontiguousarray(given, float)
        if shape.shape != histogram.counts.shape:
            raise _no_shape()
        return Template(shape)
    rows = _rows(settings, counts, plateaus, blank)
    if counts is None or counts.shown.bins != len(histogram.counts):
        raise _no_shape()
    shape = _counted(counts, rows)
    if not shape.any():
        what = "no trace is without a plateau" if settings.background == "tunnelling" else "the blank traces are empty"
        raise CallError(what, "peaks.background", "choose another background")
    width = _width(counts, rows) if len(rows) < _MANY_TRACES else 0.0
    if resampling is None:
        return Template(_smoothed(shape, width))
    weights = _weights(rows, resampling, len(counts.counts))
    return Template(_smoothed(shape, width), _smoothed(replicate_counts(counts, rows, weights, work or Work()), width))


def _counted(counts: CountMatrix, rows: npt.NDArray[np.int64]) -> Floats:
    """Return the histogram of some traces."""
    return rebinned(counts.counts[rows].sum(axis=0, dtype=np.int64).astype(float), counts.merge)


def _smoothed(counts: Floats, width_bins: float) -> Floats:
    """Return counts smoothed along the axis by a Gaussian."""
    return np.asarray(gaussian_filter1d(counts, width_bins, axis=-1, mode="nearest")) if width_bins else counts


def _width(counts: CountMatrix, rows: npt.NDArray[np.int64]) -> float:
    """Return the width in bins with which two halves of the traces, every other one, foretell each other best."""
    one, other = _counted(counts, rows[::2]), _counted(counts, rows[1::2])
    if not (one.any() and other.any()):
        return 0.0
    one, other = one / one.sum(), other / other.sum()
    sure = _smoothed(one + other, _POOLED_BINS)
    seen = sure > 0
    misses = [
        np.sum(((_smoothed(one, width) - other) ** 2 + (_smoothed(other, width) - one) ** 2)[seen] / sure[seen])
        for width in _WIDTHS_BINS
    ]
    return _WIDTHS_BINS[int(np.argmin(misses))]


def _rows(
    settings: PeakSettings, counts: CountMatrix | None, plateaus: PlateauTable | None, blank: Truths | None
) -> npt.NDArray[np.int64]:
    """Return the traces that the shape is made of."""
    if settings.background == "template":
        if counts is None or blank is None:
            raise _no_shape()
        return np.flatnonzero(blank & counts.used)
    if counts is None or plateaus is None:
        raise CallError(
            "the background 'tunnelling' is made of the traces without a plateau, and a histogram alone has none",
            "peaks.background",
            "fit from the traces, or choose another background",
        )
    bare = counts.used.copy()
    bare[plateaus.trace[plateaus.kind == "molecule"]] = False
    return np.flatnonzero(bare)


def _weights(rows: npt.NDArray[np.int64], resampling: Resampling, traces: int) -> npt.NDArray[np.uint16]:
    """Return how often each trace of the shape is drawn in each replicate."""
    replicates = len(resampling.weights)
    place = np.full(traces, -1, np.int64)
    place[resampling.rows] = np.arange(len(resampling.rows))
    own = place[rows]
    weights = np.empty((replicates, len(rows)), np.uint16)
    weights[:, own >= 0] = resampling.weights[:, own[own >= 0]]
    apart = int((own < 0).sum())
    if apart:
        random = np.random.default_rng(_SEED)
        weights[:, own < 0] = random.multinomial(apart, np.full(apart, 1.0 / apart), size=replicates)
    return weights


def _no_shape() -> CallError:
    return CallError(
        "the background 'template' needs a shape on the histogram's bins",
        "peaks.background",
        "say in peaks.blank which traces are the blank's, give counts, or choose another background",
    )
