"""One stretch of the axis: what was fitted on it, and the intervals of its refits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.peaks.fitting import Fitted, Refitted
from meseta.peaks.intervals import Interval, bca_interval, percentile_interval
from meseta.peaks.systematic import Shift
from meseta.peaks.windows import Window

__all__ = ["FittedWindow", "area_sigma", "interval_of"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class FittedWindow:
    """One stretch of the axis with its fit, refits of resampled and of left-out traces, and shifts.

    ``reached`` is the number of traces with a sample within two widths of each peak, ``wider`` what stretches the
    interval of each position further, where it remembers more than the histogram as a whole.
    """

    window: Window
    fitted: Fitted
    replicates: Refitted | None
    left_out: Refitted | None
    shifts: tuple[Shift, ...]
    reached: tuple[int, ...]
    wider: Floats


def interval_of(part: FittedWindow, column: int, factor: float | Floats) -> Interval:
    """Return the interval of area (0), position (1) or width (2) of every peak."""
    fitted, replicates = part.fitted, part.replicates
    if replicates is None or not fitted.converged:
        nothing = np.full(fitted.model.peaks, np.nan)
        return Interval(nothing, nothing, nothing)
    estimate, drawn = fitted.peaks[:, column], replicates.peaks[:, :, column]
    if part.left_out is None:
        interval = percentile_interval(estimate, drawn, factor)
    else:
        interval = bca_interval(estimate, drawn, part.left_out.peaks[:, :, column], factor)
    if column in (0, 2):  # an area and a width are never negative, however far the factor stretches
        return Interval(np.maximum(interval.low, 0.0), interval.high, interval.sigma)
    return interval


def area_sigma(fitted: Fitted, peak: int, interval: Interval) -> float:
    """Return the standard error of an area: from the refits, else from the counts with their over-dispersion."""
    if np.isfinite(interval.sigma[peak]):
        return float(interval.sigma[peak])
    place = np.flatnonzero(fitted.free == 4 * peak)
    if not len(place):
        return 0.0
    variance = fitted.covariance[place[0], place[0]]
    return float(np.sqrt(variance * max(fitted.score / fitted.degrees_of_freedom, 1.0)))
