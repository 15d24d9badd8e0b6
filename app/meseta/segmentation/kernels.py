"""Compiled kernels of the change points: exact optimal partitioning, and piecewise lines on its candidates."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["merge_moments", "partition", "partition_lines"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

NOISIEST = 4.0
"""A stretch may be this much noisier (in variance) than the recording is on average at its conductance."""


@kernel
def partition(values: Floats, weights: Floats, penalty: float, minimum: int) -> tuple[Integers, float]:
    """Return the optimal partition into constant segments and its cost.

    Functional pruning (Maidstone et al. 2017).  The cost of "last change at s, mean mu" differs between two s by a
    function of mu that no later sample alters, so the lower envelope over s is kept as a row of intervals of mu, each
    owned by one s.  A newcomer enters with its ``minimum`` samples and takes every interval, or its outer parts, where
    it is cheaper; an s without an interval can never win again.

    Parameters
    ----------
    values : (n,) float64
        Finite; the sum of squares is taken about their mean by the caller.
    weights : (n,) float64, or (0,) where all are 1
    penalty : float
        Cost of a change.
    minimum : int
        Fewest samples a segment, at least 1 and at most n.

    Returns
    -------
    ends : (k,) int64
        Segment ends; the last is n.
    cost : float
        Weighted sum of squares about the means + penalty x (k - 1).
    """
    n = len(values)
    even = len(weights) == 0
    total = np.zeros(n + 1)
    square = np.zeros(n + 1)
    weight = np.zeros(n + 1)
    entry = np.full(n + 1, np.inf)
    entry[0] = 0.0
    came_from = np.zeros(n + 1, np.int64)
    room = 64
    edge, fresh_edge = np.empty(room + 1), np.empty(room + 1)
    owner, fresh_owner = np.empty(room, np.int64), np.empty(room, np.int64)
    base, fresh_base = np.empty(room), np.empty(room)
    pieces = 0
    lowest, highest = np.min(values), np.max(values)
    for t in range(1, n + 1):
        w = 1.0 if even else weights[t - 1]
        y = values[t - 1]
        weight[t] = weight[t - 1] + w
        total[t] = total[t - 1] + w * y
        square[t] = square[t - 1] + w * y * y
        s = t - minimum
        if s >= 0 and (s == 0 or s >= minimum):
            if 3 * pieces + 3 > room:
                room *= 2
                while 3 * pieces + 3 > room:
                    room *= 2
                edge, fresh_edge = np.append(edge, np.empty(room + 1 - len(edge))), np.empty(room + 1)
                owner, fresh_owner = np.append(owner, np.empty(room - len(owner), np.int64)), np.empty(room, np.int64)
                base, fresh_base = np.append(base, np.empty(room - len(base))), np.empty(room)
            own_base, own_total, own_weight = entry[s] - square[s], total[s], weight[s]
            count = 0
            mine = False
            if pieces == 0:
                fresh_edge[0], fresh_owner[0], fresh_base[0], count = lowest, s, own_base, 1
            for p in range(pieces):
                low, high, r = edge[p], edge[p + 1], owner[p]
                gain, lean, bend = own_base - base[p], own_total - total[r], own_weight - weight[r]
                keep_low, keep_high = low, high
                if gain + low * (2.0 * lean - low * bend) < 0.0 or gain + high * (2.0 * lean - high * bend) < 0.0:
                    if bend > 0.0:
                        middle = lean / bend
                        half = middle * middle + gain / bend
                        if half > 0.0:
                            half = math.sqrt(half)
                            keep_low, keep_high = max(low, middle - half), min(high, middle + half)
                        else:
                            keep_high = low - 1.0
                    else:
                        keep_high = low - 1.0
                    if keep_low >= keep_high:
                        keep_low, keep_high = high, high
                if keep_low > low and not mine:
                    fresh_edge[count], fresh_owner[count], fresh_base[count] = low, s, own_base
                    count += 1
                    mine = True
                if keep_high > keep_low or (keep_high == high and keep_low == low):
                    fresh_edge[count], fresh_owner[count], fresh_base[count] = keep_low, r, base[p]
                    count += 1
                    mine = False
                    if keep_high < high:
                        fresh_edge[count], fresh_owner[count], fresh_base[count] = keep_high, s, own_base
                        count += 1
                        mine = True
            fresh_edge[count] = highest
            edge, fresh_edge = fresh_edge, edge
            owner, fresh_owner = fresh_owner, owner
            base, fresh_base = fresh_base, base
            pieces = count
        best, choice = np.inf, 0
        for p in range(pieces):
            r = owner[p]
            cost = base[p] + square[t]
            if weight[t] > weight[r]:
                away = total[t] - total[r]
                cost -= away * away / (weight[t] - weight[r])
            if cost < best:
                best, choice = cost, r
        entry[t] = best + penalty
        came_from[t] = choice
    return _ends(came_from), entry[n] - penalty


@kernel
def _ends(came_from: Integers) -> Integers:
    """Return the segment ends that a table of predecessors leads back through."""
    t, count = len(came_from) - 1, 0
    while t > 0:
        t, count = came_from[t], count + 1
    ends = np.empty(count, np.int64)
    t = len(came_from) - 1
    for k in range(count - 1, -1, -1):
        ends[k] = t
        t = came_from[t]
    return ends


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
def _moments(values: Floats, weights: Floats, begin: int, end: int, out: Floats) -> None:
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
        _moments(values, weights, begin, candidates[j], pieces[j])
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
    steps = _ends(came_from)
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
    ends, _ = partition(values, np.empty(0), 0.1, 1)
    partition(values, np.ones(4), 0.1, 1)
    partition_lines(values, np.ones(4), ends, np.ones(len(ends)), 0.1)
