"""Compiled kernels of the change points: exact optimal partitioning, and piecewise lines on its candidates."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["fill_moments", "merge_moments", "partition", "partition_lines"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Row = np.uint64

ONE = np.uint64(1)
LOW, TOTAL, WEIGHT, BASE, OWNER, INVERSE, MIDDLE, VERTEX = (np.uint64(column) for column in range(8))
"""Columns of the envelope: lower edge of the interval of means, the owner's sums and cost, the parabola's vertex.
Unsigned row and column numbers spare the test for indices that count from the end, a quarter of the time."""
NOISIEST = 4.0
"""A stretch may be this much noisier (in variance) than the recording is on average at its conductance."""


@kernel
def _put(rows: Floats, at: Row, low: float, total: float, weight: float, base: float, owner: float) -> None:
    rows[at, LOW], rows[at, TOTAL], rows[at, WEIGHT], rows[at, BASE], rows[at, OWNER] = low, total, weight, base, owner


@kernel
def _lowest(rows: Floats, first: Row, stop: Row, weight: float, total: float, square: float) -> Row:
    """Fill each piece's vertex for the sums of the samples so far; return the row with the lowest one."""
    choice, best = first, np.inf
    p = first
    while p < stop:
        bend, lean = weight - rows[p, WEIGHT], total - rows[p, TOTAL]
        inverse = 1.0 / bend
        middle = lean * inverse if bend > 0.0 else 0.0
        vertex = rows[p, BASE] + square - lean * middle
        rows[p, INVERSE], rows[p, MIDDLE], rows[p, VERTEX] = inverse, middle, vertex
        if vertex < best:
            best, choice = vertex, p
        p += ONE
    return choice


@kernel
def _with_newcomer(
    rows: Floats, first: Row, stop: Row, into: Row, s: float, entry: float, weight: float, total: float, square: float
) -> Row:
    """Write the envelope with newcomer ``s``, whose cost is ``entry`` for every mean, to rows from ``into`` on.

    The vertices must be those for the sums at ``s``.  Returns the end of the new envelope.
    """
    q, mine, base = into, False, entry - square
    low = rows[first, LOW]
    p = first
    while p < stop:
        high, middle = rows[p + ONE, LOW], rows[p, MIDDLE]
        reach = (entry - rows[p, VERTEX]) * rows[p, INVERSE]
        if (low - middle) ** 2 <= reach and (high - middle) ** 2 <= reach:
            _put(rows, q, low, rows[p, TOTAL], rows[p, WEIGHT], rows[p, BASE], rows[p, OWNER])
            q, mine = q + ONE, False
        else:
            half = math.sqrt(reach) if reach > 0.0 else -1.0
            keep_low, keep_high = max(low, middle - half), min(high, middle + half)
            kept = keep_low < keep_high
            if (keep_low > low or not kept) and not mine:
                _put(rows, q, low, total, weight, base, s)
                q, mine = q + ONE, True
            if kept:
                _put(rows, q, keep_low, rows[p, TOTAL], rows[p, WEIGHT], rows[p, BASE], rows[p, OWNER])
                q, mine = q + ONE, keep_high < high
                if mine:
                    _put(rows, q, keep_high, total, weight, base, s)
                    q += ONE
        low = high
        p += ONE
    rows[q, LOW] = low
    return q


@kernel
def _advance(
    values: Floats,
    weights: Floats,
    penalty: float,
    minimum: int,
    recent: Floats,
    came_from: Integers,
    rows: Floats,
    begin: int,
    pieces: int,
) -> tuple[int, int, int]:
    """Go on after ``begin`` samples until all are done or the rows may become too few.

    ``rows`` has room for two envelopes, which take turns; the one at hand begins at row 0 on entry.  No array is
    assigned within the loop: counting its references would take longer than the search.  ``recent`` is a ring of the
    last minimum + 1 sums and entry costs.  Returns the samples done, the number of pieces, and the row in which the
    envelope at hand begins.
    """
    n, even = len(values), len(weights) == 0
    room = np.uint64(len(rows) // 2)
    first, stop = np.uint64(0), np.uint64(pieces)
    now = begin % len(recent)
    weight, total, square = recent[now, 0], recent[now, 1], recent[now, 2]
    for t in range(begin + 1, n + 1):
        now = now + 1 if now + 1 < len(recent) else 0
        s, then = t - minimum, now + 1 if now + 1 < len(recent) else 0
        if s == 0:
            stop = ONE
        elif s >= minimum:
            pieces = int(stop - first)
            if 3 * pieces + 3 > len(rows) // 2:
                return t - 1, pieces, int(first)
            if minimum > 1:
                _lowest(rows, first, stop, recent[then, 0], recent[then, 1], recent[then, 2])
            into = room - first
            stop = _with_newcomer(
                rows, first, stop, into, s, recent[then, 3], recent[then, 0], recent[then, 1], recent[then, 2]
            )
            first = into
        w = 1.0 if even else weights[t - 1]
        y = values[t - 1]
        weight, total, square, entry = weight + w, total + w * y, square + w * y * y, np.inf
        if s >= 0:
            choice = _lowest(rows, first, stop, weight, total, square)
            entry, came_from[t] = rows[choice, VERTEX] + penalty, int(rows[choice, OWNER])
        recent[now, 0], recent[now, 1], recent[now, 2], recent[now, 3] = weight, total, square, entry
    return n, int(stop - first), int(first)


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
    recent = np.zeros((minimum + 1, 4))
    came_from = np.zeros(n + 1, np.int64)
    rows = np.zeros((512, 8))
    rows[0, LOW], rows[1, LOW] = np.min(values), np.max(values)
    done, pieces = 0, 0
    while True:
        done, pieces, first = _advance(values, weights, penalty, minimum, recent, came_from, rows, done, pieces)
        if done == n:
            return _ends(came_from), recent[n % (minimum + 1), 3] - penalty
        larger = np.zeros((2 * len(rows), 8))
        larger[: pieces + 1] = rows[first : first + pieces + 1]
        rows = larger


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
