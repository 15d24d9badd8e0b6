"""Compiled kernels of the change points: exact optimal partitioning into constant segments."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["ends_of", "partition"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Place = np.uint64
"""Where a piece begins in a flat array of pieces.  One base, constant distances and no test for indices that count
from the end: with rows of a table the search takes a quarter longer."""

STEP = np.uint64(8)
LOW, EDGE, TOTAL, WEIGHT, BASE, OWNER, LEAST = (np.uint64(number) for number in range(7))
"""A piece of the envelope: its lower end among the means, the envelope's cost there, the owner's sums and cost, and a
lower bound of the lowest point of the owner's cost.  The piece after the last holds only the upper end."""


@kernel
def _put(
    pieces: Floats,
    at: Place,
    low: float,
    edge: float,
    total: float,
    weight: float,
    base: float,
    owner: float,
    least: float,
) -> None:
    pieces[at + LOW], pieces[at + EDGE], pieces[at + TOTAL], pieces[at + WEIGHT] = low, edge, total, weight
    pieces[at + BASE], pieces[at + OWNER], pieces[at + LEAST] = base, owner, least


@kernel
def _vertex(pieces: Floats, p: Place, weight: float, total: float, square: float) -> float:
    """Return the lowest point of a piece's cost for the sums of the samples so far, and note it."""
    bend, lean = weight - pieces[p + WEIGHT], total - pieces[p + TOTAL]
    vertex = pieces[p + BASE] + square
    if bend > 0.0:
        vertex -= lean * (lean * (1.0 / bend))
    pieces[p + LEAST] = vertex
    return float(vertex)


@kernel
def _dips(pieces: Floats, p: Place, entry: float, weight: float, total: float, square: float) -> bool:
    """Return whether a piece that is dearer than ``entry`` at both ends is cheaper in between."""
    bend, lean = weight - pieces[p + WEIGHT], total - pieces[p + TOTAL]
    if not pieces[p + LOW] * bend < lean < pieces[p + STEP + LOW] * bend:
        return False
    return bool((pieces[p + BASE] + square - entry) * bend < lean * lean)


@kernel
def _root(pieces: Floats, p: Place, side: float, entry: float, weight: float, total: float, square: float) -> float:
    """Return the mean, on one side of its lowest point, at which a piece costs ``entry``; it stays within the piece."""
    bend, lean = weight - pieces[p + WEIGHT], total - pieces[p + TOTAL]
    reach = max((entry - pieces[p + BASE] - square) * bend + lean * lean, 0.0)
    root = (lean + side * math.sqrt(reach)) * (1.0 / bend)
    return float(min(max(root, pieces[p + LOW]), pieces[p + STEP + LOW]))


@kernel
def _rebuild(
    pieces: Floats,
    first: Place,
    stop: Place,
    spare: Floats,
    s: float,
    entry: float,
    weight: float,
    total: float,
    square: float,
) -> Place:
    """Write the envelope with newcomer ``s``, whose cost is ``entry`` for every mean, to ``spare``; return its length.

    For newcomers that win in several places, or at none of the outer ends.
    """
    q, mine, base = np.uint64(0), False, entry - square
    low, edge = pieces[first + LOW], pieces[first + EDGE]
    p = first
    while p < stop:
        high, next_edge = pieces[p + STEP + LOW], pieces[p + STEP + EDGE]
        keep_low, keep_high = low, high
        if edge > entry or next_edge > entry:
            bend, lean = weight - pieces[p + WEIGHT], total - pieces[p + TOTAL]
            inverse = 1.0 / bend
            middle = lean * inverse if bend > 0.0 else 0.0
            reach = (entry - pieces[p + BASE] - square + lean * middle) * inverse
            half = math.sqrt(reach) if reach > 0.0 else -1.0
            if edge > entry:
                keep_low = max(low, middle - half) if half > 0.0 else high
            if next_edge > entry:
                keep_high = min(high, middle + half) if half > 0.0 else low
        kept = keep_low < keep_high
        if (keep_low > low or not kept) and not mine:
            _put(spare, q, low, min(edge, entry), total, weight, base, s, entry)
            q, mine = q + STEP, True
        if kept:
            _put(
                spare,
                q,
                keep_low,
                entry if keep_low > low else min(edge, entry),
                pieces[p + TOTAL],
                pieces[p + WEIGHT],
                pieces[p + BASE],
                pieces[p + OWNER],
                pieces[p + LEAST],
            )
            q, mine = q + STEP, keep_high < high
            if mine:
                _put(spare, q, keep_high, entry, total, weight, base, s, entry)
                q += STEP
        low, edge = high, next_edge
        p += STEP
    spare[q + LOW] = low
    spare[EDGE] = spare[q + EDGE] = np.inf
    return q


