"""Compiled kernels that join straight stretches to plateaus: what a plateau is, and which neighbours are one."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up
from meseta.segmentation.kernels import fill_moments
from meseta.segmentation.stretch_kernels import Scale, decades_between, restored, share_at

__all__ = [
    "DECAY",
    "FLAT",
    "FLOOR",
    "HIDDEN",
    "JUMP",
    "SATURATED",
    "Rules",
    "classify",
    "cut_at_gaps",
    "drop_along",
    "group_end",
    "line_at",
    "runs_in",
]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

JUMP, FLOOR, SATURATED, DECAY, FLAT, HIDDEN = 0, 1, 2, 3, 4, 5
SWITCH_OVER_STAY = 2.0
BRIDGED = 5.0
"""Shortest plateaus, end to end, that a gap may be long and still be bridged (0.05 and 0.1 nm as they come)."""
RETURN_SHARE = 0.35
"""A switching plateau comes back to within this share of the excursion."""


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
    join_metal: float
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
def line_at(moments: Floats, x: float) -> float:
    """Return the value of a stretch's line at sample ``x``."""
    return moments[2] + _slope(moments) * (x - moments[1])


@kernel
def _step(a: Floats, b: Floats, boundary: float, scale: Scale) -> float:
    """Return the decades from one stretch to a later one where they meet, at the slope that both have in common.

    The common slope holds still where each stretch's own would run off to the edge: slow noise bends short stretches.
    """
    spread = a[3] + b[3]
    slope = (a[4] + b[4]) / spread if spread > 0.0 else 0.0
    here, there = a[2] + slope * (boundary - a[1]), b[2] + slope * (boundary - b[1])
    return decades_between(here, there, scale)


@kernel
def drop_along(moments: Floats, begin: int, end: int, scale: Scale) -> tuple[float, float]:
    """Return the decades from the first to the last sample along the line, and their standard error."""
    drop = decades_between(line_at(moments, begin), line_at(moments, end - 1.0), scale)
    if moments[3] <= 0.0 or moments[0] <= 2.0:
        return drop, np.inf
    expected = share_at(moments[2], scale) * moments[0]
    excess = max(_rest(moments) / expected, 1.0)
    error = (end - 1 - begin) * math.sqrt(excess / moments[3])
    return drop, abs(decades_between(moments[2] - 0.5 * error, moments[2] + 0.5 * error, scale))


@kernel
def _long_gaps(g: Floats, y: Floats, step: float, scale: Scale, rules: Rules) -> Integers:
    """Return begin and end of the runs of missing samples that are too long to be bridged."""
    bounds = np.empty(len(y) + 1, np.int64)
    count, begin = 0, 0
    for i in range(len(y) + 1):
        if i < len(y) and not math.isfinite(g[i]):
            continue
        metal = begin > 0 and restored(y[begin - 1], scale) >= rules.metal_from
        shortest = rules.shortest_metal if metal else rules.shortest_molecule
        if i - begin > BRIDGED * rules.shortest_samples and (i - begin) * step > BRIDGED * shortest:
            bounds[count], bounds[count + 1] = begin, i
            count += 2
        begin = i + 1
    return bounds[:count]


@kernel
def cut_at_gaps(
    g: Floats, y: Floats, weights: Floats, ends: Integers, moments: Floats, step: float, scale: Scale, rules: Rules
) -> tuple[Integers, Floats]:
    """Return the stretches with every long gap as a stretch of its own, which weighs nothing.

    What is in the gap nobody knows: a plateau before it and one after it are not taken for one.
    """
    gaps = _long_gaps(g, y, step, scale, rules)
    if len(gaps) == 0:
        return ends, moments
    bounds = np.unique(np.concatenate((ends, gaps)))
    inside = np.zeros(len(bounds), np.bool_)
    for k in range(0, len(gaps), 2):
        inside |= (bounds > gaps[k]) & (bounds < gaps[k + 1])
    bounds = bounds[~inside & (bounds > 0)]
    cut = np.zeros((len(bounds), 6))
    begin = 0
    for j in range(len(bounds)):
        fill_moments(y, weights, begin, bounds[j], cut[j])
        begin = bounds[j]
    return bounds, cut


@kernel
def classify(begins: Integers, ends: Integers, moments: Floats, step: float, scale: Scale, rules: Rules) -> Integers:
    """Return what each straight stretch is: jump, floor, saturation, decay, flat or hidden."""
    kinds = np.zeros(len(ends), np.int64)
    for j in range(len(ends)):
        level = restored(moments[j, 2], scale)
        length = ends[j] - begins[j]
        if moments[j, 0] <= 0.0:
            kinds[j] = HIDDEN
        elif level < rules.low:
            kinds[j] = FLOOR
        elif level > rules.saturation:
            kinds[j] = SATURATED
        elif length >= 3:
            drop, error = drop_along(moments[j], begins[j], ends[j], scale)
            allowed = rules.bound * step * (length - 1)
            doubt = 2.0 * error if length < 4 * rules.shortest_samples else 0.0
            kinds[j] = FLAT if abs(drop) - doubt <= allowed else DECAY
    return kinds


