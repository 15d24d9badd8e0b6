"""Compiled kernels of the plateau finder: a trace in, its straight stretches and its plateaus out."""

from __future__ import annotations

import math

import numpy as np

from meseta.kernels import kernel, warm_up
from meseta.segmentation.kernels import partition, partition_lines, stabilise

__all__ = ["find", "stretches"]

BLOCK = 16
MOST_SAMPLES = 25_000
"""Longer traces are averaged in time before the search, which bounds its cost; ends are then set sample by sample."""
JUMP, FLOOR, SATURATED, DECAY, FLAT = 0, 1, 2, 3, 4


@kernel
def _kept_length(g, floor, sigma, restless):  # type: ignore[no-untyped-def]
    """Return how many samples to look at and how many of them lie above the floor.

    Blocks count from the closed end, so that a longer tail at the floor changes neither number.
    """
    above, last = 0, 0
    threshold = max(sigma, restless)
    for b in range((len(g) + BLOCK - 1) // BLOCK):
        begin, end = b * BLOCK, min((b + 1) * BLOCK, len(g))
        total, count = 0.0, 0
        for i in range(begin, end):
            if math.isfinite(g[i]):
                total += min(max(g[i] - floor, -5.0 * sigma), 5.0 * sigma)
                count += 1
        if count > 0 and total > threshold * count:
            above += end - begin
            last = end
    return min(len(g), last + 4 * BLOCK), above


@kernel
def _weigh(y, spread, weights):  # type: ignore[no-untyped-def]
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
        if before * after > 0.0 and min(abs(before), abs(after)) > 6.0 * spread > abs(before - after):
            weights[i] = 0.0


@kernel
def _thinned(y, weights, factor):  # type: ignore[no-untyped-def]
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
def _restored(y, sigma, table, pitch):  # type: ignore[no-untyped-def]
    """Return g = conductance - floor of the variance-stabilised variable."""
    size = abs(y)
    k = min(max(np.searchsorted(table, size) - 1, 0), len(table) - 2)
    place = (k + (size - table[k]) / (table[k + 1] - table[k])) * pitch
    g = math.sinh(place) * sigma
    return g if y >= 0.0 else -g


@kernel
def _share_at(y, table, shares):  # type: ignore[no-untyped-def]
    k = min(np.searchsorted(table, abs(y)), len(shares) - 1)
    return shares[k]


@kernel
def stretches(g, floor, sigma, restless, table, shares, pitch, change_cost, line_cost):  # type: ignore[no-untyped-def]
    """Cut one trace into straight stretches of the variance-stabilised variable.

    Returns
    -------
    y, weights : (n,) float64
        The samples looked at (the tail at the floor is left away).
    ends : (k,) int64
    moments : (k, 6) float64
    """
    kept, above = _kept_length(g, floor, sigma, restless)
    y, weights = np.empty(kept), np.empty(kept)
    stabilise(g[:kept], floor, sigma, table, pitch, y)
    if kept == 0:
        return y, weights, np.empty(0, np.int64), np.empty((0, 6))
    _weigh(y, 1.0, weights)
    evidence = math.log(max(above, 4 * BLOCK))
    shift = np.mean(y)
    factor = max(1, kept // MOST_SAMPLES)
    if factor > 1:
        means, sums = _thinned(y - shift, weights, factor)
        candidates, _ = partition(means, sums, change_cost * evidence, 1)
        candidates = np.minimum(candidates * factor, kept)
    else:
        candidates, _ = partition(y - shift, weights, change_cost * evidence, 1)
    share = np.empty(len(candidates))
    begin = 0
    for j in range(len(candidates)):
        share[j] = _share_at(y[(begin + candidates[j]) // 2], table, shares)
        begin = candidates[j]
    ends, moments = partition_lines(y, weights, candidates, share, line_cost * evidence)
    return y, weights, ends, moments


@kernel
def _level(g, begin, end, weights):  # type: ignore[no-untyped-def]
    """Return the mean conductance of the trusted samples, NaN where there are none."""
    total, count = 0.0, 0
    for i in range(begin, end):
        if weights[i] > 0.0:
            total += g[i]
            count += 1
    return total / count if count > 0 else np.nan


@kernel
def _line_at(moments, x):  # type: ignore[no-untyped-def]
    slope = moments[4] / moments[3] if moments[3] > 0.0 else 0.0
    return moments[2] + slope * (x - moments[1])


@kernel
def _decades(y_from, y_to, sigma, table, pitch):  # type: ignore[no-untyped-def]
    """Return log10 of the ratio of two conductances above the floor; infinite where one is not above it."""
    a, b = _restored(y_from, sigma, table, pitch), _restored(y_to, sigma, table, pitch)
    if a <= 0.0 or b <= 0.0:
        return np.inf if b > a else -np.inf
    return math.log10(b) - math.log10(a)


@kernel
def find(  # type: ignore[no-untyped-def]
    conductance,
    trusted,
    starts,
    stops,
    backward,
    steps,
    floor,
    sigma,
    restless,
    table,
    shares,
    pitch,
    change_cost,
    line_cost,
    low,
    high,
    saturation,
    bound,
    join,
    shortest_samples,
    shortest_high,
    shortest_low,
    metal_from,
    trim,
    room,
):
    """Find the plateaus of a block of traces.

    Returns
    -------
    (plateaus, 12) float64
        trace, start, stop (within the range, from the closed end), level, slope (decades a sample), noise (decades),
        independent samples, jump before, jump after (decades), censoring code, telegraph, score.
    """
    out = np.empty((room, 12))
    found = 0
    for t in range(len(starts)):
        g = conductance[starts[t] : stops[t]].astype(np.float64)
        if len(trusted) > 0:
            for i in range(len(g)):
                if not trusted[starts[t] + i]:
                    g[i] = np.nan
        if backward:
            g = g[::-1].copy()
        y, weights, ends, moments = stretches(g, floor, sigma, restless, table, shares, pitch, change_cost, line_cost)
        count = len(ends)
        begins = np.zeros(count, np.int64)
        begins[1:] = ends[: count - 1]
        kinds = np.zeros(count, np.int64)
        step = abs(steps[t])
        steepest = bound * step
        for j in range(count):
            level = _restored(moments[j, 2], sigma, table, pitch)
            length = ends[j] - begins[j]
            drop = _decades(_line_at(moments[j], begins[j]), _line_at(moments[j], ends[j] - 1.0), sigma, table, pitch)
            if level < low - floor:
                kinds[j] = FLOOR
            elif level > 0.98 * (saturation - floor):
                kinds[j] = SATURATED
            elif length >= 3 and abs(drop) <= steepest * (length - 1):
                kinds[j] = FLAT
            elif length > 2:
                kinds[j] = DECAY
        j = 0
        while j < count:
            if kinds[j] != FLAT:
                j += 1
                continue
            first = j
            merged = moments[j].copy()
            while j + 1 < count and kinds[j + 1] == FLAT:
                edge = float(ends[j])
                gap = _decades(
                    _line_at(moments[j], edge - 0.5), _line_at(moments[j + 1], edge - 0.5), sigma, table, pitch
                )
                if abs(gap) > join:
                    break
                j += 1
            begin, end = begins[first], ends[j]
            lead = min(trim, (end - begin) // 4)
            inner = _level(g, begin + lead, end - lead, weights)
            shortest = shortest_high if inner - floor >= metal_from else shortest_low
            if end - begin >= shortest_samples and (end - begin) * step >= shortest and inner <= high:
                if found == len(out):
                    larger = np.empty((2 * found, 12))
                    larger[:found] = out
                    out = larger
                row = out[found]
                row[0], row[1], row[2], row[3] = t, begin, end, inner
                row[4] = _decades(
                    _line_at(moments[first], begin), _line_at(moments[j], end - 1.0), sigma, table, pitch
                ) / max(end - begin - 1, 1)
                weight, rest = 0.0, 0.0
                for q in range(first, j + 1):
                    weight += moments[q, 0]
                    rest += moments[q, 5] - (moments[q, 4] ** 2 / moments[q, 3] if moments[q, 3] > 0.0 else 0.0)
                centre = moments[first, 2]
                sd = math.sqrt(max(rest, 0.0) / max(weight, 1.0))
                row[5] = abs(_decades(centre - sd / 2, centre + sd / 2, sigma, table, pitch))
                row[6] = weight * _share_at(centre, table, shares)
                row[7], row[8] = np.nan, np.nan
                if first > 0:
                    row[7] = _decades(
                        _line_at(moments[first - 1], begin), _line_at(moments[first], begin), sigma, table, pitch
                    )
                if j + 1 < count:
                    row[8] = _decades(_line_at(moments[j], end), _line_at(moments[j + 1], end), sigma, table, pitch)
                row[9] = 0.0
                if end >= len(g):
                    row[9] = 1.0
                elif j + 1 < count and kinds[j + 1] == FLOOR:
                    row[9] = 2.0 if inner - floor < 10.0 * sigma else 0.0
                if first > 0 and kinds[first - 1] == SATURATED:
                    row[9] = 3.0
                row[10], row[11] = 0.0, 1.0
                found += 1
            j += 1
    return out[:found]


@warm_up
def _warm_up() -> None:
    g = np.linspace(1, 0, 64).astype(np.float32)
    table = np.linspace(0, 10, 16)
    bounds = np.array([0], np.int64), np.array([64], np.int64)
    for trusted in (np.ones(64, np.bool_), np.empty(0, np.bool_)):
        find(
            g,
            trusted,
            *bounds,
            False,
            np.ones(1),
            0.0,
            0.01,
            0.01,
            table,
            np.ones(16),
            0.5,
            3.0,
            4.0,
            0.03,
            1e9,
            1e9,
            1.0,
            0.05,
            5,
            0.05,
            0.1,
            0.1,
            1,
            4,
        )
