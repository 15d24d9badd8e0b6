"""The peak fit of a histogram, from starting values to the table."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter1d

from meseta.histograms.results import ConductanceHistogram, CountMatrix, Resampling
from meseta.peaks.calibration import CalibrationErrors
from meseta.peaks.choosing import Chooser
from meseta.peaks.doubts import weakest_peak
from meseta.peaks.fitting import fit_model, refit
from meseta.peaks.memory import extra_widening
from meseta.peaks.results import PeakFit
from meseta.peaks.shoulders import bare_shoulder
from meseta.peaks.stretch import FittedWindow
from meseta.peaks.systematic import OtherCounts, systematic_shifts
from meseta.peaks.tabulate import empty_fit, tabulate
from meseta.peaks.templates import Template, background_template
from meseta.peaks.windows import Floor, Start, Window, usable_range
from meseta.recipe.peaks import PeakSettings
from meseta.segmentation.results import PlateauTable
from meseta.work import Work

__all__ = ["fit_histogram"]

Floats = npt.NDArray[np.float64]

_BCA_GROUPS = 200


def fit_histogram(
    histogram: ConductanceHistogram,
    settings: PeakSettings,
    resampling: Resampling | None = None,
    counts: CountMatrix | None = None,
    plateaus: PlateauTable | None = None,
    work: Work | None = None,
    *,
    floor: Floor | None = None,
    template: npt.ArrayLike | None = None,
    blank: npt.NDArray[np.bool_] | None = None,
    others: Sequence[OtherCounts] = (),
    calibration: CalibrationErrors | None = None,
) -> PeakFit:
    """Fit the peaks of a histogram.

    Parameters
    ----------
    histogram : ConductanceHistogram
    settings : PeakSettings
    resampling : Resampling, optional
        Without it there are no intervals, and ``status`` says so.
    counts : CountMatrix, optional
        Needed to propose the number of peaks from traces left out.
    plateaus : PlateauTable, optional
        Plateaus of the selected traces, for the median plateau conductance beside the fit.
    work : Work, optional
    floor : Floor, optional
        Reading with the contact open: no peak is sought there.
    template : (bins,) array_like, optional
        Counts of a blank recording or a mean tunnelling trace on the histogram's grid, for those backgrounds; its noise
        is then not in the intervals.
    blank : (traces,) bool, optional
        Traces of ``counts`` that are a blank's, for the background "template"; they are resampled too.
    others : sequence of OtherCounts
        What other choices of the analysis would have counted, for the systematic part.
    calibration : CalibrationErrors, optional
        Standard errors of the calibration, for the systematic part.

    Returns
    -------
    PeakFit

    Raises
    ------
    CallError
        Where a background needs a template and none is at hand.

    Notes
    -----
    Every group of peaks is fitted on its own stretch of the axis, 4 widths to either side, stated in the table.
    """
    work = work or Work()
    shape = background_template(histogram, settings, counts, plateaus, resampling, template, blank, work)
    chooser = Chooser(histogram, settings, resampling, counts, usable_range(histogram, floor), shape.counts)
    windows, reason, notes = chooser.windows()
    if not windows:
        return empty_fit(histogram, settings, reason)
    parts = [_fitted(chooser, window, others, shape, work) for window in windows]
    factor, dropped = 1.0 if resampling is None else resampling.widen, []
    while not settings.peaks and (weak := _not_to_be_proposed(parts, plateaus, histogram.traces, factor)) is not None:
        windows = chooser.without(windows, weak)
        dropped.append(weak)
        if not windows:
            return replace(empty_fit(histogram, settings, "no peak found"), notes=chooser.not_proposed(dropped, ()))
        parts = [_fitted(chooser, window, others, shape, work) for window in windows]
    table = tabulate(histogram, settings, parts, resampling, plateaus, calibration)
    return replace(table, notes=(*notes, *chooser.not_proposed(dropped, windows)))


def _not_to_be_proposed(
    parts: list[FittedWindow], plateaus: PlateauTable | None, traces: int, factor: float
) -> Start | None:
    """Return a peak that is too weak, or a shoulder without plateaus; None where all may stand."""
    weak = weakest_peak(parts, factor)
    return bare_shoulder(parts, plateaus, traces) if weak is None and plateaus is not None else weak


def _fitted(
    chooser: Chooser, window: Window, others: Sequence[OtherCounts], shape: Template, work: Work
) -> FittedWindow:
    """Return the fit of one stretch, its refits and its shifts."""
    work.check()
    weights = _weights(chooser, window)
    fitted = fit_model(chooser.model(window), chooser.data(window), weights)
    inside = slice(window.first, window.last)
    drawn = chooser.resampling
    templates = shape.draws[:, inside] if len(shape.draws) else None
    replicates = None if drawn is None else refit(fitted, drawn.counts[:, inside], work, weights, templates)
    left_out = None
    if chooser.settings.intervals == "bca" and (groups := chooser.blocks(_BCA_GROUPS)) is not None:
        left_out = refit(fitted, (groups.sum(axis=0) - groups)[:, inside], work, weights)
    wider = np.ones(fitted.model.peaks)
    if chooser.settings.method == "likelihood":
        wider = extra_widening(fitted, chooser.counts, drawn, (window.first, window.last))
    shifts = systematic_shifts(fitted, chooser.varied, window, chooser.histogram, others)
    return FittedWindow(window, fitted, replicates, left_out, shifts, tuple(chooser.reached(window, fitted)), wider)


def _weights(chooser: Chooser, window: Window) -> Floats | None:
    """Return the weights of least squares; None for the likelihood.

    Variances are smoothed over a few bins: where they follow each bin's own chance, low bins weigh too much.
    """
    if chooser.settings.method == "likelihood":
        return None
    if chooser.resampling is None:
        variance = chooser.histogram.counts.astype(float)
    else:
        variance = chooser.resampling.counts.var(axis=0)
    smooth = gaussian_filter1d(variance, 3.0, mode="nearest")[window.first : window.last]
    return 1.0 / np.maximum(smooth, 1e-3 * max(float(smooth.max()), 1e-300))
