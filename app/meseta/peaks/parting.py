"""One peak or two: peaks that overlap so far that the histogram has a single top.

Two Gaussians fit anything that is not quite Gaussian better than one.  So two are proposed only where they foretell
left-out blocks of traces clearly better than one Gaussian, and better than one skewed and one pseudo-Voigt peak too,
and where both are peaks in their own right.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Final

import numpy as np
import numpy.typing as npt

from meseta.peaks.fitting import Fitted, fit_model
from meseta.peaks.model import Model
from meseta.peaks.modelling import model_of
from meseta.peaks.proposal import held_out_gain
from meseta.peaks.windows import Start, Window

if TYPE_CHECKING:
    from meseta.peaks.choosing import Chooser

__all__ = ["parted"]

Floats = npt.NDArray[np.float64]

_ERRORS: Final = 2.0
_ERRORS_OVER_SHAPES: Final = 0.7
_LEAST_AREA: Final = 2.2
_LEAST_SHARE: Final = 0.12
_LEAST_DISTANCE: Final = 0.75
_WIDEST_RATIO: Final = 3.0
_STARTS: Final = ((-0.7, 0.7), (-0.3, 1.2), (-1.2, 0.3))
_OTHER_SHAPES: Final = ("skewed_gaussian", "pseudo_voigt")


def parted(chooser: Chooser, window: Window, peak: Start, blocks: Floats) -> tuple[Start, Start] | None:
    """Return the two peaks that stand for one where left-out traces ask for two, else None.

    Parameters
    ----------
    chooser : Chooser
    window : Window
        The stretch with the peak that may be two.
    peak : Start
        Which of its peaks.
    blocks : (blocks, bins) float64
        Counts of blocks of traces on the histogram's bins.
    """
    one = chooser.model(window)
    single = fit_model(one, chooser.data(window))
    at = window.starts.index(peak)
    if not single.converged:
        return None
    best = _two(chooser, window, at, single)
    if best is None:
        return None
    two, fitted = best
    inside = blocks[:, window.first : window.last]
    if not _foretells_better(inside, one, two, at, _ERRORS):
        return None
    for shape in _OTHER_SHAPES:
        if shape != one.shape and not _foretells_better(
            inside, replace(one, shape=shape), two, at, _ERRORS_OVER_SHAPES
        ):
            return None
    left, right = sorted(fitted.peaks[at : at + 2].tolist(), key=lambda values: values[1])
    return _start(peak, left), _start(peak, right)


def _start(peak: Start, values: list[float]) -> Start:
    return replace(peak, position_u=values[1], width_u=values[2], least_u=min(peak.least_u, values[2]))


def _two(chooser: Chooser, window: Window, at: int, single: Fitted) -> tuple[Model, Fitted] | None:
    """Return the best fit with two peaks in the place of one; None where they are not two peaks."""
    _, position, width, _ = single.peaks[at]
    best: tuple[Model, Fitted] | None = None
    for left, right in _STARTS:
        pair = tuple(
            replace(window.starts[at], position_u=position + d * width, width_u=0.7 * width) for d in (left, right)
        )
        starts = (*window.starts[:at], *pair, *window.starts[at + 1 :])
        bins = (window.first, window.last)
        grid, settings = chooser.histogram.grid, chooser.settings
        model = model_of(grid, settings, starts, bins, 1, settings.background, chooser.template)
        fitted = fit_model(model, chooser.data(window))
        if fitted.converged and (best is None or fitted.score < best[1].score):
            best = model, fitted
    if best is None or not _both_are_peaks(chooser, best[1], at):
        return None
    model, fitted = best
    return replace(model, position_u=fitted.peaks[:, 1].copy(), width_u=fitted.peaks[:, 2].copy()), fitted


def _both_are_peaks(chooser: Chooser, fitted: Fitted, at: int) -> bool:
    area, place, width = fitted.peaks[at : at + 2, :3].T
    apart = abs(place[1] - place[0]) / width.sum()
    alike = max(width) / max(min(width), 1e-300)
    if area.min() < _LEAST_SHARE * area.sum() or apart < _LEAST_DISTANCE or alike > _WIDEST_RATIO:
        return False
    return all(chooser.stands_out(fitted, number) for number in (at, at + 1))


def _foretells_better(blocks: Floats, one: Model, two: Model, at: int, errors: float) -> bool:
    gain = held_out_gain(blocks, one, two)
    strong = all(gain.area_in_errors(number) > _LEAST_AREA for number in (at, at + 1))
    return strong and gain.mean > errors * gain.error
