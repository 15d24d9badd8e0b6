"""Compiled peak fit: bin integrals with analytic gradients, Fisher scoring, thousands of refits a second.

A model is a sum of peaks and a smooth background, integrated over every bin.  One peak has four numbers (area,
position, width, extra), the background two; ``layout`` says what they mean.  ``width`` is the full width at half
maximum divided by 2.3548, for every shape, so that it is sigma for a Gaussian.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = [
    "BACKGROUND_CODES",
    "CONVERGED",
    "FAILED",
    "LEAST_SQUARES",
    "LIKELIHOOD",
    "LONG",
    "SHAPE_CODES",
    "expected_counts",
    "fit_counts",
    "fit_many",
]

SHAPE_CODES: Final = {"gaussian": 0, "lorentzian": 1, "pseudo_voigt": 2, "skewed_gaussian": 3}
BACKGROUND_CODES: Final = {"none": 0, "constant": 1, "linear": 2, "exponential": 3, "power_law": 4, "template": 5}
LIKELIHOOD, LEAST_SQUARES = 0, 1
CONVERGED, LONG, FAILED = 0, 1, 2

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]

_ROOT_HALF: Final = math.sqrt(0.5)
_ROOT_2PI: Final = math.sqrt(2.0 * math.pi)
_HALF_WIDTH: Final = math.sqrt(2.0 * math.log(2.0))


@kernel
def _normal(x: float) -> tuple[float, float]:
    """Return distribution function and density of the standard normal."""
    return 0.5 * math.erfc(-x * _ROOT_HALF), math.exp(-0.5 * x * x) / _ROOT_2PI


@kernel
def _cauchy(t: float) -> tuple[float, float]:
    """Return distribution function and density of a Lorentzian whose half width is that of the standard normal."""
    x = t / _HALF_WIDTH
    return 0.5 + math.atan(x) / math.pi, 1.0 / (math.pi * _HALF_WIDTH * (1.0 + x * x))


@kernel
def _shape(code: int, t: float, extra: float) -> tuple[float, float, float]:
    """Return distribution function, density and derivative by ``extra`` of a unit peak at ``t`` widths."""
    if code == 0:
        value, density = _normal(t)
        return value, density, 0.0
    if code == 1:
        value, density = _cauchy(t)
        return value, density, 0.0
    if code == 2:
        narrow, narrow_density = _normal(t)
        wide, wide_density = _cauchy(t)
        return (
            narrow + extra * (wide - narrow),
            narrow_density + extra * (wide_density - narrow_density),
            wide - narrow,
        )
    # Two-piece normal: scales 1 - extra left and 1 + extra right of the mode, one height.
    if t < 0.0:
        x = t / (1.0 - extra)
        value, density = _normal(x)
        return (1.0 - extra) * value, density, -value + density * x
    x = t / (1.0 + extra)
    value, density = _normal(x)
    return 0.5 * (1.0 - extra) + (1.0 + extra) * (value - 0.5), density, value - 1.0 - density * x


@kernel
def _log_sinhc(x: float) -> tuple[float, float]:
    """Return sinh(x)/x and the derivative of its logarithm."""
    if abs(x) < 0.03:  # series: relative error below 1e-12 there, and no cancellation
        square = x * x
        return 1.0 + square / 6.0 * (1.0 + square / 20.0), x / 3.0 * (1.0 - square / 15.0 * (1.0 - 2.0 * square / 21.0))
    return math.sinh(x) / x, 1.0 / math.tanh(x) - 1.0 / x


@kernel
def _background(
    code: int, a: float, b: float, low: float, high: float, template: float, first: float, second: float
) -> tuple[float, float, float]:
    """Return the background's integral over [a, b] within the range [low, high], and its two derivatives."""
    width = b - a
    if code == 1:
        return first * width, width, 0.0
    if code == 2:
        t = (0.5 * (a + b) - low) / (high - low)
        return width * (first * (1.0 - t) + second * t), width * (1.0 - t), width * t
    if code == 3:
        middle, step = 0.5 * (a + b), width / (high - low)
        t = (middle - 0.5 * (low + high)) / (high - low)
        ratio, slope = _log_sinhc(0.5 * second * step)
        unit = width * math.exp(-second * t) * ratio
        return first * unit, unit, first * unit * (-t + 0.5 * step * slope)
    if code == 4:
        reference = math.sqrt(low * high)
        ya, yb = math.log(a / reference), math.log(b / reference)
        middle, step = 0.5 * (ya + yb), yb - ya
        power = 1.0 - second
        ratio, slope = _log_sinhc(0.5 * power * step)
        unit = reference * step * math.exp(power * middle) * ratio
        return first * unit, unit, -first * unit * (middle + 0.5 * step * slope)
    if code == 5:
        return first * template, template, 0.0
    return 0.0, 0.0, 0.0


