"""Compiled kernels of the plateau finder: straight stretches in, classified and joined plateaus out."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up
from meseta.segmentation.kernels import merge_moments
from meseta.segmentation.stretch_kernels import Scale, decades_between, restored, share_at, stretches

__all__ = ["COLUMNS", "DECAY", "FLAT", "FLOOR", "JUMP", "SATURATED", "Rules", "classify", "find"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]

JUMP, FLOOR, SATURATED, DECAY, FLAT = 0, 1, 2, 3, 4
COLUMNS = 12
RETURN_SHARE = 0.35
"""A switching plateau comes back to within this share of the excursion."""
SURE = 3.0
"""Standard errors by which a plateau must be flatter than tunnelling."""


class Rules(NamedTuple):
    """What a plateau is, in the units of the kernels (conductance above the floor, samples, decades)."""

    change_cost: float
    line_cost: float
    low: float
    high: float
    saturation: float
    bound: float
    tunnelling: float
    join: float
    switch: float
    metal_from: float
    metal_switch: float
    shortest_samples: int
    shortest_metal: float
    shortest_molecule: float
    trim: int


@kernel
def _slope(moments: Floats) -> float:
    return moments[4] / moments[3] if moments[3] > 0.0 else 0.0


@kernel
def _rest(moments: Floats) -> float:
    """Return the sum of squares about the line."""
    return max(moments[5] - (moments[4] ** 2 / moments[3] if moments[3] > 0.0 else 0.0), 0.0)


@kernel
def _line_at(moments: Floats, x: float) -> float:
    return moments[2] + _slope(moments) * (x - moments[1])


@kernel
def _edge(moments: Floats, x: float, length: int) -> float:
    """Return the line's value at an edge; the mean of a stretch too short for a slope."""
    return moments[2] if length < 12 else _line_at(moments, x)


@kernel
def _drop(moments: Floats, begin: int, end: int, scale: Scale) -> tuple[float, float]:
    """Return the decades from the first to the last sample along the line, and their standard error."""
    drop = decades_between(_line_at(moments, begin), _line_at(moments, end - 1.0), scale)
    if moments[3] <= 0.0 or moments[0] <= 2.0:
        return drop, np.inf
    expected = share_at(moments[2], scale) * moments[0]
    excess = max(_rest(moments) / expected, 1.0)
    error = (end - 1 - begin) * math.sqrt(excess / moments[3])
    return drop, abs(decades_between(moments[2] - 0.5 * error, moments[2] + 0.5 * error, scale))


@kernel
def classify(begins: Integers, ends: Integers, moments: Floats, step: float, scale: Scale, rules: Rules) -> Integers:
    """Return what each straight stretch is: jump, floor, saturation, decay or flat."""
    kinds = np.zeros(len(ends), np.int64)
    for j in range(len(ends)):
        level = restored(moments[j, 2], scale)
        length = ends[j] - begins[j]
        if level < rules.low:
            kinds[j] = FLOOR
        elif level > rules.saturation:
            kinds[j] = SATURATED
        elif length >= 3:
            drop, error = _drop(moments[j], begins[j], ends[j], scale)
            allowed = rules.bound * step * (length - 1)
            doubt = 2.0 * error if length < 4 * rules.shortest_samples else 0.0
            kinds[j] = FLAT if abs(drop) - doubt <= allowed else DECAY
    return kinds


@kernel
def _next_flat(j: int, kinds: Integers, begins: Integers, ends: Integers, gap: int) -> int:
    """Return the next flat stretch, over at most ``gap`` samples of others, or -1."""
    k = j + 1
    while k < len(kinds) and kinds[k] != FLAT:
        if kinds[k] == FLOOR or kinds[k] == SATURATED or ends[k] - ends[j] > gap:
            return -1
        k += 1
    return k if k < len(kinds) else -1


@kernel
def _spread(moments: Floats, scale: Scale) -> float:
    """Return the standard deviation about the line in decades."""
    sigma = math.sqrt(_rest(moments) / max(moments[0] - 2.0, 1.0))
    return abs(decades_between(moments[2] - 0.5 * sigma, moments[2] + 0.5 * sigma, scale))


@kernel
def _group_end(
    first: int, kinds: Integers, begins: Integers, ends: Integers, moments: Floats, scale: Scale, rules: Rules
) -> tuple[int, bool]:
    """Return the last stretch of the plateau that begins with stretch ``first``, and whether it switches.

    Two neighbours are one plateau where the step between them is small (below the join limit for molecules, within
    two standard deviations of the noise, long-run or about the lines, for metals), or where the signal goes away by a
    step between close levels and comes back.
    """
    last, switches = first, False
    gap = 2 * rules.trim + 2
    while True:
        b = _next_flat(last, kinds, begins, ends, gap)
        if b < 0:
            return last, switches
        level = restored(moments[last, 2], scale)
        metal = level >= rules.metal_from
        noise = max(_spread(moments[last], scale), _spread(moments[b], scale))
        centre = moments[last, 2]
        wander = decades_between(centre - 1.0, centre + 1.0, scale)
        limit = max(wander, 2.0 * noise, 0.0 if metal else rules.join)
        here = _edge(moments[last], ends[last] - 0.5, ends[last] - begins[last])
        away = decades_between(here, _edge(moments[b], begins[b] - 0.5, ends[b] - begins[b]), scale)
        if abs(away) <= limit:
            last = b
            continue
        largest = (
            min(math.log10(1.0 + rules.metal_switch / max(level, 1e-300)), rules.switch) if metal else rules.switch
        )
        c = _next_flat(b, kinds, begins, ends, gap)
        if abs(away) > largest or c < 0:
            return last, switches
        back = decades_between(here, _edge(moments[c], begins[c] - 0.5, ends[c] - begins[c]), scale)
        if abs(back) > max(limit, RETURN_SHARE * abs(away)):
            return last, switches
        last, switches = c, True


