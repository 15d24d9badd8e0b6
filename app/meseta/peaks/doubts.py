"""What the number of traces, the refits and the residuals make doubtful about a peak."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.ndimage import gaussian_filter1d

from meseta.histograms.results import ConductanceHistogram, Resampling
from meseta.peaks.intervals import Interval
from meseta.peaks.model import WIDTH_TO_FWHM
from meseta.peaks.stretch import FittedWindow, area_sigma, interval_of
from meseta.peaks.verdicts import FEW_TRACES
from meseta.peaks.windows import Start

__all__ = ["sample_verdicts", "weakest_peak"]

_POOR = 0.06
_NO_TRACES = "no interval: a histogram alone does not know its traces"


def weakest_peak(parts: Sequence[FittedWindow], factor: float = 1.0) -> Start | None:
    """Return the peak with the smallest area in standard errors, if that is below three: not to be proposed.

    ``factor`` stretches the replicates, as in :func:`interval_of`.
    """
    strength = {}
    for part in parts:
        interval = interval_of(part, 0, factor)
        for peak, start in enumerate(part.window.starts):
            area, sigma = part.fitted.peaks[peak, 0], area_sigma(part.fitted, peak, interval)
            strength[start] = area / sigma if sigma > 0 else float("inf") if area > 0 else 0.0
    weakest = min(strength, key=lambda start: strength[start])
    return weakest if strength[weakest] < 3.0 else None


def sample_verdicts(
    histogram: ConductanceHistogram,
    part: FittedWindow,
    peak: int,
    intervals: list[Interval],
    resampling: Resampling | None,
) -> list[str]:
    """Return what the number of traces and the refits make doubtful."""
    said, fitted = [], part.fitted
    if part.reached[peak] < min(histogram.weak_traces, histogram.traces / 2):  # few traces are said elsewhere
        said.append(f"weak: reached by {part.reached[peak]} traces")
    elif area_sigma(fitted, peak, intervals[0]) > fitted.peaks[peak, 0] / 3.0:
        said.append("weak: area below three standard errors")
    misfit = _misfit(part, peak, histogram, resampling)
    if misfit > _POOR:
        said.append(f"shape fits poorly: residuals up to {100 * misfit:.0f} % of its height")
    if resampling is None or part.replicates is None:
        said.append(_NO_TRACES)
    else:
        bad = int((~part.replicates.good).sum())
        if bad > 0.05 * len(part.replicates.good):
            said.append(f"{bad} of {len(part.replicates.good)} resampled fits failed")
    if histogram.traces < FEW_TRACES:
        said.append(f"fewer than {FEW_TRACES} traces")
    return said


def _misfit(part: FittedWindow, peak: int, histogram: ConductanceHistogram, resampling: Resampling | None) -> float:
    """Return the largest smoothed residual under a peak, as a share of its height, less what chance explains."""
    model, (_, position, width, _) = part.fitted.model, part.fitted.peaks[peak]
    curves = model.curves(part.fitted.inner)
    step = model.high - model.low
    near = np.abs((model.low + model.high) / 2 - position) < WIDTH_TO_FWHM * width
    height = (curves.components[peak] / step).max()
    if not near.any() or not height > 0:
        return 0.0
    blur = max(0.5 * width / float(np.median(step)), 0.5)
    inside = slice(part.window.first, part.window.last)
    rest = gaussian_filter1d((histogram.counts[inside] - curves.total) / step, blur, mode="nearest")
    chance = np.zeros(len(rest))
    if resampling is not None:
        drawn = gaussian_filter1d(resampling.counts[:100, inside] / step, blur, mode="nearest")
        chance = 2.0 * drawn.std(axis=0)
    return float(np.maximum(np.abs(rest) - chance, 0.0)[near].max() / height)
