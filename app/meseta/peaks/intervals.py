"""95 % intervals from resampled fits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr, ndtri

__all__ = ["Interval", "bca_interval", "percentile_interval"]

Floats = npt.NDArray[np.float64]

_LEVEL = 0.95
_FEWEST = 20


@dataclass(frozen=True)
class Interval:
    """Lower and upper ends, and the standard error, of every peak's quantity (peaks,) float64.

    ``sigma`` is half of what the middle 68 % of the replicates span: a few refits in which peak and background change
    places do not count.
    """

    low: Floats
    high: Floats
    sigma: Floats


def percentile_interval(estimate: npt.ArrayLike, replicates: npt.ArrayLike, factor: float | Floats = 1.0) -> Interval:
    """Return the percentile interval of each column.

    Parameters
    ----------
    estimate : (peaks,) array_like
    replicates : (n, peaks) array_like
        NaN where a refit failed; fewer than 20 good ones give NaN.
    factor : float or (peaks,) float64
        Stretches the replicates' deviations from the estimate where few groups were resampled: a bootstrap over n
        groups is too narrow by sqrt((n - 1)/n), and its quantiles are those of a normal, not of a Student distribution.

    Notes
    -----
    Efron, Tibshirani, An Introduction to the Bootstrap (1993), chapter 13.
    """
    centre, values = np.asarray(estimate, float), np.asarray(replicates, float)
    values = centre + factor * (values - centre)
    tail = (1.0 - _LEVEL) / 2.0
    low, high, sigma = (np.full(len(centre), np.nan) for _ in range(3))
    for column in range(len(centre)):
        good = values[np.isfinite(values[:, column]), column]
        if len(good) >= _FEWEST and np.isfinite(centre[column]):
            low[column], high[column] = np.quantile(good, [tail, 1.0 - tail])
            sigma[column] = float(np.diff(np.quantile(good, ndtr([-1.0, 1.0])))[0]) / 2.0
    return Interval(low, high, sigma)


def bca_interval(
    estimate: npt.ArrayLike, replicates: npt.ArrayLike, left_out: npt.ArrayLike, factor: float | Floats = 1.0
) -> Interval:
    """Return the bias-corrected and accelerated interval of each column.

    Parameters
    ----------
    estimate : (peaks,) array_like
    replicates : (n, peaks) array_like
    left_out : (groups, peaks) array_like
        Estimates with one group of traces left out each: they give the acceleration.

    Notes
    -----
    Efron, J. Am. Stat. Assoc. 82, 171 (1987).
    """
    centre, values = np.asarray(estimate, float), np.asarray(replicates, float)
    jackknife = np.asarray(left_out, float)
    plain = percentile_interval(centre, values, factor)
    low, high = plain.low.copy(), plain.high.copy()
    tail, stretch = ndtri((1.0 - _LEVEL) / 2.0), np.broadcast_to(factor, centre.shape)
    for column in range(len(centre)):
        good = values[np.isfinite(values[:, column]), column]
        away = jackknife[np.isfinite(jackknife[:, column]), column]
        if not np.isfinite(plain.low[column]) or len(away) < 3:
            continue
        below = np.clip((good < centre[column]).mean() + 0.5 * (good == centre[column]).mean(), 1e-3, 1 - 1e-3)
        bias = ndtri(below)
        deviation = away.mean() - away
        spread = float((deviation**2).sum())
        acceleration = float((deviation**3).sum()) / (6.0 * spread**1.5) if spread > 0 else 0.0
        ends = [ndtr(bias + (bias + z) / (1.0 - acceleration * (bias + z))) for z in (tail, -tail)]
        stretched = centre[column] + stretch[column] * (good - centre[column])
        low[column], high[column] = np.quantile(stretched, ends)
    return Interval(low, high, plain.sigma)