@kernel
def _untie(layout: Integers, multiples: Floats, inner: Floats, full: Floats, chain: Floats) -> None:
    """Turn the fit's own parameters into those of the model; ``chain`` receives d full / d inner.

    ``layout`` = (shape, background, peaks, position tie, width tie, logarithmic axis, objective).  Position tie 1:
    multiples of one conductance (held by the first peak); 2: the same behind a series resistance, whose rho = R G0 is
    held by the second peak's position.  Width tie 1: equal relative widths (held by the first peak).
    """
    peaks, position_tie, width_tie, logarithmic = layout[2], layout[3], layout[4], layout[5]
    size = full.shape[0]
    for i in range(size):
        full[i] = inner[i]
        for j in range(size):
            chain[i, j] = 1.0 if i == j else 0.0
    if position_tie > 0:
        base = inner[1]
        rho = inner[5] if position_tie == 2 else 0.0
        for peak in range(peaks):
            row, number = 4 * peak + 1, multiples[peak]
            for j in range(size):
                chain[row, j] = 0.0
            true = number * (10.0**base if logarithmic else base)
            rest = 1.0 + rho * true
            if logarithmic:
                full[row] = math.log10(true / rest)
                chain[row, 1] = 1.0 / rest
                if position_tie == 2:
                    chain[row, 5] = -true / rest / math.log(10.0)
            else:
                full[row] = true / rest
                chain[row, 1] = number / (rest * rest)
                if position_tie == 2:
                    chain[row, 5] = -true * true / (rest * rest)
    if width_tie > 0:
        relative = inner[2]
        for peak in range(peaks):
            row = 4 * peak + 2
            for j in range(size):
                chain[row, j] = 0.0
            if logarithmic:
                full[row] = relative
                chain[row, 2] = 1.0
            else:
                full[row] = relative * full[row - 1]
                for j in range(size):
                    chain[row, j] = relative * chain[row - 1, j]
                chain[row, 2] += full[row - 1]


@kernel
def _model(
    layout: Integers, low: Floats, high: Floats, template: Floats, full: Floats, expected: Floats, slopes: Floats
) -> None:
    """Fill the bin integrals of the model and their derivatives by the model's parameters."""
    shape, background, peaks = layout[0], layout[1], layout[2]
    bins = low.shape[0]
    start, stop = low[0], high[bins - 1]
    last = 4 * peaks
    for k in range(bins):
        value, by_first, by_second = _background(
            background, low[k], high[k], start, stop, template[k], full[last], full[last + 1]
        )
        expected[k] = value
        slopes[k, last] = by_first
        slopes[k, last + 1] = by_second
    for peak in range(peaks):
        column = 4 * peak
        area, position, width, extra = full[column], full[column + 1], full[column + 2], full[column + 3]
        edge = low[0] - 1.0
        value_a, density_a, extra_a, t_a = 0.0, 0.0, 0.0, 0.0
        for k in range(bins):
            if low[k] != edge:
                t_a = (low[k] - position) / width
                value_a, density_a, extra_a = _shape(shape, t_a, extra)
            edge = high[k]
            t_b = (edge - position) / width
            value_b, density_b, extra_b = _shape(shape, t_b, extra)
            share = value_b - value_a
            expected[k] += area * share
            slopes[k, column] = share
            slopes[k, column + 1] = -area * (density_b - density_a) / width
            slopes[k, column + 2] = -area * (t_b * density_b - t_a * density_a) / width
            slopes[k, column + 3] = area * (extra_b - extra_a)
            value_a, density_a, extra_a, t_a = value_b, density_b, extra_b, t_b


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
    layout : (7,) int64
        See :func:`_untie`.
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
    _untie(layout, multiples, inner, full, chain)
    _model(layout, low, high, template, full, expected, slopes)
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
            _untie(layout, multiples, trial, full, chain)
            _model(layout, low, high, template, full, expected, slopes)
            value = _score(objective, counts, weights, floor, expected)
            if math.isfinite(value) and value < score:
                accepted = True
                break
            damping = max(damping * 8.0, 1e-6)
            if damping > 1e12:
                break
        if not accepted:
            # No step lowers the objective any more: converged to rounding if the start of this step was flat enough.
            _untie(layout, multiples, inner, full, chain)
            _model(layout, low, high, template, full, expected, slopes)
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
        _untie(layout, multiples, inner, found[row], chain)
    return found, status, score


@kernel
def expected_counts(
    layout: Integers, multiples: Floats, low: Floats, high: Floats, template: Floats, inner: Floats
) -> tuple[Floats, Floats, Floats, Floats]:
    """Return bin integrals, their derivatives by the model's parameters, the model's parameters, and d full/d inner."""
    size, bins = inner.shape[0], low.shape[0]
    full, chain = np.empty(size), np.empty((size, size))
    expected, slopes = np.empty(bins), np.zeros((bins, size))
    _untie(layout, multiples, inner, full, chain)
    _model(layout, low, high, template, full, expected, slopes)
    return expected, slopes, full, chain


@warm_up
def _compile() -> None:
    """Compile every kernel for the types used in earnest."""
    edges = np.linspace(0.0, 1.0, 9)
    low, high = edges[:-1].copy(), edges[1:].copy()
    counts = np.array([1.0, 2.0, 5.0, 9.0, 9.0, 4.0, 2.0, 1.0])
    layout = np.array([0, 1, 1, 0, 0, 0, 0], np.int64)
    start = np.array([20.0, 0.5, 0.2, 0.0, 3.0, 0.0])
    free = np.array([0, 1, 2, 4], np.int64)
    lower, upper = np.array([0.0, 0.0, 0.01, 0.0, 0.0, 0.0]), np.array([1e3, 1.0, 1.0, 0.0, 1e3, 0.0])
    one = np.ones(8)
    multiples = np.ones(1)
    expected_counts(layout, multiples, low, high, one, start)
    fit_counts(layout, multiples, low, high, counts, one, one, free, lower, upper, start.copy(), 1e-9, 50)
    fit_many(layout, multiples, low, high, np.stack([counts, counts]), one, one, free, lower, upper, start, 1e-9, 50)
