"""The conductance axis: which bins are stored, and which of them a histogram shows.

Bins of a logarithmic axis are anchored at 1 G0 (edges ``10**(k / bins per decade)``), those of a linear axis at 0
(edges ``k * width``), so that recordings share bins.  The stored (fine) grid is longer and finer than the histogram's:
another width or end of the axis is then an exact sum of stored bins, and nothing is counted anew.
"""

from __future__ import annotations

import math
from decimal import Decimal, localcontext
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from meseta.errors import RecipeError
from meseta.histograms.results import Grid
from meseta.recipe.histogram import HistogramSettings
from meseta.segmentation.results import NoiseModel

__all__ = [
    "anchored_grid",
    "axis_range",
    "histogram_grid",
    "linear_edges",
    "logarithmic_edges",
    "stored_grid",
]

_MOST_BINS = 60_000
_LINEAR_CHUNK = 64


@lru_cache(maxsize=16)
def _decade(bins: int) -> tuple[str, ...]:
    """Return the mantissas 10**(k / bins) of one decade, to 25 digits."""
    with localcontext() as context:
        context.prec = 30
        return tuple(str(+(Decimal(10) ** (Decimal(k) / bins)).quantize(Decimal(10) ** -25)) for k in range(bins))


def logarithmic_edges(first: int, last: int, bins_per_decade: int) -> npt.NDArray[np.float64]:
    """Return the edges ``10**(k / bins_per_decade)`` for ``k`` from ``first`` to ``last``, both included.

    Correctly rounded, whatever the machine's own power function does, so that counts are the same everywhere.
    """
    mantissas = _decade(bins_per_decade)
    places = (divmod(k, bins_per_decade) for k in range(first, last + 1))
    return np.array([float(f"{mantissas[place]}e{decade}") for decade, place in places])


def linear_edges(first: int, last: int, width_g0: float) -> npt.NDArray[np.float64]:
    """Return the edges ``k * width_g0`` for ``k`` from ``first`` to ``last``, both included."""
    return np.arange(first, last + 1, dtype=np.float64) * width_g0


def axis_range(axis: str, low_g0: float | None, high_g0: float, noise: NoiseModel) -> tuple[float, float]:
    """Return the ends of the conductance axis in G0.

    Where the recipe sets no lower end it follows from the floor: 3 sigma below it on a linear axis, a tenth of its
    sigma on a logarithmic one (below that, readings are only noise that happened to be small).

    Raises
    ------
    RecipeError
        Where the ends leave no room for bins.
    """
    high, low = high_g0, low_g0
    sigma = noise.floor_sigma_g0 if math.isfinite(noise.floor_sigma_g0) and noise.floor_sigma_g0 > 0 else high * 1e-7
    floor = noise.floor_g0 if math.isfinite(noise.floor_g0) else 0.0
    if axis == "logarithmic":
        low = sigma / 10 if low is None else low
        if low <= 0:
            raise RecipeError(
                f"'histogram.low_g0' is {low:g}, and a logarithmic axis has no zero",
                "recipe",
                "set histogram.low_g0 above 0, or histogram.axis=linear",
            )
    elif low is None:
        low = floor - 3 * sigma
    if low >= high:
        raise RecipeError(
            f"the conductance axis would run from {low:g} to {high:g} G0", "recipe", "set histogram.high_g0 higher"
        )
    return low, high


