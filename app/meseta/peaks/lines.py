"""Straight lines: ordinary, weighted, and with errors in both coordinates."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Line", "fit_line"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Line:
    """A fitted line y = intercept + slope x.

    Attributes
    ----------
    intercept, slope : float
    covariance : (2, 2) float64
        Of (intercept, slope).  From the stated errors where there are any ("absolute"), else from the residuals.
    chi_square : float
        Weighted sum of squared residuals; the plain sum of squares where no errors were stated.
    freedom : int
        Points less two.
    absolute : bool
        Whether the covariance comes from stated errors.
    """

    intercept: float
    slope: float
    covariance: Floats
    chi_square: float
    freedom: int
    absolute: bool

    @property
    def intercept_sigma(self) -> float:
        """Standard error of the intercept."""
        return float(np.sqrt(self.covariance[0, 0]))

    @property
    def slope_sigma(self) -> float:
        """Standard error of the slope."""
        return float(np.sqrt(self.covariance[1, 1]))

    @property
    def scale(self) -> float:
        """What stretches stated errors to the scatter of the points: sqrt(chi²/freedom); NaN for two points.

        1 where the errors already come from the residuals.
        """
        if not self.absolute:
            return 1.0
        return float(np.sqrt(self.chi_square / self.freedom)) if self.freedom > 0 else float("nan")

    def sigma_at(self, x: npt.ArrayLike) -> Floats:
        """Return the standard error of the line at x."""
        at = np.asarray(x, float)
        variance = self.covariance[0, 0] + 2 * at * self.covariance[0, 1] + at**2 * self.covariance[1, 1]
        return np.sqrt(np.maximum(variance, 0.0))


def fit_line(
    x: npt.ArrayLike, y: npt.ArrayLike, sigma_y: npt.ArrayLike | None = None, sigma_x: npt.ArrayLike | None = None
) -> Line:
    """Fit a straight line.

    Parameters
    ----------
    x, y : (n,) array_like
        At least two points at two different x.
    sigma_y, sigma_x : (n,) array_like, optional
        Standard errors, not correlated.  Without ``sigma_y`` all points weigh the same and the errors come from the
        residuals (NaN for two points); ``sigma_x`` counts only together with ``sigma_y``.

    Notes
    -----
    Errors in both: York, Evensen, Martinez, Delgado, Am. J. Phys. 72, 367 (2004), eqs. 13; without ``sigma_x`` this is
    weighted least squares.
    """
    across, up = np.asarray(x, float), np.asarray(y, float)
    if sigma_y is None:
        return _ordinary(across, up)
    return _york(across, up, np.asarray(sigma_y, float), np.zeros(len(up)) if sigma_x is None else np.asarray(sigma_x))


def _ordinary(x: Floats, y: Floats) -> Line:
    middle = x.mean()
    away = x - middle
    square = float(away @ away)
    slope = float(away @ (y - y.mean())) / square
    intercept = float(y.mean()) - slope * middle
    rest = y - y.mean() - slope * away
    freedom, chi_square = len(x) - 2, float(rest @ rest)
    variance = chi_square / freedom if freedom > 0 else np.nan
    return Line(intercept, slope, variance * _covariance(len(x), middle, square), chi_square, freedom, False)


def _covariance(weight: float, middle: float, square: float) -> Floats:
    return np.array([[1.0 / weight + middle**2 / square, -middle / square], [-middle / square, 1.0 / square]])


def _york(x: Floats, y: Floats, sigma_y: Floats, sigma_x: Floats) -> Line:
    slope = _ordinary(x, y).slope
    for _ in range(200):
        weight = 1.0 / (sigma_y**2 + (slope * sigma_x) ** 2)
        across, up = x - np.average(x, weights=weight), y - np.average(y, weights=weight)
        pulled = weight * (across * sigma_y**2 + slope * up * sigma_x**2)
        again = float((weight * pulled) @ up / ((weight * pulled) @ across))
        done = abs(again - slope) <= 1e-15 * abs(again)
        slope = again
        if done:
            break
    weight = 1.0 / (sigma_y**2 + (slope * sigma_x) ** 2)
    middle_x, middle_y = float(np.average(x, weights=weight)), float(np.average(y, weights=weight))
    across, up = x - middle_x, y - middle_y
    adjusted = middle_x + weight * (across * sigma_y**2 + slope * up * sigma_x**2)
    centre = float(np.average(adjusted, weights=weight))
    square = float(weight @ (adjusted - centre) ** 2)
    rest = up - slope * across
    return Line(
        middle_y - slope * middle_x,
        slope,
        _covariance(float(weight.sum()), centre, square),
        float(weight @ rest**2),
        len(x) - 2,
        True,
    )
