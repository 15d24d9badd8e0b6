"""Curves reduced to what a screen can show: smallest and largest value in bins aligned to absolute sample numbers."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["Curve", "gapped", "reduced"]

Floats = npt.NDArray[np.float64]


class Curve:
    """A polyline ready to draw: ``x`` and ``g0`` of equal length, NaN where the line is broken."""

    __slots__ = ("g0", "x")

    def __init__(self, x: Floats, g0: Floats) -> None:
        self.x, self.g0 = x, g0

    def on(self, axis: str, lowest_u: float) -> Floats:
        """Return the height on the axis as drawn: G, or log10 G with readings at or below zero at the bottom."""
        return heights(self.g0, axis, lowest_u)


def heights(g0: npt.ArrayLike, axis: str, lowest_u: float) -> Floats:
    """Return conductances on the axis as drawn.

    On the logarithmic axis a reading at or below zero has no place; it is drawn at ``lowest_u``, below the
    view, so that a trace at the floor reads as noise and not as a gap.  NaN stays NaN.
    """
    values = np.asarray(g0, np.float64)
    if axis != "logarithmic":
        return values
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(
            values > 0, np.maximum(np.log10(values), lowest_u), np.where(np.isnan(values), np.nan, lowest_u)
        )


def reduced(x: npt.ArrayLike, g0: npt.ArrayLike, points: int) -> Curve:
    """Return a curve of at most about ``points`` points that covers the same pixels.

    Bins are aligned to multiples of their size, so that nothing shimmers when the view moves; each gives its smallest
    and its largest value, in the order in which a rising or falling line passes them.

    Parameters
    ----------
    x, g0 : (n,) arrays
        Where ``g0`` is NaN throughout a bin the curve is broken there.
    points : int
        Aimed number of points, at least 4.
    """
    x, g0 = np.asarray(x, np.float64), np.asarray(g0, np.float64)
    size = -(-2 * len(g0) // max(points, 4))
    if size <= 2:
        return Curve(x, g0)
    bins = -(-len(g0) // size)
    folded: npt.NDArray[np.float64] = np.full((bins, size), np.nan)
    folded.ravel()[: len(g0)] = g0
    low = np.where(np.isnan(folded), np.inf, folded).min(axis=1)
    high = np.where(np.isnan(folded), -np.inf, folded).max(axis=1)
    stop = np.minimum(np.arange(size, bins * size + 1, size), len(g0)) - 1
    falling = folded[:, 0] >= g0[stop]
    pairs = np.where(falling[:, None], np.stack([high, low], 1), np.stack([low, high], 1))
    pairs[low > high] = np.nan
    return Curve(np.stack([x[::size], x[stop]], 1).ravel(), pairs.ravel())


def gapped(curves: list[Curve]) -> Curve:
    """Return many curves as one, with a break between each two: one item to draw instead of hundreds."""
    if not curves:
        return Curve(np.empty(0), np.empty(0))
    gap = np.array([np.nan])
    xs, gs = [], []
    for curve in curves:
        xs += [curve.x, gap]
        gs += [curve.g0, gap]
    return Curve(np.concatenate(xs), np.concatenate(gs))
