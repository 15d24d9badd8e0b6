"""Compiled kernels of the plateau finder: straight stretches in, classified and joined plateaus out."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up
from meseta.segmentation.joining_kernels import (
    FLAT,
    FLOOR,
    HIDDEN,
    SATURATED,
    Rules,
    classify,
    cut_at_gaps,
    drop_along,
    group_end,
    line_at,
    runs_in,
)
from meseta.segmentation.kernels import fill_moments, merge_moments
from meseta.segmentation.stretch_kernels import Scale, decades_between, restored, share_at, stretches

__all__ = ["CLIPPED", "COLUMNS", "Rules", "find"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Faults = npt.NDArray[np.uint8]

COLUMNS = 14
CLIPPED = 2
WANDER = 0.5
"""Long-run deviations by which slow noise may lift the beginning of a plateau."""
RESTLESS = 0.15
"""Relative long-run noise beyond which a lifted beginning well above the floor is taken for noise, not tunnelling."""
EXCESS = 0.05
"""A plateau begins where tunnelling adds less than this share to it."""
SURE = 3.0
"""Standard errors by which a plateau must be flatter than tunnelling."""


@kernel
def _level(g: Floats, begin: int, end: int, weights: Floats) -> float:
    """Return the mean conductance of the trusted samples, NaN where there are none."""
    total, count = 0.0, 0
    for i in range(begin, end):
        if weights[i] > 0.0:
            total += g[i]
            count += 1
    return total / count if count > 0 else np.nan


@kernel
def _log_slope(g: Floats, begin: int, end: int, weights: Floats) -> tuple[float, float]:
    """Return slope (decades a sample) and spread of log10 g by least squares over trusted positive samples."""
    count, x, y, xx, xy, yy = 0, 0.0, 0.0, 0.0, 0.0, 0.0
    middle = 0.5 * (begin + end - 1)
    for i in range(begin, end):
        if weights[i] > 0.0 and g[i] > 0.0:
            dx, v = i - middle, math.log10(g[i])
            count, x, y, xx, xy, yy = count + 1, x + dx, y + v, xx + dx * dx, xy + dx * v, yy + v * v
    if count < 3:
        return np.nan, np.nan
    xx, xy, yy = xx - x * x / count, xy - x * y / count, yy - y * y / count
    slope = xy / xx if xx > 0.0 else 0.0
    return slope, math.sqrt(max(yy - slope * xy, 0.0) / (count - 2))


@kernel
def _gaps(g: Floats, begin: int, end: int) -> tuple[int, int]:
    """Return how many samples are missing, and the longest run of them."""
    missing, run, longest = 0, 0, 0
    for i in range(begin, end):
        run = 0 if math.isfinite(g[i]) else run + 1
        missing += run > 0
        longest = max(longest, run)
    return missing, longest


@kernel
def _settled(
    g: Floats, begin: int, end: int, weights: Floats, decay: float, trim: int, independent: float, long_run: float
) -> int:
    """Return from which sample on tunnelling that runs into a plateau adds less than ``EXCESS`` to it.

    The plateau is a straight line, the tunnelling beside it falls at the recording's own slope (``decay``, in ln a
    sample): least squares over both give the tunnelling's share, which must stand clear of the noise.  A sample far
    above the plateau (the amplifier still falls) counts for little.
    ``independent`` is the number of independent samples that a sample is worth, ``long_run`` the long-run noise.
    """
    late = _level(g, (begin + end) // 2, end, weights)
    if end - begin < 8 + 2 * trim or not late > 0.0:
        return begin
    n, middle = 0.0, 0.5 * (begin + end - 1)
    x, e, v, xx, xe, ee, xv, ev, vv = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(begin + 2 * trim, end):
        if weights[i] > 0.0:
            w = min(late / max(g[i], late), 1.0) ** 2
            dx, tail, value = i - middle, math.exp(-decay * (i - begin)), g[i]
            n, x, e, v = n + w, x + w * dx, e + w * tail, v + w * value
            xx, xe, ee = xx + w * dx * dx, xe + w * dx * tail, ee + w * tail * tail
            xv, ev, vv = xv + w * dx * value, ev + w * tail * value, vv + w * value * value
    if n < 4.0:
        return begin
    xx, xe, ee = xx - x * x / n, xe - x * e / n, ee - e * e / n
    xv, ev, vv = xv - x * v / n, ev - e * v / n, vv - v * v / n
    own = ee - xe * xe / xx
    if not own > 0.0:
        return begin
    size, level = (ev - xe * xv / xx) / own, v / n
    if xv > size * xe:
        own, size = ee, ev / ee
        xv, xe = 0.0, 0.0
    rest = max(vv - xv * xv / xx - size * size * own, 0.0) / (n - 3.0)
    level -= size * e / n
    sure = size > SURE * max(math.sqrt(rest / (own * independent)), WANDER * long_run)
    if not (level > 0.0 and size > EXCESS * level and sure):
        return begin
    return min(begin + int(math.log(size / (EXCESS * level)) / decay) + 1, end)


@kernel
def _describe(
    row: Floats,
    first: int,
    last: int,
    begins: Integers,
    ends: Integers,
    kinds: Integers,
    moments: Floats,
    g: Floats,
    y: Floats,
    weights: Floats,
    step: float,
    scale: Scale,
    rules: Rules,
    evidence: float,
) -> bool:
    """Fill a row of the plateau that stretches ``first`` to ``last`` make; return whether it is one."""
    begin, end = begins[first], ends[last]
    while begin < end and not math.isfinite(g[begin]):
        begin += 1
    while end > begin and not math.isfinite(g[end - 1]):
        end -= 1
    whole = moments[first].copy()
    for k in range(first + 1, last + 1):
        merge_moments(whole, moments[k])
    decay, middle = math.log(10.0) * rules.tunnelling * step, restored(whole[2], scale)
    long_run = restored(whole[2] + 0.5, scale) - restored(whole[2] - 0.5, scale)
    restless = middle > 10.0 * scale.sigma and long_run > RESTLESS * middle
    if 0.0 < decay < 1.0 and middle < rules.metal_from and not restless:
        independent = share_at(whole[2], scale)
        settled = _settled(g - scale.floor, begin, end, weights, decay, rules.trim, independent, long_run)
        if settled > begin:
            begin = settled
            fill_moments(y, weights, begin, end, whole)
    missing, longest = _gaps(g, begin, end)
    lead = min(rules.trim, (end - begin) // 4)
    level = _level(g, begin + lead, end - lead, weights)
    above = level - scale.floor
    ending = restored(line_at(moments[last], end - 1.0), scale)
    shortest = rules.shortest_metal if above >= rules.metal_from else rules.shortest_molecule
    if end - begin - missing < rules.shortest_samples or (end - begin) * step < shortest:
        return False
    if not rules.low <= above <= rules.high:
        return False
    drop, error = drop_along(whole, begin, end, scale)
    length = (end - begin - 1) * step
    margin = rules.tunnelling * length - abs(drop)
    if abs(drop) > rules.bound * length or not margin >= SURE * error:
        return False
    row[1], row[2], row[3] = begin, end, above
    row[4], row[5] = _log_slope(g, begin + lead, end - lead, weights)
    row[6] = whole[0] * share_at(whole[2], scale)
    row[7], row[8] = np.nan, np.nan
    if first > 0 and kinds[first - 1] != HIDDEN:
        row[7] = decades_between(line_at(moments[first - 1], begin), line_at(moments[first], begin), scale)
    if last + 1 < len(ends) and kinds[last + 1] != HIDDEN:
        row[8] = decades_between(line_at(moments[last], end), line_at(moments[last + 1], end), scale)
    row[9] = 0.0
    if ends[last] >= len(g):
        row[9] = 1.0
    elif last + 1 < len(ends) and kinds[last + 1] == FLOOR and ending < 1.5 * rules.low:
        row[9] = 2.0
    elif last + 1 < len(ends) and kinds[last + 1] == HIDDEN:
        row[9] = 1.0 if ends[last + 1] >= len(g) else 4.0
    if (first > 0 and kinds[first - 1] == SATURATED) or (begin > 0 and g[begin - 1] == np.inf):
        row[9] = 3.0
    elif first > 1 and kinds[first - 1] == HIDDEN and row[9] == 0.0:
        row[9] = 4.0
    row[12], row[13] = missing, longest
    proof = (margin / error) ** 2 if error > 0.0 else np.inf
    row[11] = 1.0 if not math.isfinite(proof) else proof / (proof + rules.line_cost * evidence)
    return True


@kernel
def find(
    conductance: npt.NDArray[np.float32],
    faults: Faults,
    starts: Integers,
    stops: Integers,
    backward: bool,
    steps: Floats,
    scale: Scale,
    rules: Rules,
    room: int,
) -> Floats:
    """Find the plateaus of a block of traces.

    Missing samples (NaN, or with a fault: 0 where there is none, ``CLIPPED`` where saturated) have no weight; a gap
    longer than five times the shortest plateau parts what lies before it from what lies after.

    Returns
    -------
    (plateaus, COLUMNS) float64
        trace, start, stop (within the range, from the closed end), level above the floor, slope (decades a sample),
        noise (decades), independent samples, jump before, jump after (decades), censoring code, telegraph, score,
        missing samples, longest run of missing samples.
    """
    out = np.empty((room, COLUMNS))
    found = 0
    for t in range(len(starts)):
        g = conductance[starts[t] : stops[t]].astype(np.float64)
        if len(faults) > 0:
            for i in range(len(g)):
                if faults[starts[t] + i] != 0:
                    g[i] = np.inf if faults[starts[t] + i] == CLIPPED else np.nan
        if backward:
            g = g[::-1].copy()
        y, weights, ends, moments, evidence = stretches(g, scale, rules.change_cost, rules.line_cost)
        step = abs(steps[t])
        ends, moments = cut_at_gaps(g, y, weights, ends, moments, step, scale, rules)
        begins = np.zeros(len(ends), np.int64)
        begins[1:] = ends[:-1]
        kinds = classify(begins, ends, moments, step, scale, rules)
        j = 0
        while j < len(ends):
            last = j
            if kinds[j] == FLAT:
                if found == len(out):
                    larger = np.empty((2 * found, COLUMNS))
                    larger[:found] = out
                    out = larger
                last, switches = group_end(j, kinds, begins, ends, moments, scale, rules)
                while j < last and runs_in(j, last, begins, ends, moments, step, scale, rules):
                    j += 1
                row = out[found]
                row[0], row[10] = t, 1.0 if switches else 0.0
                if _describe(row, j, last, begins, ends, kinds, moments, g, y, weights, step, scale, rules, evidence):
                    found += 1
            j = last + 1
    return out[:found]


@warm_up
def _warm_up() -> None:
    g = np.linspace(1, 0, 64).astype(np.float32)
    scale = Scale(0.0, 0.01, 0.01, 0.5, np.linspace(0, 10, 16), np.ones(16))
    rules = Rules(3.0, 4.0, 0.03, 1e9, 1e9, 0.3, 1.0, 0.05, 0.2, 0.4, 0.1, 0.3, 5, 0.05, 0.1, 1)
    bounds = np.array([0], np.int64), np.array([64], np.int64)
    for faults in (np.zeros(64, np.uint8), np.empty(0, np.uint8)):
        find(g, faults, *bounds, False, np.ones(1), scale, rules, 4)
