"""What peak fitting hands on: the peak table and the fitted curves."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import Grid
from meseta.tables import Table

__all__ = ["PeakFit", "PeakTable", "PositionShift", "SystematicTable"]

Floats = npt.NDArray[np.float64]
Texts = npt.NDArray[np.str_]


@dataclass(frozen=True)
class PeakTable(Table):
    """The columns of ``peaks.csv``: one row a peak, sorted by conductance.

    Intervals are 95 %; ``resampling`` says which resampling made them.  ``position_systematic_g0`` stands apart from
    them: ``position_choices_g0``, the half spread of the position over choices that could as well have been made
    otherwise, and ``position_calibration_g0``, the standard error of what is not exactly known of the calibration (0
    where nothing was stated), added in quadrature.  A position that the user fixed has no interval; ``held`` says what
    was fixed, tied or bounded.  ``fwhm`` is in decades on a logarithmic
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
    position_choices_g0: Floats
    position_calibration_g0: Floats
    held: Texts


@dataclass(frozen=True)
class PositionShift:
    """By how much every position moves with one thing that could be otherwise.

    Attributes
    ----------
    kind : str
        "fit" (bins, range, background), "analysis" (region, zero of displacement, selection, sensitivity) or
        "calibration" (standard errors of gain, bias, offset, series resistance).
    choice : str
        What was changed.
    moves_by_g0 : (peaks,) float64
        NaN where the changed fit failed or could not be defended.
    counted : bool
        Whether it is part of ``position_systematic_g0``; others are shown for information.
    """

    kind: str
    choice: str
    moves_by_g0: Floats
    counted: bool = True


@dataclass(frozen=True)
class SystematicTable(Table):
    """The systematic part, one row a peak and choice; see :class:`PositionShift`."""

    peak: Texts
    kind: Texts
    choice: Texts
    moves_by_g0: Floats
    counted: npt.NDArray[np.bool_]


@dataclass(frozen=True)
class PeakFit:
    """A fit: its table, and the curves to draw, in the density of the histogram.

    Attributes
    ----------
    table : PeakTable
    grid : Grid
        Bins of the fit range only.
    model, background : (bins,) float64
        Fitted density and its smooth part; NaN in bins between the stretches that were fitted.
    components : (peaks, bins) float64
        Each peak alone.
    observed : (bins,) float64
    shifts : tuple of PositionShift
        By how much each position moves with every other choice.
    goodness : float
        Poisson deviance a degree of freedom (over-dispersed by nature: samples of one trace are not independent).
    scatter : (bins,) float64
        Standard deviation of the observed density over resampled data sets; NaN without resampling, empty where there
        is no fit.
    notes : tuple of str
        What a reader must know beside the rows ("a further peak near 3.9 G0 is not fitted").
    """

    table: PeakTable
    grid: Grid
    model: Floats
    background: Floats
    components: Floats
    observed: Floats
    shifts: tuple[PositionShift, ...]
    goodness: float
    scatter: Floats = field(default_factory=lambda: np.empty(0))
    notes: tuple[str, ...] = ()

    @property
    def residuals(self) -> Floats:
        """(bins,) observed less fitted density; NaN where nothing was fitted."""
        return self.observed - self.model

    @property
    def scaled_residuals(self) -> Floats:
        """(bins,) residuals in units of :attr:`scatter`; NaN where that is unknown or zero."""
        if len(self.scatter) != len(self.observed):
            return np.full(len(self.observed), np.nan)
        with np.errstate(invalid="ignore", divide="ignore"):
            scaled: Floats = np.where(self.scatter > 0, self.residuals / self.scatter, np.nan)
        return scaled

    @property
    def systematic(self) -> tuple[tuple[str, Floats], ...]:
        """(choice, (peaks,) move in G0) of every shift."""
        return tuple((shift.choice, shift.moves_by_g0) for shift in self.shifts)

    def systematic_table(self) -> SystematicTable:
        """Return the systematic part as a table, peak by peak."""
        rows = [
            (str(peak), shift.kind, shift.choice, float(shift.moves_by_g0[at]), shift.counted)
            for at, peak in enumerate(self.table.peak)
            for shift in self.shifts
        ]
        names, kinds, choices, moves, counted = zip(*rows, strict=True) if rows else ((), (), (), (), ())
        return SystematicTable(
            np.array(names, np.str_),
            np.array(kinds, np.str_),
            np.array(choices, np.str_),
            np.array(moves, float),
            np.array(counted, bool),
        )
