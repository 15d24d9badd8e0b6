"""Ramps of a drive signal: where pulls and pushes begin and end, with holds, noise and jitter.

Turning points are extremes between swings of a stated size, found in one pass over the signal.  Each is then sharpened:
straight lines through the flanks on both sides meet the level of the hold between them (or each other, where there is
no hold).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

__all__ = ["Ramps", "find_ramps", "signal_scale"]

Floats = npt.NDArray[np.float64]
Read = Callable[[int, int], Floats]
BLOCK: Final = 4_000_000
PROBES: Final = 64
PROBE_SAMPLES: Final = 4096
NOISE_SIGMAS: Final = 12.0
GLITCHES: Final = 1e-4
"""This share of the samples may be wild without making the range."""
SMALLEST_SHARE: Final = 1e-4
"""Ramps smaller than this share of the whole range are not looked for."""
CLEARLY_LARGER: Final = 4.0
LEAST_FLANK: Final = 12
LINE_SIGMAS: Final = 12.0
MAD_SECOND: Final = 0.605269821
"""Noise from the median absolute second difference of a signal that is straight between few corners."""


@dataclass(frozen=True)
class Ramps:
    """Monotonic stretches of a drive signal.

    Attributes
    ----------
    begin, end : (ramps,) int64
        Half-open range of samples in which the drive moves; from ``end`` to the next ``begin`` it holds.
    swing : (ramps,) float64
        Change of the drive over the ramp, with its sign.
    noise : float
        Standard deviation of the drive's noise.
    """

    begin: npt.NDArray[np.int64]
    end: npt.NDArray[np.int64]
    swing: Floats
    noise: float


def signal_scale(read: Read, samples: int) -> tuple[float, float]:
    """Return (range, noise) of a signal from probes spread over it."""
    if samples <= PROBES * PROBE_SAMPLES:
        return _scale_of([read(0, samples)])
    starts = np.unique(np.linspace(0, max(samples - PROBE_SAMPLES, 0), PROBES).astype(np.int64))
    probes = [read(int(start), min(int(start) + PROBE_SAMPLES, samples)) for start in starts]
    thinned = [read(int(at), int(at) + 1) for at in np.linspace(0, samples - 1, 512).astype(np.int64)]
    return _scale_of([*probes, *thinned])


def _scale_of(probes: list[Floats]) -> tuple[float, float]:
    """Return (range, noise) of pieces of a signal."""
    values = np.concatenate(probes)
    values = values[np.isfinite(values)]
    if len(values) == 0:
        return 0.0, 0.0
    curvature = np.concatenate([np.diff(probe, 2) for probe in probes])
    curvature = curvature[np.isfinite(curvature)]
    noise = MAD_SECOND * float(np.median(np.abs(curvature))) if len(curvature) else 0.0
    low, high = np.quantile(values, [GLITCHES, 1 - GLITCHES])
    return float(high - low), noise


def find_ramps(read: Read, samples: int, smallest_fraction: float) -> Ramps | None:
    """Find the ramps of a drive signal.

    Parameters
    ----------
    read : callable
        Returns samples start to stop as float64.
    samples : int
    smallest_fraction : float
        Swings below half this share of the whole range are noise, not ramps.

    Returns
    -------
    Ramps or None
        None where the drive never turns, or its swing does not stand out of its noise.
    """
    if samples <= BLOCK and _is_monotonic(read(0, samples)):
        return None
    span, noise = signal_scale(read, samples)
    if span == 0.0 or NOISE_SIGMAS * noise >= span:
        return None
    turns = _turns_of_ramps(read, samples, span, noise, smallest_fraction)
    if len(turns) < 3:
        return None
    corners = [_corner(read, turns, place, noise, samples) for place in range(len(turns))]
    begin = np.array([corner[1] for corner in corners[:-1]], np.int64)
    end = np.array([corner[0] for corner in corners[1:]], np.int64)
    begin = np.maximum.accumulate(begin)
    end = np.clip(end, begin, np.append(begin[1:], samples))
    level = np.array([read(turn, turn + 1)[0] for turn in turns])
    return Ramps(begin, end, np.diff(level), noise)


def _is_monotonic(values: Floats) -> bool:
    """Return whether a signal never turns; one with NaN is looked at more closely."""
    steps = np.diff(values)
    return bool((steps >= 0).all() or (steps <= 0).all())


def _turns_of_ramps(read: Read, samples: int, span: float, noise: float, smallest_fraction: float) -> list[int]:
    """Return the turning points between ramps, whose size is not known beforehand.

    Cycles may be far smaller than the whole range (drift, a coarse approach before them).  So the size of swings that
    count is lowered from the whole range on until the usual swing is several times that size: drift has no size of its
    own, its swings are hardly larger than what is looked for, whatever that is.
    """
    least = max(NOISE_SIGMAS * noise, SMALLEST_SHARE * span)
    threshold = max(0.5 * smallest_fraction * span, least)
    first: list[int] = []
    while True:
        turns = _turning_points(read, samples, threshold)
        first = first or turns
        if len(turns) >= 3:
            usual = float(np.median(np.abs(np.diff([read(turn, turn + 1)[0] for turn in turns]))))
            if usual >= CLEARLY_LARGER * threshold:
                wanted = max(0.5 * smallest_fraction * usual, least)
                return turns if wanted >= threshold else _turning_points(read, samples, wanted)
        if threshold <= least:
            return first
        threshold = max(threshold / 2, least)


def _turning_points(read: Read, samples: int, threshold: float) -> list[int]:
    from meseta.intake.kernels import find_turns

    state, turns = np.zeros(6), []
    for start in range(0, samples, BLOCK):
        block = np.ascontiguousarray(read(start, min(start + BLOCK, samples)))
        turns += find_turns(block, start, threshold, state)
    if state[0] != 0.0:
        turns.append(int(state[4] if state[0] > 0 else state[2]))
    return turns


def _corner(read: Read, turns: list[int], place: int, noise: float, samples: int) -> tuple[int, int]:
    """Return (end of the ramp before, begin of the ramp after) at a turning point."""
    turn = turns[place]
    first = turns[place - 1] if place else 0
    last = turns[place + 1] if place + 1 < len(turns) else samples - 1
    values = read(first, last + 1)
    extreme = values[turn - first]
    before = _flank(values[: turn - first + 1][::-1], extreme, noise) if place else None
    after = _flank(values[turn - first :], extreme, noise) if place + 1 < len(turns) else None
    if before is not None:
        before = _Flank(-before.near, -before.slope, before.level_at, before.reach)
    jumps = (before is None and place > 0, after is None and place + 1 < len(turns))
    return _meeting(values, turn, first, before, after, jumps)


@dataclass(frozen=True)
class _Flank:
    """A straight flank beside a turning point.

    ``near`` is its closest sample, counted from the turn; on it the drive is ``level_at + slope * sample``; ``reach``
    is how many samples a sharp corner would need from the turn to the flank.
    """

    near: int
    slope: float
    level_at: float
    reach: float


def _flank(values: Floats, extreme: float, noise: float) -> _Flank | None:
    """Return the flank that leaves the extreme along ``values``; the first value is the extreme.

    The line is fitted to no more samples than it needs to be sure of the corner: a hold or another speed further along
    the ramp must not bend it.
    """
    with np.errstate(invalid="ignore"):  # a wild sample may be infinite
        away = np.abs(values - extreme)
    full = float(np.nanmax(away))
    if full == 0.0:  # it never leaves the extreme
        return None
    finite = values[np.isfinite(values)]
    steps = np.abs(np.diff(finite))
    moves = np.flatnonzero(steps > 0)
    stair = float(np.median(steps[moves])) if len(moves) else 0.0
    wait = float(np.median(np.diff(moves))) if len(moves) > 1 else 1.0
    tolerance = max(10 * noise, 2.5 * stair, 3 * full / max(len(values), 1))
    if not full > 2 * tolerance:
        tolerance = full / 4
    close = np.flatnonzero(away <= tolerance)
    near = int(close[-1]) + 1 if len(close) else 1
    far_candidates = np.flatnonzero(away[near:] >= min(0.3 * full + tolerance, full))
    far = near + int(far_candidates[0]) if len(far_candidates) else len(values) - 1
    early = np.flatnonzero(away[near:] >= min(0.1 * full + tolerance, full))
    speed = (0.1 * full + tolerance) / max(near + int(early[0]) if len(early) else far, 1)
    if not speed > 0.0:  # less than a number can hold
        return None
    enough = max(LEAST_FLANK, min(LINE_SIGMAS * noise / speed, float(len(values))) ** 2, 6 * wait)
    far = min(far, near + int(enough))
    index = np.arange(near, max(far, near + 2) + 1)
    index = index[index < len(values)]
    index = index[np.isfinite(values[index])]
    if len(index) < 2:
        return None
    slope, level = np.polyfit(index.astype(np.float64), values[index], 1)
    if slope == 0 or not (np.isfinite(slope) and np.isfinite(level)):
        return None
    return _Flank(near, float(slope), float(level), tolerance / abs(float(slope)))


def _meeting(
    values: Floats, turn: int, first: int, before: _Flank | None, after: _Flank | None, jumps: tuple[bool, bool]
) -> tuple[int, int]:
    """Return where the flanks meet the hold between them, or each other.

    ``jumps`` tells where the drive jumps to or from the turning point within a sample or two, and so has no flank.
    """
    if before is None and after is None:
        return turn, turn
    near_before = before.near if before is not None else -1 if jumps[0] else -(turn - first)
    near_after = after.near if after is not None else 1 if jumps[1] else len(values) - 1 - (turn - first)
    lo, hi = turn - first + near_before + 1, turn - first + near_after
    expected = (before.reach if before is not None else 0.0) + (after.reach if after is not None else 0.0)
    flat = hi - lo > expected + max(3.0, 0.15 * expected)
    if before is not None and after is not None and not flat:
        across = (after.level_at - before.level_at) / (before.slope - after.slope)
        across = across if np.isfinite(across) else 0.0
        corner = turn + round(float(np.clip(across, near_before, near_after)))
        return corner, corner
    if not flat and any(jumps):
        return turn, turn
    if not flat and before is None:  # the record begins within the ramp, or with it
        return first, first
    if not flat:
        return first + len(values), first + len(values)
    # the level of the hold without the ends of the flanks
    inner_lo = lo + (round(before.reach) if before is not None else 0)
    inner_hi = hi - (round(after.reach) if after is not None else 0)
    lo, hi = (inner_lo, inner_hi) if inner_hi - inner_lo >= 3 else (lo, hi)
    level = float(np.nanmedian(values[lo:hi])) if hi > lo else float(values[turn - first])
    end = begin = turn
    if before is not None:
        end = turn + int(np.ceil(np.clip((level - before.level_at) / before.slope, near_before, near_after)))
        begin = end if after is None and not jumps[1] else begin
    if after is not None:
        begin = turn + int(np.floor(np.clip((level - after.level_at) / after.slope, near_before, near_after)))
        end = begin if before is None and not jumps[0] else end
    return (end, begin) if end <= begin else ((end + begin) // 2,) * 2
