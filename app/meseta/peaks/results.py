"""What peak fitting hands on: the peak table and the fitted curves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import Grid
from meseta.tables import Table

__all__ = ["PeakFit", "PeakTable"]

Floats = npt.NDArray[np.float64]
Texts = npt.NDArray[np.str_]


@dataclass(frozen=True)
class PeakTable(Table):
    """The columns of ``peaks.csv``: one row a peak, sorted by conductance.

    Intervals are 95 %; ``resampling`` says which resampling made them.  ``position_systematic_g0`` is the half spread
    of the position over defensible choices of bin width, range and background.  ``fwhm`` is in decades on a logarithmic
    axis and in G0 on a linear one (``axis`` says which); ``area_per_trace`` and ``height`` in the unit of the
    histogram's density times its axis, and in its density (``area_unit``, ``height_unit``).  ``status`` is "ok" or what
    is doubtful.  Where no peak can be fitted there is one row of NaN whose status says why.

    ``mode_g0`` is the highest point of the histogram near the peak, background and all, and ``plateau_median_g0`` the
    median conductance of the ``plateaus`` found there: three numbers that are often quoted for one another.
    ``assigned`` is the nearest multiple of G0 or value named by the user, ``channels_at_least`` the smallest number of
    channels that can carry the position (0 where there is no position).
    """

    peak: Texts
    axis: Texts
    shape: Texts
    background: Texts
    fit_low_g0: Floats
    fit_high_g0: Floats
    traces: npt.NDArray[np.int64]
    position_g0: Floats
    position_low_g0: Floats
    position_high_g0: Floats
    position_systematic_g0: Floats
    position_siemens: Floats
    position_ohm: Floats
    fwhm: Floats
    fwhm_low: Floats
    fwhm_high: Floats
    area_per_trace: Floats
    area_low: Floats
    area_high: Floats
    height: Floats
    status: Texts
    resampling: Texts
    area_unit: Texts
    height_unit: Texts
    mode_g0: Floats
    plateau_median_g0: Floats
    plateaus: npt.NDArray[np.int64]
    assigned: Texts
    channels_at_least: npt.NDArray[np.int64]


@dataclass(frozen=True)
class PeakFit:
    """A fit: its table, and the curves to draw, in the density of the histogram.

    Attributes
    ----------
    table : PeakTable
    grid : Grid
        Bins of the fit range only.
    model, background : (bins,) float64
        Fitted density and its smooth part.
    components : (peaks, bins) float64
        Each peak alone.
    observed : (bins,) float64
    systematic : tuple of (str, (peaks,) float64)
        Choice that was changed, and by how much each position moved, in G0.
    goodness : float
        Poisson deviance a degree of freedom (over-dispersed by nature: samples of one trace are not independent).
    """

    table: PeakTable
    grid: Grid
    model: Floats
    background: Floats
    components: Floats
    observed: Floats
    systematic: tuple[tuple[str, Floats], ...]
    goodness: float
