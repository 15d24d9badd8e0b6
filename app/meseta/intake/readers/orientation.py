"""Rows or columns: which way traces run in a 2D array that has no axis."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import numpy.typing as npt

__all__ = ["Orientation", "orientation"]

ENDS: Final = 0.05
CLEARLY: Final = 3.0
"""One way is clearly stronger where it is so many times the other."""
LEAST_TREND: Final = 1.0
"""A factor of about e from end to end; less may be chance."""
FEW_TRACES: Final = 20
MANY_SAMPLES: Final = 10
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Orientation:
    """Whether each row is a trace, and whether that is beyond doubt."""

    rows: bool
    sure: bool


@np.errstate(all="ignore")
def orientation(rows: Any, columns: Any) -> Orientation:
    """Tell whether traces are the rows or the columns of a 2D array.

    A trace opens or closes: along it the conductance goes from one level to another, the same way in nearly all of
    them; from one trace to the next, at the same place, it does not.  Where that does not tell (both directions in one,
    say), a signal that is smooth along one way and not along the other does.  The rule is our own.

    Parameters
    ----------
    rows : (r, many) array
        Part of the array: some rows, as long as possible.
    columns : (many, c) array
        Some columns, as long as possible.
    """
    shaped = [_shaped(np.asarray(part, np.float64)) for part in (rows, np.asarray(columns).T)]
    trends = [_trend(part) for part in shaped]
    if max(trends) > max(CLEARLY * min(trends), LEAST_TREND):
        return Orientation(trends[0] > trends[1], True)
    roughness = [_roughness(part) for part in shaped]
    is_rows = roughness[0] <= roughness[1]
    if max(roughness) > CLEARLY * min(roughness):
        return Orientation(is_rows, True)
    count, length = len(shaped[0]), shaped[0].shape[1]
    if min(count, length) <= FEW_TRACES and max(count, length) >= MANY_SAMPLES * min(count, length):
        return Orientation(length > count, False)
    return Orientation(is_rows, False)


def _shaped(part: Floats) -> Floats:
    """Return an array on a scale on which a decade counts like a decade, and small negative values stay."""
    finite = np.abs(part[np.isfinite(part)])
    positive = finite[finite > 0]
    unit = float(np.quantile(positive, 0.1)) if positive.size else 0.0
    return np.arcsinh(part / unit) if unit > 0 else part


def _trend(part: Floats) -> float:
    """Return how far the ends of rows lie apart, the same way in all of them."""
    reach = max(int(part.shape[1] * ENDS), 1)
    steps = _means(part[:, -reach:]) - _means(part[:, :reach])
    steps = steps[np.isfinite(steps)]
    return float(abs(np.median(steps))) + 1e-12 if len(steps) else 1e-12


def _means(part: Floats) -> Floats:
    """Return the mean of the finite values of each row; NaN where it has none."""
    finite = np.isfinite(part)
    return np.where(finite, part, 0.0).sum(axis=1) / np.where(finite.any(axis=1), finite.sum(axis=1), np.nan)


def _roughness(part: Floats) -> float:
    """Return the usual step from sample to sample along rows."""
    steps = np.abs(np.diff(part, axis=1))
    steps = steps[np.isfinite(steps)]
    return float(np.mean(steps)) + 1e-12 if len(steps) else 1e-12
