"""What is doubtful about a peak, in words."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import numpy.typing as npt

from meseta.peaks.fitting import Fitted
from meseta.peaks.model import WIDTH_TO_FWHM

__all__ = ["FEW_TRACES", "fit_verdicts"]

Floats = npt.NDArray[np.float64]

FEW_TRACES = 500
"""Below this many traces a warning is given (common practice, no source)."""


def fit_verdicts(fitted: Fitted, counts: Floats) -> list[list[str]]:
    """Return for every peak what the fit itself makes doubtful; an empty list where nothing does.

    Parameters
    ----------
    fitted : Fitted
    counts : (bins,) float64
        Counts that were fitted.
    """
    model, found = fitted.model, fitted.peaks
    low, high = model.range_u
    lower, upper = model.bounds()
    verdicts: list[list[str]] = [[] for _ in range(model.peaks)]
    for peak, (area, position, width, _) in enumerate(found):
        said = verdicts[peak]
        if not fitted.converged or not np.isfinite(found[peak]).all():
            said.append("fit failed")
            continue
        if area <= 1e-6 * max(float(counts.sum()), 1e-300):
            said.append("no area: the background explains these counts")
            continue
        said += _bound_verdicts(fitted, peak, lower, upper)
        if position < low or position > high:
            said.append("lies outside the range of the fit")
        elif min(position - low, high - position) < width:
            said.append("cut by the range of the fit")
        if width * WIDTH_TO_FWHM > 0.8 * (high - low):
            said.append("as wide as the range: not told apart from the background")
    for peak, other in _not_told_apart(found):
        verdicts[peak].append(f"not told apart from peak {other + 1}")
        verdicts[other].append(f"not told apart from peak {peak + 1}")
    for peak, other in _overlapping(found):
        verdicts[peak].append(f"overlaps peak {other + 1}: rests on the line shape")
        verdicts[other].append(f"overlaps peak {peak + 1}: rests on the line shape")
    return verdicts


def _bound_verdicts(fitted: Fitted, peak: int, lower: Floats, upper: Floats) -> list[str]:
    said = []
    for offset, name in ((1, "position"), (2, "width"), (3, "shape")):
        index = 4 * peak + offset
        if index not in fitted.free:
            continue
        value, slack = fitted.inner[index], 1e-6 * (upper[index] - lower[index])
        if value <= lower[index] + slack or value >= upper[index] - slack:
            if offset == 3 and fitted.model.shape == "pseudo_voigt":
                continue  # a pure Gaussian or a pure Lorentzian is no fault
            said.append(f"{name} on its bound")
    return said


def _not_told_apart(found: Floats) -> list[tuple[int, int]]:
    """Return neighbours so close that one wider peak would do as well: nearer than 1.2 widths."""
    return [pair for pair, distance in _neighbours(found) if distance < 1.2]


def _overlapping(found: Floats) -> list[tuple[int, int]]:
    """Return neighbours that are told apart, but nearer than half their height is wide: their sum has one top."""
    return [pair for pair, distance in _neighbours(found) if 1.2 <= distance < WIDTH_TO_FWHM]


def _neighbours(found: Floats) -> list[tuple[tuple[int, int], float]]:
    """Return neighbours along the axis, with their distance in mean widths."""
    order = [int(peak) for peak in np.argsort(found[:, 1])]
    return [
        ((left, right), 2.0 * float(found[right, 1] - found[left, 1]) / float(found[left, 2] + found[right, 2]))
        for left, right in pairwise(order)
    ]