@kernel
def _advance(
    values: Floats,
    weights: Floats,
    penalty: float,
    minimum: int,
    recent: Floats,
    came_from: Integers,
    pieces: Floats,
    spare: Floats,
    begin: int,
    first: Place,
    length: Place,
) -> tuple[int, Place, Place]:
    """Go on after ``begin`` samples until all are done or the room may become too small.

    A newcomer nearly always wins at both outer ends and nowhere else.  So ``pieces`` has room on both sides, and the
    envelope is changed in place, at its ends; the rest of it needs only its cost at the pieces' common ends, which
    every sample raises, and no division.  ``recent`` is a ring of the last minimum + 1 sums and entry costs, used where
    newcomers enter late.  No array is assigned within the loop: counting its references would take longer than the
    search.  Returns the samples done, and where the envelope begins and how long it is.
    """
    n, even, ring = len(values), len(weights) == 0, len(recent)
    room, most = np.uint64(len(pieces)), np.uint64(len(spare))
    stop, best = first + length, first
    now = begin % ring
    weight, total, square, entry = recent[now, 0], recent[now, 1], recent[now, 2], recent[now, 3]
    for t in range(begin + 1, n + 1):
        s = t - minimum
        if s >= minimum:
            # The newcomer's sums; for a minimum of 1 they are those of the samples so far.
            w_s, t_s, q_s = weight, total, square
            if minimum > 1:
                then = s % ring
                w_s, t_s, q_s, entry = recent[then, 0], recent[then, 1], recent[then, 2], recent[then, 3]
            w = 1.0 if even else weights[s - 1]
            y = values[s - 1]
            over = np.uint64(0)
            p = first + STEP
            while p < stop:
                away = y - pieces[p + LOW]
                edge = pieces[p + EDGE] + w * away * away
                pieces[p + EDGE] = edge
                over += STEP if edge > entry else np.uint64(0)
                p += STEP
            left, right = first, stop - STEP
            while left < stop and pieces[left + STEP + EDGE] > entry and not _dips(pieces, left, entry, w_s, t_s, q_s):
                left += STEP
            while right > left and pieces[right + EDGE] > entry and not _dips(pieces, right, entry, w_s, t_s, q_s):
                right -= STEP
            if (
                left < stop
                and over == (left - first) + (stop - STEP - right)
                and first > STEP
                and stop + STEP + STEP < room
                and w_s > pieces[left + WEIGHT]
                and w_s > pieces[right + WEIGHT]
            ):
                low = _root(pieces, left, -1.0, entry, w_s, t_s, q_s)
                high = _root(pieces, right, 1.0, entry, w_s, t_s, q_s)
                stop = right + STEP
                _put(pieces, stop, high, entry, t_s, w_s, entry - q_s, s, entry)
                stop += STEP
                pieces[stop + LOW], pieces[stop + EDGE] = np.inf, np.inf
                pieces[left + LOW], pieces[left + EDGE] = low, entry
                first = left - STEP
                _put(pieces, first, -np.inf, np.inf, t_s, w_s, entry - q_s, s, entry)
            else:
                length = _rebuild(pieces, first, stop, spare, s, entry, w_s, t_s, q_s)
                first = ((room - length) >> np.uint64(4)) << np.uint64(3)
                stop = first + length
                p = np.uint64(0)
                while p < length + STEP:
                    pieces[first + p] = spare[p]
                    p += np.uint64(1)
        w = 1.0 if even else weights[t - 1]
        y = values[t - 1]
        weight, total, square, entry = weight + w, total + w * y, square + w * y * y, np.inf
        if s >= 0:
            # The lowest point of a cost only rises: who has been above the best needs no new look.
            if not first <= best < stop:
                best = first
            least = _vertex(pieces, best, weight, total, square)
            p = first
            while p < stop:
                if pieces[p + LEAST] < least and _vertex(pieces, p, weight, total, square) < least:
                    least, best = pieces[p + LEAST], p
                p += STEP
            entry, came_from[t] = least + penalty, int(pieces[best + OWNER])
        full = np.uint64(3) * (stop - first + STEP) > most
        if minimum > 1 or full or t == n:
            now = t % ring
            recent[now, 0], recent[now, 1], recent[now, 2], recent[now, 3] = weight, total, square, entry
        if full:
            return t, first, stop - first
    return n, first, stop - first


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
    room = 2048
    pieces, spare = np.zeros(2 * room), np.zeros(room)
    first, length, done = np.uint64(room), STEP, 0
    pieces[first + LOW], pieces[first + STEP + LOW] = -np.inf, np.inf
    pieces[first + EDGE] = pieces[first + STEP + EDGE] = np.inf
    while True:
        done, first, length = _advance(
            values, weights, penalty, minimum, recent, came_from, pieces, spare, done, first, length
        )
        if done == n:
            return ends_of(came_from), recent[n % (minimum + 1), 3] - penalty
        room *= 2
        larger = np.zeros(2 * room)
        for k in range(int(length + STEP)):
            larger[room + k] = pieces[first + np.uint64(k)]
        first, pieces, spare = np.uint64(room), larger, np.zeros(room)


@kernel
def ends_of(came_from: Integers) -> Integers:
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


@warm_up
def _warm_up() -> None:
    values = np.array([0.0, 0.1, 1.0, 1.1])
    partition(values, np.empty(0), 0.1, 1)
    partition(values, np.ones(4), 0.1, 1)
