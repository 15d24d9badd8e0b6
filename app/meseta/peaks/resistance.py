"""Series resistance from the positions of peaks that should lie at multiples of one conductance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError
from meseta.peaks.lines import fit_line
from meseta.quantities import G0_SIEMENS, R0_OHM

__all__ = ["SeriesResistance", "series_resistance"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class SeriesResistance:
    """What peak positions say about a resistance in series.  It is reported, never applied.

    Attributes
    ----------
    resistance_ohm, sigma_ohm : float
    unit_g0, unit_sigma_g0 : float
        Conductance whose multiples the peaks are, behind the resistance; exactly 1 and 0 where it was held.
    slope_ohm, slope_sigma_ohm : float
        Slope of 1/G against 1/n.
    chi_square : float
        NaN where no errors were given.
    freedom : int
    absolute : bool
        Whether the errors come from the stated errors of the positions, or from the scatter of the points.
    multiples : (peaks,) float64
    per_peak_ohm, per_peak_sigma_ohm : (peaks,) float64
        Resistance that each peak alone asks for with the unit held at 1 G0.  If these differ, one resistance does not
        explain the shifts (in Cu with impurities they do: Bakker et al., PRB 65, 235416).
    """

    resistance_ohm: float
    sigma_ohm: float
    unit_g0: float
    unit_sigma_g0: float
    slope_ohm: float
    slope_sigma_ohm: float
    chi_square: float
    freedom: int
    absolute: bool
    multiples: Floats
    per_peak_ohm: Floats
    per_peak_sigma_ohm: Floats


def series_resistance(
    position_g0: npt.ArrayLike,
    sigma_g0: npt.ArrayLike | None = None,
    multiples: npt.ArrayLike | None = None,
    *,
    unit_held: bool = False,
) -> SeriesResistance:
    """Regress 1/G_n = R_s + (1/(a G0)) (1/n) on the peak positions.

    Parameters
    ----------
    position_g0 : (peaks,) array_like
        Measured positions, in G0.
    sigma_g0 : (peaks,) array_like, optional
        Their standard errors; without them all peaks weigh the same and the error comes from the scatter.
    multiples : (peaks,) array_like, optional
        Which multiple each peak is; 1, 2, 3 ... by default.
    unit_held : bool
        Hold a = 1 G0 and fit the resistance alone.

    Raises
    ------
    CallError
        Where there are too few peaks, or a position or multiple is not positive.

    Notes
    -----
    A fit to peaks assumed at whole multiples cannot prove that they are: assuming integers finds integers.
    """
    position = np.asarray(position_g0, float)
    number = np.arange(1.0, len(position) + 1) if multiples is None else np.asarray(multiples, float)
    _check(position, number, 1 if unit_held else 2)
    y = R0_OHM / position
    sigma = None if sigma_g0 is None else np.asarray(sigma_g0, float) / (position**2 * G0_SIEMENS)
    alone = y - R0_OHM / number
    alone_sigma = np.full(len(position), np.nan) if sigma is None else sigma
    if unit_held:
        return _held(alone, sigma, number, alone_sigma)
    line = fit_line(1.0 / number, y, sigma)
    unit = R0_OHM / line.slope
    return SeriesResistance(
        line.intercept,
        line.intercept_sigma,
        unit,
        abs(unit * line.slope_sigma / line.slope),
        line.slope,
        line.slope_sigma,
        line.chi_square if line.absolute else float("nan"),
        line.freedom,
        line.absolute,
        number,
        alone,
        alone_sigma,
    )


def _held(alone: Floats, sigma: Floats | None, number: Floats, alone_sigma: Floats) -> SeriesResistance:
    count = len(alone)
    if sigma is None:
        mean, chi_square = float(alone.mean()), float("nan")
        error = float(alone.std(ddof=1) / np.sqrt(count)) if count > 1 else float("nan")
    else:
        weight = 1.0 / sigma**2
        mean, error = float(np.average(alone, weights=weight)), float(1.0 / np.sqrt(weight.sum()))
        chi_square = float(weight @ (alone - mean) ** 2)
    absolute = sigma is not None
    return SeriesResistance(
        mean, error, 1.0, 0.0, R0_OHM, 0.0, chi_square, count - 1, absolute, number, alone, alone_sigma
    )


def _check(position: Floats, number: Floats, fewest: int) -> None:
    where, remedy = "series resistance", "give the positions of peaks and which multiple each is"
    if len(position) != len(number):
        raise CallError(f"{len(position)} positions but {len(number)} multiples", where, remedy)
    if len(np.unique(number)) < fewest:
        raise CallError(f"needs at least {fewest} peaks of different multiples", where, remedy)
    if not (np.isfinite(position).all() and (position > 0).all() and (number > 0).all()):
        raise CallError("positions and multiples must be positive numbers", where, remedy)
