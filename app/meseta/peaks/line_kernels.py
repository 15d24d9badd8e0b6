"""Compiled line shapes and backgrounds: bin integrals of a model and their derivatives.

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

__all__ = ["BACKGROUND_CODES", "POSITION_TIED", "SHAPE_CODES", "WIDTH_TIED", "expected_counts", "fill_model", "untie"]

SHAPE_CODES: Final = {"gaussian": 0, "lorentzian": 1, "pseudo_voigt": 2, "skewed_gaussian": 3}
BACKGROUND_CODES: Final = {"none": 0, "constant": 1, "linear": 2, "exponential": 3, "power_law": 4, "template": 5}
POSITION_TIED: Final = 1
WIDTH_TIED: Final = 2
_FLAGS: Final = 7

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

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
def _carrier(layout: Integers, bit: int, which: int) -> int:
    """Return the peak that holds the number shared by all peaks with this flag: their first (0), their second (1)."""
    seen = 0
    for peak in range(layout[2]):
        if layout[_FLAGS + peak] & bit:
            if seen == which:
                return peak
            seen += 1
    return -1


@kernel
def untie(layout: Integers, multiples: Floats, inner: Floats, full: Floats, chain: Floats) -> None:
    """Turn the fit's own parameters into those of the model; ``chain`` receives d full / d inner.

    ``layout`` = (shape, background, peaks, position tie, width tie, logarithmic axis, objective, flags of each peak).
    Position tie 1: the peaks with the flag :data:`POSITION_TIED` are multiples of one conductance (held by the first of
    them); 2: the same behind a series resistance, whose rho = R G0 is held by the position of the second of them.
    Width tie 1: the peaks with :data:`WIDTH_TIED` have equal relative widths (held by the first of them).
    """
    peaks, position_tie, width_tie, logarithmic = layout[2], layout[3], layout[4], layout[5]
    size = full.shape[0]
    for i in range(size):
        full[i] = inner[i]
        for j in range(size):
            chain[i, j] = 1.0 if i == j else 0.0
    if position_tie > 0:
        holder = 4 * _carrier(layout, POSITION_TIED, 0) + 1
        second = 4 * _carrier(layout, POSITION_TIED, 1) + 1
        base = inner[holder]
        rho = inner[second] if position_tie == 2 else 0.0
        for peak in range(peaks):
            if not layout[_FLAGS + peak] & POSITION_TIED:
                continue
            row, number = 4 * peak + 1, multiples[peak]
            for j in range(size):
                chain[row, j] = 0.0
            true = number * (10.0**base if logarithmic else base)
            rest = 1.0 + rho * true
            if logarithmic:
                full[row] = math.log10(true / rest)
                chain[row, holder] = 1.0 / rest
                if position_tie == 2:
                    chain[row, second] = -true / rest / math.log(10.0)
            else:
                full[row] = true / rest
                chain[row, holder] = number / (rest * rest)
                if position_tie == 2:
                    chain[row, second] = -true * true / (rest * rest)
    if width_tie > 0:
        holder = 4 * _carrier(layout, WIDTH_TIED, 0) + 2
        relative = inner[holder]
        for peak in range(peaks):
            if not layout[_FLAGS + peak] & WIDTH_TIED:
                continue
            row = 4 * peak + 2
            for j in range(size):
                chain[row, j] = 0.0
            if logarithmic:
                full[row] = relative
                chain[row, holder] = 1.0
            else:
                full[row] = relative * full[row - 1]
                for j in range(size):
                    chain[row, j] = relative * chain[row - 1, j]
                chain[row, holder] += full[row - 1]


@kernel
def fill_model(
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
def expected_counts(
    layout: Integers, multiples: Floats, low: Floats, high: Floats, template: Floats, inner: Floats
) -> tuple[Floats, Floats, Floats, Floats]:
    """Return bin integrals, their derivatives by the model's parameters, the model's parameters, and d full/d inner."""
    size, bins = inner.shape[0], low.shape[0]
    full, chain = np.empty(size), np.empty((size, size))
    expected, slopes = np.empty(bins), np.zeros((bins, size))
    untie(layout, multiples, inner, full, chain)
    fill_model(layout, low, high, template, full, expected, slopes)
    return expected, slopes, full, chain


@warm_up
def _compile() -> None:
    """Compile every kernel for the types used in earnest."""
    edges = np.linspace(0.0, 1.0, 9)
    layout = np.array([0, 1, 1, 0, 0, 0, 0, 0], np.int64)
    start = np.array([20.0, 0.5, 0.2, 0.0, 3.0, 0.0])
    expected_counts(layout, np.ones(1), edges[:-1].copy(), edges[1:].copy(), np.ones(8), start)
