"""Compiled peak fit: Fisher scoring on analytic gradients, thousands of refits a second."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up
from meseta.peaks.line_kernels import fill_model, untie

__all__ = [
    "CONVERGED",
    "FAILED",
    "LEAST_SQUARES",
    "LIKELIHOOD",
    "LONG",
    "fit_counts",
    "fit_many",
]

LIKELIHOOD, LEAST_SQUARES = 0, 1
CONVERGED, LONG, FAILED = 0, 1, 2

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]


@kernel
def _score(objective: int, counts: Floats, weights: Floats, floor: float, expected: Floats) -> float:
    """Return what is minimised: Poisson deviance (Baker, Cousins 1984) or weighted squares."""
    total = 0.0
    for k in range(counts.shape[0]):
        if objective == 0:
            mu = max(expected[k], floor)
            total += 2.0 * (mu - counts[k])
            if counts[k] > 0.0:
                total += 2.0 * counts[k] * math.log(counts[k] / mu)
        else:
            rest = counts[k] - expected[k]
            total += weights[k] * rest * rest
    return total


@kernel
def _normal_equations(
    layout: Integers,
    counts: Floats,
    weights: Floats,
    floor: float,
    expected: Floats,
    slopes: Floats,
    chain: Floats,
    free: Integers,
    gradient: Floats,
    information: Floats,
) -> None:
    """Fill gradient and expected information by the free parameters (given by index)."""
    objective = layout[6]
    tied = layout[3] > 0 or layout[4] > 0
    size, count = slopes.shape[1], free.shape[0]
    row = np.empty(count)
    for i in range(count):
        gradient[i] = 0.0
        for j in range(count):
            information[i, j] = 0.0
    for k in range(counts.shape[0]):
        if objective == 0:
            mu = max(expected[k], floor)
            weight = 1.0 / mu
            rest = counts[k] - mu
        else:
            weight = weights[k]
            rest = counts[k] - expected[k]
        for i in range(count):
            if tied:
                value = 0.0
                for full in range(size):
                    value += slopes[k, full] * chain[full, free[i]]
                row[i] = value
            else:
                row[i] = slopes[k, free[i]]
        for i in range(count):
            part = weight * row[i]
            gradient[i] += part * rest
            for j in range(i + 1):
                information[i, j] += part * row[j]
    for i in range(count):
        for j in range(i):
            information[j, i] = information[i, j]


@kernel
def _solve(
    matrix: Floats, right: Floats, damping: float, count: int, chosen: Truths, factor: Floats, step: Floats
) -> bool:
    """Solve (M + damping diag M) step = right on the chosen rows by Cholesky; return whether it could be done."""
    for i in range(count):
        if not chosen[i]:
            continue
        for j in range(i + 1):
            if not chosen[j]:
                continue
            value = matrix[i, j]
            scale = math.sqrt(matrix[i, i] * matrix[j, j])
            value = value / scale if scale > 0.0 else 0.0
            if i == j:
                value = 1.0 + damping
            for k in range(j):
                if chosen[k]:
                    value -= factor[i, k] * factor[j, k]
            if i == j:
                if value <= 1e-14 or matrix[i, i] <= 0.0:
                    return False
                factor[i, i] = math.sqrt(value)
            else:
                factor[i, j] = value / factor[j, j]
    for i in range(count):
        step[i] = 0.0
        if not chosen[i]:
            continue
        value = right[i] / math.sqrt(matrix[i, i])
        for k in range(i):
            if chosen[k]:
                value -= factor[i, k] * step[k]
        step[i] = value / factor[i, i]
    for i in range(count - 1, -1, -1):
        if not chosen[i]:
            continue
        value = step[i]
        for k in range(i + 1, count):
            if chosen[k]:
                value -= factor[k, i] * step[k]
        step[i] = value / factor[i, i]
    for i in range(count):
        if chosen[i]:
            step[i] /= math.sqrt(matrix[i, i])
    return True


@kernel
def fit_counts(
    layout: Integers,
    multiples: Floats,
    low: Floats,
    high: Floats,
    counts: Floats,
    weights: Floats,
    template: Floats,
    free: Integers,
    lower: Floats,
    upper: Floats,
    inner: Floats,
    tolerance: float,
    most: int,
) -> tuple[int, float, int, Floats]:
    """Fit one histogram; ``inner`` holds the start and receives the result.

    Levenberg-Marquardt on the expected information (Fisher scoring for the likelihood, Gauss-Newton for least squares),
    within bounds by an active set.

    Parameters
    ----------
    layout : (7 + peaks,) int64
        See :func:`untie`.
    multiples : (peaks,) float64
        Multiple of the tied conductance of each peak.
    low, high : (bins,) float64
        Bin edges on the axis; bins need not touch.
    counts, weights, template : (bins,) float64
        Data; weights of least squares; shape of a template background.
    free : (n,) int64
        Indices of the free parameters.
    lower, upper, inner : (4 peaks + 2,) float64
    tolerance : float
        Converged where the expected fall of the objective is below this share of the objective.
    most : int
        Largest number of steps.

    Returns
    -------
    status, score, steps, information : int, float, int, (n, n) float64
    """
    size, count, bins = inner.shape[0], free.shape[0], low.shape[0]
    full, trial = np.empty(size), np.empty(size)
    chain = np.empty((size, size))
    expected, slopes = np.empty(bins), np.zeros((bins, size))
    gradient, information = np.empty(count), np.zeros((count, count))
    factor, step = np.empty((count, count)), np.empty(count)
    chosen = np.ones(count, np.bool_)
    total = 0.0
    for k in range(bins):
        total += abs(counts[k])
    floor = max(total / bins * 1e-12, 1e-300)
    objective = layout[6]
    untie(layout, multiples, inner, full, chain)
    fill_model(layout, low, high, template, full, expected, slopes)
    score = _score(objective, counts, weights, floor, expected)
    _normal_equations(layout, counts, weights, floor, expected, slopes, chain, free, gradient, information)
    if not math.isfinite(score):
        return FAILED, score, 0, information
    damping = 1e-4
    for steps in range(most):
        for i in range(count):
            at = free[i]
            outward = (inner[at] <= lower[at] and gradient[i] < 0.0) or (inner[at] >= upper[at] and gradient[i] > 0.0)
            chosen[i] = not outward and information[i, i] > 0.0
        accepted = False
        for _ in range(30):
            solved = _solve(information, gradient, damping, count, chosen, factor, step)
            if not solved:
                damping = max(damping * 10.0, 1e-6)
                continue
            promise = 0.0
            for i in range(count):
                if chosen[i]:
                    promise += gradient[i] * step[i]
            if promise <= tolerance * max(score, floor):
                return CONVERGED, score, steps, information
            for i in range(size):
                trial[i] = inner[i]
            for i in range(count):
                if chosen[i]:
                    at = free[i]
                    trial[at] = min(max(inner[at] + step[i], lower[at]), upper[at])
            untie(layout, multiples, trial, full, chain)
            fill_model(layout, low, high, template, full, expected, slopes)
            value = _score(objective, counts, weights, floor, expected)
            if math.isfinite(value) and value < score:
                accepted = True
                break
            damping = max(damping * 8.0, 1e-6)
            if damping > 1e12:
                break
        if not accepted:
            # No step lowers the objective any more: converged to rounding if the start of this step was flat enough.
            untie(layout, multiples, inner, full, chain)
            fill_model(layout, low, high, template, full, expected, slopes)
            _normal_equations(layout, counts, weights, floor, expected, slopes, chain, free, gradient, information)
            return (CONVERGED if damping > 1e6 else FAILED), score, steps, information
        for i in range(size):
            inner[i] = trial[i]
        score = value
        damping *= 0.1
        _normal_equations(layout, counts, weights, floor, expected, slopes, chain, free, gradient, information)
    return LONG, score, most, information


@kernel
def fit_many(
    layout: Integers,
    multiples: Floats,
    low: Floats,
    high: Floats,
    many: Floats,
    weights: Floats,
    template: Floats,
    free: Integers,
    lower: Floats,
    upper: Floats,
    start: Floats,
    tolerance: float,
    most: int,
) -> tuple[Floats, Integers, Floats]:
    """Refit every row of ``many`` (replicates x bins) from one start; return model parameters, status and score."""
    rows, size = many.shape[0], start.shape[0]
    found, status, score = np.empty((rows, size)), np.empty(rows, np.int64), np.empty(rows)
    inner, chain = np.empty(size), np.empty((size, size))
    for row in range(rows):
        for i in range(size):
            inner[i] = start[i]
        status[row], score[row], _, _ = fit_counts(
            layout, multiples, low, high, many[row], weights, template, free, lower, upper, inner, tolerance, most
        )
        untie(layout, multiples, inner, found[row], chain)
    return found, status, score


@warm_up
def _compile() -> None:
    """Compile every kernel for the types used in earnest."""
    edges = np.linspace(0.0, 1.0, 9)
    low, high = edges[:-1].copy(), edges[1:].copy()
    counts = np.array([1.0, 2.0, 5.0, 9.0, 9.0, 4.0, 2.0, 1.0])
    layout = np.array([0, 1, 1, 0, 0, 0, 0, 0], np.int64)
    start = np.array([20.0, 0.5, 0.2, 0.0, 3.0, 0.0])
    free = np.array([0, 1, 2, 4], np.int64)
    lower, upper = np.array([0.0, 0.0, 0.01, 0.0, 0.0, 0.0]), np.array([1e3, 1.0, 1.0, 0.0, 1e3, 0.0])
    one = np.ones(8)
    multiples = np.ones(1)
    fit_counts(layout, multiples, low, high, counts, one, one, free, lower, upper, start.copy(), 1e-9, 50)
    fit_many(layout, multiples, low, high, np.stack([counts, counts]), one, one, free, lower, upper, start, 1e-9, 50)
