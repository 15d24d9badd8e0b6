"""Compiled kernels of piecewise straight lines on the candidates that the change points give."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up
from meseta.segmentation.partition_kernels import ends_of

__all__ = ["fill_moments", "merge_moments", "partition_lines"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
NOISIEST = 4.0
"""A stretch may be this much noisier (in variance) than the recording is on average at its conductance."""


@kernel
def _line_cost(moments: Floats, share: float) -> float:
    """Return minus twice the log-likelihood of a line whose variance may exceed the model's up to ``NOISIEST`` times.

    ``moments``: weight, mean x, mean y, Sxx, Sxy, Syy.  ``share`` is the variance of a single sample under the model,
    in units of the long-run variance, and so the number of independent samples that one sample is worth.
    """
    rest = moments[5]
    if moments[3] > 0.0:
        rest -= moments[4] * moments[4] / moments[3]
    expected = share * moments[0]
    if rest <= expected or expected <= 0.0:
        return max(rest, 0.0)
    excess = min(rest / expected, NOISIEST)
    return expected * math.log(excess) + rest / excess


@kernel
def merge_moments(a: Floats, b: Floats) -> None:
    """Add the moments ``b`` of a later stretch to ``a`` (pairwise update, stable for any length)."""
    weight = a[0] + b[0]
    if b[0] <= 0.0:
        return
    if a[0] <= 0.0:
        a[:] = b
        return
    dx, dy, factor = b[1] - a[1], b[2] - a[2], a[0] * b[0] / weight
    a[3] += b[3] + dx * dx * factor
    a[4] += b[4] + dx * dy * factor
    a[5] += b[5] + dy * dy * factor
    a[1] += dx * b[0] / weight
    a[2] += dy * b[0] / weight
    a[0] = weight


@kernel
def fill_moments(values: Floats, weights: Floats, begin: int, end: int, out: Floats) -> None:
    """Fill the moments of samples ``begin`` to ``end``; x is the sample number."""
    out[:] = 0.0
    weight, x, y = 0.0, 0.0, 0.0
    for i in range(begin, end):
        weight += weights[i]
        x += weights[i] * i
        y += weights[i] * values[i]
    if weight <= 0.0:
        return
    x, y = x / weight, y / weight
    xx, xy, yy = 0.0, 0.0, 0.0
    for i in range(begin, end):
        dx, dy = i - x, values[i] - y
        xx += weights[i] * dx * dx
        xy += weights[i] * dx * dy
        yy += weights[i] * dy * dy
    out[0], out[1], out[2], out[3], out[4], out[5] = weight, x, y, xx, xy, yy


@kernel
def partition_lines(
    values: Floats, weights: Floats, candidates: Integers, share: Floats, penalty: float
) -> tuple[Integers, Floats]:
    """Return the optimal partition into straight lines with ends on a grid of candidates, and the lines' moments.

    Optimal partitioning with pruning (Killick, Fearnhead and Eckley 2012, constant 0: splitting a segment never costs
    more but the penalty, as every segment's cost is a maximised likelihood).

    Parameters
    ----------
    values, weights : (n,) float64
    candidates : (k,) int64
        Allowed segment ends, ascending; the last is n.
    share : (k,) float64
        Variance of a single sample over the long-run variance, in each stretch between candidates.
    penalty : float
        Cost of a change.

    Returns
    -------
    chosen : (m,) int64
        Chosen ends.
    moments : (m, 6) float64
        Weight, mean x, mean y, Sxx, Sxy, Syy of each segment.
    """
    k = len(candidates)
    pieces = np.empty((k, 6))
    begin = 0
    for j in range(k):
        fill_moments(values, weights, begin, candidates[j], pieces[j])
        begin = candidates[j]
    entry = np.zeros(k + 1)
    came_from = np.zeros(k + 1, np.int64)
    alive = np.empty(k + 1, np.int64)
    grown = np.empty((k + 1, 6))
    worth = np.zeros(k + 1)
    costs = np.empty(k + 1)
    count = 0
    for t in range(1, k + 1):
        alive[count] = t - 1
        grown[count] = 0.0
        worth[count] = 0.0
        count += 1
        best, choice = np.inf, 0
        for q in range(count):
            merge_moments(grown[q], pieces[t - 1])
            worth[q] += share[t - 1] * pieces[t - 1, 0]
            mean_share = worth[q] / grown[q, 0] if grown[q, 0] > 0.0 else 1.0
            costs[q] = entry[alive[q]] + _line_cost(grown[q], mean_share)
            if costs[q] < best:
                best, choice = costs[q], alive[q]
        entry[t] = best + penalty
        came_from[t] = choice
        kept = 0
        for q in range(count):
            if costs[q] <= entry[t]:
                if kept != q:
                    alive[kept], grown[kept], worth[kept] = alive[q], grown[q], worth[q]
                kept += 1
        count = kept
    steps = ends_of(came_from)
    chosen = np.empty(len(steps), np.int64)
    moments = np.empty((len(steps), 6))
    begin = 0
    for j in range(len(steps)):
        chosen[j] = candidates[steps[j] - 1]
        moments[j] = pieces[begin]
        for q in range(begin + 1, steps[j]):
            merge_moments(moments[j], pieces[q])
        begin = steps[j]
    return chosen, moments


@warm_up
def _warm_up() -> None:
    values = np.array([0.0, 0.1, 1.0, 1.1])
    partition_lines(values, np.ones(4), np.array([2, 4]), np.ones(2), 0.1)
