"""How far positions move with choices that could as well have been made otherwise."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import ConductanceHistogram
from meseta.peaks.fitting import Fitted, fit_model
from meseta.peaks.model import Model
from meseta.peaks.windows import Window, rebinned

__all__ = ["half_spread", "systematic_shifts"]

Floats = npt.NDArray[np.float64]
ModelMaker = Callable[[Window, int, int, int, str], Model]

_MUCH_WORSE = 2.0
_SMOOTH = ("constant", "linear", "exponential", "power_law")


def systematic_shifts(
    fitted: Fitted, make: ModelMaker, window: Window, histogram: ConductanceHistogram
) -> tuple[tuple[str, Floats], ...]:
    """Return by how much each position moves, on the axis, with bin width, fit range and background.

    Parameters
    ----------
    fitted : Fitted
        The fit as chosen.
    make : callable
        Makes a model of the window over other bins: (window, first, last, merge, background).
    window : Window
    histogram : ConductanceHistogram

    Returns
    -------
    tuple of (str, (peaks,) float64)
        NaN where the changed fit failed, or another background fits much worse (deviance more than doubled): that
        choice could not be defended.
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
    return tuple((name, _moved(fitted, make, window, histogram, *choice)) for name, choice in variants)


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
    moved: Floats = other.peaks[:, 1] - fitted.peaks[:, 1]
    return moved


def half_spread(shifts: tuple[tuple[str, Floats], ...], peaks: int) -> Floats:
    """Return half the spread of each position over all choices, the chosen one (no shift) among them."""
    table = np.array([np.zeros(peaks), *[shift for _, shift in shifts]])
    spread: Floats = (np.nanmax(table, axis=0) - np.nanmin(table, axis=0)) / 2
    return spread