def stored_grid(settings: HistogramSettings, noise: NoiseModel) -> Grid:
    """Return the grid of the count matrix: whole decades (linear: chunks of 64 bins) around the axis.

    Raises
    ------
    RecipeError
        Where the bins would be too many to be meant.
    """
    if settings.edges_g0:
        _check(len(settings.edges_g0) - 1)
        return Grid(np.array(settings.edges_g0, np.float64), settings.axis, given=True)
    low, high = axis_range(settings.axis, settings.stored_low_g0, settings.stored_high_g0, noise)
    if settings.axis == "logarithmic":
        per_decade = settings.stored_bins_per_decade
        first, last = _whole(math.log10(low), math.log10(high))
        _check(abs(last - first) * per_decade)
        return Grid(logarithmic_edges(first * per_decade, last * per_decade, per_decade), "logarithmic")
    width = settings.stored_bin_width_g0
    first, last = _whole(low / (width * _LINEAR_CHUNK), high / (width * _LINEAR_CHUNK))
    _check((last - first) * _LINEAR_CHUNK)
    return Grid(linear_edges(first * _LINEAR_CHUNK, last * _LINEAR_CHUNK, width), "linear")


def _whole(low: float, high: float) -> tuple[int, int]:
    """Return whole numbers around an interval; rounding of the last digit does not add a chunk."""
    first = round(low) if math.isclose(low, round(low), abs_tol=1e-9) else math.floor(low)
    last = round(high) if math.isclose(high, round(high), abs_tol=1e-9) else math.ceil(high)
    return first, max(last, first + 1)


def _check(bins: int) -> None:
    if bins > _MOST_BINS:
        raise RecipeError(f"the conductance axis would have {bins} bins", "recipe", "take wider bins or a shorter axis")


def anchored_grid(axis: str, low_g0: float, high_g0: float, per_decade: int, width_g0: float) -> Grid:
    """Return the bins of one axis that hold everything from ``low_g0`` to ``high_g0``, anchored at 1 G0 or at 0."""
    if axis == "logarithmic":
        first, last = _whole(math.log10(low_g0) * per_decade, math.log10(high_g0) * per_decade)
        _check(last - first)
        return Grid(logarithmic_edges(first, last, per_decade), axis)
    first, last = _whole(low_g0 / width_g0, high_g0 / width_g0)
    _check(last - first)
    return Grid(linear_edges(first, last, width_g0), axis)


def histogram_grid(
    stored: Grid, low_g0: float, high_g0: float, per_decade: int, width_g0: float
) -> tuple[int, int, int]:
    """Return which stored bins make the bins of a histogram.

    Parameters
    ----------
    stored : Grid
    low_g0, high_g0 : float
        Ends of the axis; the bins that hold them are the first and the last.
    per_decade : int
        Bins per decade (logarithmic axis).
    width_g0 : float
        Bin width (linear axis).

    Returns
    -------
    first, last, merge : int
        Stored bins ``first`` to ``last`` (exclusive), ``merge`` of them a bin; ``last - first`` is a multiple of it.
        Given bins are taken as they are.

    Raises
    ------
    RecipeError
        Where the bins are no whole multiple of stored bins.
    """
    edges, bins = stored.edges_g0, stored.bins
    if stored.given:
        first = min(max(int(np.searchsorted(edges, low_g0, side="right")) - 1, 0), bins - 1)
        return first, max(min(int(np.searchsorted(edges, high_g0)), bins), first + 1), 1
    if stored.axis == "logarithmic":
        unit = round(1 / math.log10(edges[1] / edges[0]))
        fine, offset = unit / per_decade, round(unit * math.log10(edges[0]))
        low, high = math.log10(low_g0) * per_decade, math.log10(high_g0) * per_decade
    else:
        unit_g0 = (edges[-1] - edges[0]) / bins
        fine, offset = width_g0 / unit_g0, round(edges[0] / unit_g0)
        low, high = low_g0 / width_g0, high_g0 / width_g0
    merge = round(fine)
    if merge < 1 or not math.isclose(fine, merge, rel_tol=1e-9):
        raise RecipeError("these bins are no sum of the stored ones", "histogram", "take a width that divides them")
    first, last = _whole(low, high)
    start = first * merge - offset
    stop = last * merge - offset
    start += max(0, -(start // merge)) * merge if start < 0 else 0
    stop -= max(0, -(-(stop - bins) // merge)) * merge if stop > bins else 0
    return start, max(stop, start + merge), merge