@kernel
def _runs_in(
    j: int, last: int, begins: Integers, ends: Integers, moments: Floats, step: float, scale: Scale, rules: Rules
) -> bool:
    """Return whether stretch ``j`` is tunnelling that runs into the plateau of the stretches after it.

    Where a decay meets a plateau the sum of both bends; its last piece is gentle enough for a plateau, but it falls at
    more than half the slope bound to the level that then stays.
    """
    length = ends[j] - begins[j]
    if 2 * length >= ends[last] - begins[j] or restored(moments[j, 2], scale) >= rules.metal_from:
        return False
    drop, error = _drop(moments[j], begins[j], ends[j], scale)
    fall = decades_between(moments[j, 2], _line_at(moments[j + 1], ends[j] - 0.5), scale)
    return drop + error < -0.5 * rules.bound * step * (length - 1) and fall < 0.0


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
def _describe(
    row: Floats,
    first: int,
    last: int,
    begins: Integers,
    ends: Integers,
    kinds: Integers,
    moments: Floats,
    g: Floats,
    weights: Floats,
    step: float,
    scale: Scale,
    rules: Rules,
    evidence: float,
) -> bool:
    """Fill a row of the plateau that stretches ``first`` to ``last`` make; return whether it is one."""
    begin, end = begins[first], ends[last]
    whole = moments[first].copy()
    for k in range(first + 1, last + 1):
        merge_moments(whole, moments[k])
    lead = min(rules.trim, (end - begin) // 4)
    level = _level(g, begin + lead, end - lead, weights)
    above = level - scale.floor
    ending = restored(_line_at(moments[last], end - 1.0), scale)
    shortest = rules.shortest_metal if above >= rules.metal_from else rules.shortest_molecule
    if end - begin < rules.shortest_samples or (end - begin) * step < shortest:
        return False
    if not rules.low <= above <= rules.high:
        return False
    drop, error = _drop(whole, begin, end, scale)
    length = (end - begin - 1) * step
    margin = rules.tunnelling * length - abs(drop)
    if abs(drop) > rules.bound * length or not margin >= SURE * error:
        return False
    row[1], row[2], row[3] = begin, end, above
    row[4], row[5] = _log_slope(g, begin + lead, end - lead, weights)
    row[6] = whole[0] * share_at(whole[2], scale)
    row[7], row[8] = np.nan, np.nan
    if first > 0:
        row[7] = decades_between(_line_at(moments[first - 1], begin), _line_at(moments[first], begin), scale)
    if last + 1 < len(ends):
        row[8] = decades_between(_line_at(moments[last], end), _line_at(moments[last + 1], end), scale)
    row[9] = 0.0
    if end >= len(g):
        row[9] = 1.0
    elif last + 1 < len(ends) and kinds[last + 1] == FLOOR and ending < 1.5 * rules.low:
        row[9] = 2.0
    if first > 0 and kinds[first - 1] == SATURATED:
        row[9] = 3.0
    proof = (margin / error) ** 2 if error > 0.0 else np.inf
    row[11] = 1.0 if not math.isfinite(proof) else proof / (proof + rules.line_cost * evidence)
    return True


@kernel
def find(
    conductance: npt.NDArray[np.float32],
    trusted: Truths,
    starts: Integers,
    stops: Integers,
    backward: bool,
    steps: Floats,
    scale: Scale,
    rules: Rules,
    room: int,
) -> Floats:
    """Find the plateaus of a block of traces.

    Returns
    -------
    (plateaus, COLUMNS) float64
        trace, start, stop (within the range, from the closed end), level above the floor, slope (decades a sample),
        noise (decades), independent samples, jump before, jump after (decades), censoring code, telegraph, score.
    """
    out = np.empty((room, COLUMNS))
    found = 0
    for t in range(len(starts)):
        g = conductance[starts[t] : stops[t]].astype(np.float64)
        if len(trusted) > 0:
            for i in range(len(g)):
                if not trusted[starts[t] + i]:
                    g[i] = np.nan
        if backward:
            g = g[::-1].copy()
        _, weights, ends, moments, evidence = stretches(g, scale, rules.change_cost, rules.line_cost)
        step = abs(steps[t])
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
                last, switches = _group_end(j, kinds, begins, ends, moments, scale, rules)
                while j < last and _runs_in(j, last, begins, ends, moments, step, scale, rules):
                    j += 1
                row = out[found]
                row[0], row[10] = t, 1.0 if switches else 0.0
                if _describe(row, j, last, begins, ends, kinds, moments, g, weights, step, scale, rules, evidence):
                    found += 1
            j = last + 1
    return out[:found]


@warm_up
def _warm_up() -> None:
    g = np.linspace(1, 0, 64).astype(np.float32)
    scale = Scale(0.0, 0.01, 0.01, 0.5, np.linspace(0, 10, 16), np.ones(16))
    rules = Rules(3.0, 4.0, 0.03, 1e9, 1e9, 0.3, 1.0, 0.05, 0.4, 0.1, 0.3, 5, 0.05, 0.1, 1)
    bounds = np.array([0], np.int64), np.array([64], np.int64)
    for trusted in (np.ones(64, np.bool_), np.empty(0, np.bool_)):
        find(g, trusted, *bounds, False, np.ones(1), scale, rules, 4)
