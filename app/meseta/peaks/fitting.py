"""One fit, and thousands of refits, of a model to counts."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from meseta.peaks import kernels
from meseta.peaks.model import Model
from meseta.work import Work

__all__ = ["Fitted", "Refitted", "fit_model", "refit"]

Floats = npt.NDArray[np.float64]

_TOLERANCE = 1e-12
_STEPS = 4000
_REFIT_TOLERANCE = 1e-8


@dataclass(frozen=True)
class Fitted:
    """One fit.

    Attributes
    ----------
    model : Model
    inner : (4 peaks + 2,) float64
        Parameters of the fit (tied ones stand only once).
    peaks : (peaks, 4) float64
        Area in counts, position on the axis, width on the axis, extra.
    score : float
        Poisson deviance, or weighted sum of squares.
    converged : bool
    steps : int
    covariance : (n, n) float64
        Inverse of the expected information of the free parameters (``free``); right for independent counts only; NaN
        where it cannot be inverted.
    free : (n,) int64
    """

    model: Model
    inner: Floats
    peaks: Floats
    score: float
    converged: bool
    steps: int
    covariance: Floats
    free: npt.NDArray[np.int64]

    @property
    def background(self) -> Floats:
        """(2,) the background's two numbers."""
        return self.inner[-2:]

    @property
    def degrees_of_freedom(self) -> int:
        """Bins less free parameters, at least 1."""
        return max(len(self.model.low) - len(self.free), 1)


@dataclass(frozen=True)
class Refitted:
    """Many refits.

    Attributes
    ----------
    peaks : (replicates, peaks, 4) float64
        NaN rows where a refit failed.
    good : (replicates,) bool
    """

    peaks: Floats
    good: npt.NDArray[np.bool_]


def fit_model(
    model: Model, counts: npt.ArrayLike, weights: npt.ArrayLike | None = None, start: Floats | None = None
) -> Fitted:
    """Fit a model to counts by extended binned Poisson likelihood, or by least squares.

    Parameters
    ----------
    model : Model
    counts : (bins,) float64
        Counts, or any data where weights are given.  Must be finite.
    weights : (bins,) array_like, optional
        Inverse variances; where given, weighted least squares is done instead of the likelihood.
    start : (4 peaks + 2,) float64, optional
        Starting values in place of the model's own.

    Notes
    -----
    Likelihood: Baker, Cousins, Nucl. Instrum. Methods 221, 437 (1984); the model is integrated over every bin.
    """
    data = np.ascontiguousarray(counts, float)
    layout = model.layout(least_squares=weights is not None)
    weight = np.ones(len(data)) if weights is None else np.ascontiguousarray(weights, float)
    free, (lower, upper) = model.free(), model.bounds()
    inner = model.start(data) if start is None else np.clip(np.array(start, float), lower, upper)
    status, score, steps, information = kernels.fit_counts(
        layout,
        model.numbers(),
        model.low,
        model.high,
        data,
        weight,
        model.template_counts(),
        free,
        lower,
        upper,
        inner,
        _TOLERANCE,
        _STEPS,
    )
    return Fitted(
        model=model,
        inner=inner,
        peaks=model.unpacked(inner),
        score=float(score),
        converged=int(status) == kernels.CONVERGED and bool(np.isfinite(inner).all()),
        steps=int(steps),
        covariance=_inverse(information),
        free=free,
    )


def _inverse(information: Floats) -> Floats:
    """Return the inverse of a positive matrix, by its correlation form; NaN where it is singular."""
    scale = np.sqrt(np.diag(information))
    if not len(scale) or not (scale > 0).all() or not np.isfinite(information).all():
        return np.full(information.shape, np.nan)
    unit = information / np.outer(scale, scale)
    if np.linalg.cond(unit) > 1e14:
        return np.full(information.shape, np.nan)
    inverse: Floats = np.linalg.inv(unit) / np.outer(scale, scale)
    return inverse


def refit(
    fitted: Fitted,
    many: npt.ArrayLike,
    work: Work,
    weights: npt.ArrayLike | None = None,
    templates: Floats | None = None,
) -> Refitted:
    """Refit every replicate from the fit's own result, peaks matched to those of the fit.

    Parameters
    ----------
    fitted : Fitted
    many : (replicates, bins) array_like
        Counts of every replicate over the bins of the model.
    work : Work
        Replicates are shared among its threads; the result does not depend on how.
    weights : (bins,) array_like, optional
        As in :func:`fit_model`.
    templates : (replicates, bins) float64, optional
        Shape of a template background in each replicate; that of the model in all where it is not given.
    """
    model, rows = fitted.model, np.ascontiguousarray(many, float)
    weight = np.ones(rows.shape[1]) if weights is None else np.ascontiguousarray(weights, float)
    layout = model.layout(least_squares=weights is not None)
    free, (lower, upper) = model.free(), model.bounds()

    def some(first: int, last: int, template: Floats) -> tuple[Floats, npt.NDArray[np.int64]]:
        found, status, _ = kernels.fit_many(
            layout,
            model.numbers(),
            model.low,
            model.high,
            rows[first:last],
            weight,
            template,
            free,
            lower,
            upper,
            fitted.inner,
            _REFIT_TOLERANCE,
            300,
        )
        return found, status

    def one(span: tuple[int, int]) -> tuple[Floats, npt.NDArray[np.int64]]:
        if templates is None:
            return some(*span, model.template_counts())
        each = [some(row, row + 1, np.ascontiguousarray(templates[row], float)) for row in range(*span)]
        return np.concatenate([part[0] for part in each]), np.concatenate([part[1] for part in each])

    edges = np.linspace(0, len(rows), min(len(rows), 4 * work.threads) + 1).astype(int)
    spans = [(int(a), int(b)) for a, b in pairwise(edges)]
    parts = list(work.each(one, spans, "fitting replicates", sizes=[b - a for a, b in spans], unit="replicates"))
    found = np.concatenate([part[0] for part in parts]) if parts else np.empty((0, model.size))
    status = np.concatenate([part[1] for part in parts]) if parts else np.empty(0, np.int64)
    peaks = found[:, :-2].reshape(len(rows), model.peaks, 4)
    good = (status == kernels.CONVERGED) & np.isfinite(found).all(axis=1)
    peaks[~good] = np.nan
    return Refitted(_matched(peaks, fitted.peaks, good), good)


def _matched(peaks: Floats, reference: Floats, good: npt.NDArray[np.bool_]) -> Floats:
    """Give every replicate's peaks the order of the fit's own, so that neighbours do not swap."""
    order = np.argsort(reference[:, 1])
    swapped = good & (np.diff(peaks[:, order, 1], axis=1) < 0).any(axis=1)
    if not swapped.any():
        return peaks
    from scipy.optimize import linear_sum_assignment

    width = reference[:, 2]
    for row in np.flatnonzero(swapped):
        there = peaks[row]
        cost = ((there[None, :, 1] - reference[:, None, 1]) / width[:, None]) ** 2
        cost += np.log(np.maximum(there[None, :, 2], 1e-300) / width[:, None]) ** 2
        peaks[row] = there[linear_sum_assignment(cost)[1]]
    return peaks
