"""Compiled kernels that cut one trace into straight stretches of the variance-stabilised variable."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up
from meseta.segmentation.kernels import partition_lines
from meseta.segmentation.partition_kernels import partition

__all__ = ["Scale", "decades_between", "restored", "share_at", "stabilise", "stretches"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

BLOCK = 16
MOST_SAMPLES = 25_000
"""Longer traces are averaged in time before the search, which bounds its cost."""


class Scale(NamedTuple):
    """The variance-stabilised variable as kernels need it; see :class:`meseta.segmentation.scale.scale_of`."""

    floor: float
    sigma: float
    restless: float
    pitch: float
    table: Floats
    shares: Floats


@kernel
def stabilise(conductance: Floats, scale: Scale, out: Floats) -> None:
    """Fill ``out`` with the variance-stabilised variable; NaN stays NaN.

    The variable is odd in g = conductance - floor and tabulated on even steps of asinh(g / sigma).
    """
    last = len(scale.table) - 1
    for i in range(len(out)):
        g = (conductance[i] - scale.floor) / scale.sigma
        size = abs(g)
        place = math.log(size + math.sqrt(size * size + 1.0)) / scale.pitch
        if not math.isfinite(place):
            out[i] = np.nan
            continue
        k = min(int(place), last - 1)
        y = scale.table[k] + (place - k) * (scale.table[k + 1] - scale.table[k])
        out[i] = y if g >= 0.0 else -y


@kernel
def restored(y: float, scale: Scale) -> float:
    """Return g = conductance - floor of the variance-stabilised variable."""
    size = abs(y)
    k = min(max(int(np.searchsorted(scale.table, size)) - 1, 0), len(scale.table) - 2)
    place = (k + (size - scale.table[k]) / (scale.table[k + 1] - scale.table[k])) * scale.pitch
    g = math.sinh(place) * scale.sigma
    return g if y >= 0.0 else -g


@kernel
def share_at(y: float, scale: Scale) -> float:
    """Return the variance of a single sample over the long-run variance at y."""
    return scale.shares[min(int(np.searchsorted(scale.table, abs(y))), len(scale.shares) - 1)]


@kernel
def decades_between(y_from: float, y_to: float, scale: Scale) -> float:
    """Return log10 of the ratio of two conductances above the floor; infinite where one is not above it."""
    a, b = restored(y_from, scale), restored(y_to, scale)
    if a <= 0.0 or b <= 0.0:
        return np.inf if b > a else -np.inf
    return math.log10(b) - math.log10(a)


@kernel
def _kept_length(g: Floats, scale: Scale) -> tuple[int, int]:
    """Return how many samples to look at and how many of them lie above the floor.

    Blocks count from the closed end, so that a longer tail at the floor changes neither number.
    """
    above, last = 0, 0
    threshold, most = max(scale.sigma, scale.restless), 5.0 * scale.sigma
    for begin in range(0, len(g), BLOCK):
        end = min(begin + BLOCK, len(g))
        total, count = 0.0, 0
        for i in range(begin, end):
            if math.isfinite(g[i]):
                total += min(max(g[i] - scale.floor, -most), most)
                count += 1
        if count > 0 and total > threshold * count:
            above += end - begin
            last = end
    return min(len(g), last + 4 * BLOCK), above


@kernel
def _weigh(y: Floats, weights: Floats) -> None:
    """Give missing samples and one-sample spikes weight zero, and missing samples the value before them."""
    n = len(y)
    previous = 0.0
    for i in range(n):
        if math.isfinite(y[i]):
            previous = y[i]
            break
    for i in range(n):
        weights[i] = 1.0
        if not math.isfinite(y[i]):
            weights[i] = 0.0
            y[i] = previous
        previous = y[i]
    for i in range(1, n - 1):
        before, after = y[i] - y[i - 1], y[i] - y[i + 1]
        if before * after > 0.0 and min(abs(before), abs(after)) > 6.0 > abs(before - after):
            weights[i] = 0.0


@kernel
def _thinned(y: Floats, weights: Floats, factor: int) -> tuple[Floats, Floats]:
    """Return means over ``factor`` samples and their weights."""
    count = (len(y) + factor - 1) // factor
    means, sums = np.zeros(count), np.zeros(count)
    for b in range(count):
        for i in range(b * factor, min((b + 1) * factor, len(y))):
            sums[b] += weights[i]
            means[b] += weights[i] * y[i]
        if sums[b] > 0.0:
            means[b] /= sums[b]
        elif b > 0:
            means[b] = means[b - 1]
    return means, sums


@kernel
def _sharpened(y: Floats, weights: Floats, ends: Integers, reach: int) -> Integers:
    """Move each end to the sample, within ``reach``, that splits its surroundings best."""
    out = ends.copy()
    for j in range(len(ends) - 1):
        begin, end = max(ends[j] - 2 * reach, 0), min(ends[j] + 2 * reach, len(y))
        best, weight, total = -np.inf, 0.0, 0.0
        whole_weight, whole = np.sum(weights[begin:end]), np.sum(weights[begin:end] * y[begin:end])
        for i in range(begin, end - 1):
            weight += weights[i]
            total += weights[i] * y[i]
            rest = whole_weight - weight
            if weight <= 0.0 or rest <= 0.0 or abs(i + 1 - ends[j]) > reach:
                continue
            gain = total * total / weight + (whole - total) ** 2 / rest
            if gain > best:
                best, out[j] = gain, i + 1
    return np.unique(out)


@kernel
def stretches(
    g: Floats, scale: Scale, change_cost: float, line_cost: float
) -> tuple[Floats, Floats, Integers, Floats, float]:
    """Cut one trace into straight stretches of the variance-stabilised variable.

    Returns
    -------
    y, weights : (n,) float64
        The samples looked at (the tail at the floor is left away).
    ends : (k,) int64
    moments : (k, 6) float64
        Of each stretch; see :func:`meseta.segmentation.kernels.partition_lines`.
    evidence : float
        ln of the number of samples above the floor.
    """
    kept, above = _kept_length(g, scale)
    y, weights = np.empty(kept), np.empty(kept)
    stabilise(g[:kept], scale, y)
    evidence = math.log(max(above, 4 * BLOCK))
    if kept == 0:
        return y, weights, np.empty(0, np.int64), np.empty((0, 6)), evidence
    _weigh(y, weights)
    shift = np.mean(y)
    factor = (kept + MOST_SAMPLES - 1) // MOST_SAMPLES
    if factor > 1:
        means, sums = _thinned(y - shift, weights, factor)
        coarse, _ = partition(means, sums, change_cost * evidence, 1)
        candidates = _sharpened(y - shift, weights, np.minimum(coarse * factor, kept), factor)
    else:
        candidates, _ = partition(y - shift, weights, change_cost * evidence, 1)
    share = np.empty(len(candidates))
    begin = 0
    for j in range(len(candidates)):
        share[j] = share_at(y[(begin + candidates[j]) // 2], scale)
        begin = candidates[j]
    ends, moments = partition_lines(y, weights, candidates, share, line_cost * evidence)
    return y, weights, ends, moments, evidence


@warm_up
def _warm_up() -> None:
    scale = Scale(0.0, 0.01, 0.01, 0.5, np.linspace(0, 10, 16), np.ones(16))
    stretches(np.linspace(1, 0, 64), scale, 3.0, 4.0)