@kernel
def _next_flat(j: int, kinds: Integers, begins: Integers, ends: Integers, gap: int) -> int:
    """Return the next flat stretch, over at most ``gap`` samples of others, or -1."""
    k = j + 1
    while k < len(kinds) and kinds[k] != FLAT:
        if kinds[k] == FLOOR or kinds[k] == SATURATED or kinds[k] == HIDDEN or ends[k] - ends[j] > gap:
            return -1
        k += 1
    return k if k < len(kinds) else -1


@kernel
def _spread(moments: Floats, scale: Scale) -> float:
    """Return the standard deviation about the line in decades."""
    sigma = math.sqrt(_rest(moments) / max(moments[0] - 2.0, 1.0))
    return abs(decades_between(moments[2] - 0.5 * sigma, moments[2] + 0.5 * sigma, scale))


@kernel
def _limits(a: Floats, b: Floats, scale: Scale, rules: Rules) -> tuple[float, float]:
    """Return the largest step in decades within a plateau that stays away, and within one that comes back."""
    level = max(restored(a[2], scale), 1e-300)
    noise = max(_spread(a, scale), _spread(b, scale))
    wander = decades_between(a[2] - 1.0, a[2] + 1.0, scale)
    limit = max(wander, 2.0 * noise, min(rules.join, math.log10(1.0 + rules.join_metal / level)))
    switch = (
        min(rules.switch, math.log10(1.0 + rules.metal_switch / level)) if level >= rules.metal_from else rules.switch
    )
    return limit, max(switch, SWITCH_OVER_STAY * limit)


@kernel
def group_end(
    first: int, kinds: Integers, begins: Integers, ends: Integers, moments: Floats, scale: Scale, rules: Rules
) -> tuple[int, bool]:
    """Return the last stretch of the plateau that begins with stretch ``first``, and whether it switches.

    Two neighbours are one plateau where the step between them is small (within two standard deviations of the noise,
    long-run or about the lines, or below the join limits), or where the signal goes away by a step between close
    levels and comes back.
    """
    last, switches = first, False
    gap = 2 * rules.trim + 2
    while True:
        b = _next_flat(last, kinds, begins, ends, gap)
        if b < 0:
            return last, switches
        limit, largest = _limits(moments[last], moments[b], scale, rules)
        boundary = 0.5 * (ends[last] + begins[b])
        away = _step(moments[last], moments[b], boundary, scale)
        if abs(away) <= limit:
            last = b
            continue
        c = _next_flat(b, kinds, begins, ends, gap)
        if abs(away) > largest or c < 0:
            return last, switches
        back = _step(moments[last], moments[c], 0.5 * (ends[last] + begins[c]), scale)
        if abs(back) > max(limit, RETURN_SHARE * abs(away)):
            return last, switches
        last, switches = c, True


@kernel
def runs_in(
    j: int, last: int, begins: Integers, ends: Integers, moments: Floats, step: float, scale: Scale, rules: Rules
) -> bool:
    """Return whether stretch ``j`` is tunnelling that runs into the plateau of the stretches after it.

    Where a decay meets a plateau the sum of both bends; its last piece is gentle enough for a plateau, but it falls at
    more than half the slope bound to the level that then stays.
    """
    length = ends[j] - begins[j]
    if 2 * length >= ends[last] - begins[j] or restored(moments[j, 2], scale) >= rules.metal_from:
        return False
    drop, error = drop_along(moments[j], begins[j], ends[j], scale)
    fall = decades_between(moments[j, 2], line_at(moments[j + 1], ends[j] - 0.5), scale)
    return drop + error < -0.5 * rules.bound * step * (length - 1) and fall < 0.0


@warm_up
def _warm_up() -> None:
    scale = Scale(0.0, 0.01, 0.01, 0.5, np.linspace(0, 10, 16), np.ones(16))
    rules = Rules(3.0, 4.0, 0.03, 1e9, 1e9, 0.3, 1.0, 0.05, 0.2, 0.4, 0.1, 0.3, 5, 0.05, 0.1, 1)
    begins, ends = np.array([0, 8], np.int64), np.array([8, 16], np.int64)
    moments = np.array([[8.0, 3.5, 5.0, 42.0, 0.0, 8.0], [8.0, 11.5, 5.0, 42.0, 0.0, 8.0]])
    cut_at_gaps(np.full(16, np.nan), np.zeros(16), np.zeros(16), ends, moments, 1.0, scale, rules)
    kinds = classify(begins, ends, moments, 1.0, scale, rules)
    group_end(0, kinds, begins, ends, moments, scale, rules)
    runs_in(0, 1, begins, ends, moments, 1.0, scale, rules)
