"""How far a position moves with what is not exactly known of the calibration."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.quantities import G0_SIEMENS

__all__ = ["CalibrationErrors", "CalibrationShifts", "calibration_shifts"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class CalibrationErrors:
    """Standard errors of the constants of the calibration; 0 where none was stated.

    Attributes
    ----------
    gain_relative, bias_relative : float
        Relative standard errors of the amplifier's gain and of the bias.
    offset_g0 : float
        Standard error of the offset, as a conductance.
    series_resistance_ohm : float
    """

    gain_relative: float = 0.0
    bias_relative: float = 0.0
    offset_g0: float = 0.0
    series_resistance_ohm: float = 0.0

    def stated(self) -> tuple[float, float, float, float]:
        """Return the four in the order of :func:`calibration_shifts`."""
        return self.gain_relative, self.bias_relative, self.offset_g0, self.series_resistance_ohm


@dataclass(frozen=True)
class CalibrationShifts:
    """Standard errors of positions from the calibration, (peaks,) float64 in G0.

    ``total_g0`` adds them in quadrature: the calibration moves all traces together, so more traces do not help, and it
    is reported apart from the statistical interval.
    """

    gain_g0: Floats
    bias_g0: Floats
    offset_g0: Floats
    series_resistance_g0: Floats
    total_g0: Floats


def calibration_shifts(
    position_g0: npt.ArrayLike,
    gain_relative: float = 0.0,
    bias_relative: float = 0.0,
    offset_g0: float = 0.0,
    series_resistance_ohm: float = 0.0,
) -> CalibrationShifts:
    """Propagate standard errors of the calibration to positions.

    Parameters
    ----------
    position_g0 : (peaks,) array_like
        Positions after all corrections.
    gain_relative, bias_relative : float
        Relative standard errors of the amplifier's gain and of the bias: g = I/(V G0) moves in proportion.
    offset_g0 : float
        Standard error of the offset, as a conductance.
    series_resistance_ohm : float
        Standard error of the series resistance: dg/dR = g² G0.
    """
    position = np.asarray(position_g0, float)
    gain, bias = position * gain_relative, position * bias_relative
    offset = np.full(position.shape, float(offset_g0))
    series = position**2 * G0_SIEMENS * series_resistance_ohm
    return CalibrationShifts(gain, bias, offset, series, np.sqrt(gain**2 + bias**2 + offset**2 + series**2))
