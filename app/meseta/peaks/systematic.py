"""How far positions move with choices that could as well have been made otherwise."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import ConductanceHistogram
from meseta.peaks.fitting import Fitted, fit_model
from meseta.peaks.model import WIDTH_TO_FWHM, Model
from meseta.peaks.windows import Window, rebinned

__all__ = ["OtherCounts", "Shift", "half_spread", "systematic_shifts"]

Floats = npt.NDArray[np.float64]
ModelMaker = Callable[[Window, int, int, int, str], Model]

_MUCH_WORSE = 2.0
_LEAST_LEFT = 0.3
_SMOOTH = ("constant", "linear", "exponential", "power_law")


@dataclass(frozen=True)
class Shift:
    """By how much the positions of one stretch move on the axis, (peaks,) float64, with another choice."""

    kind: str
    choice: str
    moved_u: Floats
    counted: bool = True


@dataclass(frozen=True)
class OtherCounts:
    """Counts of the histogram's bins as another choice would have given them, beside those of the choice made.

    Attributes
    ----------
    choice : str
        What was changed ("region whole phase").
    counts, reference : (bins,) float64
        Of the same traces, with the other choice and with the one that was made: their difference is no chance.
    counted : bool
        Whether it is part of the systematic error, or only shown.
    """

    choice: str
    counts: Floats
    reference: Floats
    counted: bool = True


def systematic_shifts(
    fitted: Fitted,
    make: ModelMaker,
    window: Window,
    histogram: ConductanceHistogram,
    others: Sequence[OtherCounts] = (),
) -> tuple[Shift, ...]:
    """Return by how much each position moves, on the axis, with choices of the fit and of the analysis.

    Parameters
    ----------
    fitted : Fitted
        The fit as chosen.
    make : callable
        Makes a model of the window over other bins: (window, first, last, merge, background).
    window : Window
    histogram : ConductanceHistogram
    others : sequence of OtherCounts
        What other choices of the analysis would have counted.

    Returns
    -------
    tuple of Shift
        Bin width, fit range and background, then the others.  NaN where the changed fit failed, or another background
        fits much worse (deviance more than doubled): that choice could not be defended.
    """
    first, last = window.first, window.last
    bins, background = last - first, fitted.model.background
    trim = max(bins // 12, 1)
    variants: list[tuple[str, tuple[int, int, int, str]]] = [("bins twice as wide", (first, last, 2, background))]
    if bins - 2 * trim >= 8 + 3 * len(window.starts):
        variants.append(("range narrower by a sixth", (first + trim, last - trim, 1, background)))
    wide = (max(first - trim, 0), min(last + trim, histogram.grid.bins))
    if wide != (first, last):
        variants.append(("range wider by a sixth", (*wide, 1, background)))
    variants += [
        (f"background {name.replace('_', ' ')}", (first, last, 1, name))
        for name in _SMOOTH
        if name != background and not (name == "power_law" and not _positive(fitted))
    ]
    own = [Shift("fit", name, _moved(fitted, make, window, histogram, *choice)) for name, choice in variants]
    return (*own, *(_otherwise(fitted, window, other) for other in others))


def _otherwise(fitted: Fitted, window: Window, other: OtherCounts) -> Shift:
    """Return by how much the positions move from the counts as chosen to those of another choice."""
    inside, peaks = slice(window.first, window.last), fitted.model.peaks
    unknown = Shift("analysis", other.choice, np.full(peaks, np.nan), other.counted)
    start = fitted.inner.copy()
    here, there = other.reference[inside], other.counts[inside]
    if not here.any() or not there.any() or not fitted.converged:
        return unknown
    if there.sum() < _LEAST_LEFT * here.sum():
        return unknown  # what was fitted is not in the other region at all
    whole = max(float(fitted.model.curves(fitted.inner).total.sum()), 1e-300)
    places = []
    for counts in (here, there):
        scaled = start.copy()
        scaled[: 4 * peaks : 4] *= float(counts.sum()) / whole
        scaled[-2] *= float(counts.sum()) / whole
        if fitted.model.background == "linear":
            scaled[-1] *= float(counts.sum()) / whole
        again = fit_model(fitted.model, counts, start=scaled)
        if not again.converged:
            return unknown
        places.append(again.peaks[:, 1])
    moved = _same_peak(places[1] - places[0], fitted)
    gone = (places[1] <= fitted.model.range_u[0]) | (places[1] >= fitted.model.range_u[1])
    return Shift("analysis", other.choice, np.where(gone, np.nan, moved), other.counted)


def _positive(fitted: Fitted) -> bool:
    return fitted.model.low[0] > 0 and not fitted.model.logarithmic


def _moved(
    fitted: Fitted,
    make: ModelMaker,
    window: Window,
    histogram: ConductanceHistogram,
    first: int,
    last: int,
    merge: int,
    background: str,
) -> Floats:
    changed = make(window, first, last, merge, background)
    changed = replace(changed, position_u=fitted.peaks[:, 1].copy(), width_u=fitted.peaks[:, 2].copy())
    counts = histogram.counts[first:last].astype(float)
    data = rebinned(counts, merge)[: len(changed.low)]
    other = fit_model(changed, data)
    worse = other.score / other.degrees_of_freedom > _MUCH_WORSE * fitted.score / fitted.degrees_of_freedom
    if not other.converged or (background != fitted.model.background and worse):
        return np.full(fitted.model.peaks, np.nan)
    return _same_peak(other.peaks[:, 1] - fitted.peaks[:, 1], fitted)


def _same_peak(moved: Floats, fitted: Fitted) -> Floats:
    """Return the moves, NaN where what was found is so far away that it is another peak."""
    return np.where(np.abs(moved) <= WIDTH_TO_FWHM * fitted.peaks[:, 2], moved, np.nan)


def half_spread(shifts: Sequence[Shift], peaks: int) -> Floats:
    """Return half the spread of each position over all choices that count, the chosen one (no shift) among them."""
    table = np.array([np.zeros(peaks), *[shift.moved_u for shift in shifts if shift.counted]])
    spread: Floats = (np.nanmax(table, axis=0) - np.nanmin(table, axis=0)) / 2
    return spread
