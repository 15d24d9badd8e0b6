"""A measured amplifier curve: volts to ampere by monotone interpolation, never beyond its ends."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.traces import Quality

__all__ = ["Curve", "curve_of"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Curve:
    """A monotone cubic through the measured points, in a variable in which decades are equally wide.

    Attributes
    ----------
    volt : (points,) float64
        Ascending.
    coefficients : (4, points - 1) float64
        Of the cubic between two points, highest power first, in volts from the lower point.
    scale_ampere : float
        0 where all currents have the same sign: the variable is ln abs(I).  Else the smallest current apart from zero,
        I_0, and the variable is asinh(I/I_0).
    sign : float
        Sign of all currents where they have one.
    low_bit, high_bit : int
        Quality of readings below the first and above the last point.
    """

    volt: Floats
    coefficients: Floats
    scale_ampere: float
    sign: float
    low_bit: int
    high_bit: int

    def current(self, volts: Floats) -> tuple[Floats, npt.NDArray[np.uint8]]:
        """Return (ampere, quality bits) of readings; NaN and flagged beyond the ends of the curve."""
        from meseta.intake.calibration.kernels import follow_curve

        ampere, bits = np.empty(len(volts)), np.zeros(len(volts), np.uint8)
        follow_curve(
            np.ascontiguousarray(volts), self.volt, self.coefficients, self.scale_ampere, self.sign, self.low_bit,
            self.high_bit, ampere, bits,
        )  # fmt: skip
        return ampere, bits


def curve_of(points: Sequence[tuple[float, float]]) -> Curve:
    """Return the curve through measured points.

    The interpolation is the monotone piecewise cubic of Fritsch and Carlson (SIAM J. Numer. Anal. 17, 238, 1980) with
    the slopes of Fritsch and Butland (SIAM J. Sci. Stat. Comput. 5, 300, 1984): it neither overshoots nor turns between
    points.  It runs in ln abs(I) (one sign) or asinh(I/I_0) (both signs), because amplifier curves span decades.

    Parameters
    ----------
    points : sequence of (volt, ampere)
        At least two, ascending in volts, strictly monotone in ampere.
    """
    from scipy.interpolate import PchipInterpolator

    volt, ampere = (np.array(column, np.float64) for column in zip(*points, strict=True))
    one_sign = bool((ampere > 0).all() or (ampere < 0).all())
    scale = 0.0 if one_sign else float(np.abs(ampere[ampere != 0]).min())
    # one by one, through the mathematics library: numpy's vector functions differ between processors
    variable = [math.log(abs(one)) if one_sign else math.asinh(one / scale) for one in ampere.tolist()]
    if len(volt) == 2:
        slope = (variable[1] - variable[0]) / (volt[1] - volt[0])
        coefficients = np.array([[0.0], [0.0], [slope], [variable[0]]])
    else:
        coefficients = np.ascontiguousarray(PchipInterpolator(volt, variable).c)
    saturated, unknown = Quality.SATURATED, Quality.UNTRUSTED
    low, high = (abs(ampere[0]), abs(ampere[-1]))
    ends = (saturated, saturated) if not one_sign else (saturated, unknown) if low > high else (unknown, saturated)
    return Curve(volt, coefficients, scale, float(np.sign(ampere[0])) if one_sign else 1.0, *ends)
