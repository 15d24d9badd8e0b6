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
    """

    begin: npt.NDArray[np.int64]
    end: npt.NDArray[np.int64]
    swing: Floats


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
    return float(values.max() - values.min()), noise


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
    threshold = max(0.5 * smallest_fraction * span, NOISE_SIGMAS * noise)
    if span == 0.0 or threshold >= span:
        return None
    turns = _turning_points(read, samples, threshold)
    if len(turns) < 3:
        return None
    corners = [_corner(read, turns, place, noise, samples) for place in range(len(turns))]
    begin = np.array([corner[1] for corner in corners[:-1]], np.int64)
    end = np.array([corner[0] for corner in corners[1:]], np.int64)
    end = np.maximum(end, begin)
    level = np.array([read(turn, turn + 1)[0] for turn in turns])
    return Ramps(begin, end, np.diff(level))


def _is_monotonic(values: Floats) -> bool:
    """Return whether a signal never turns; one with NaN is looked at more closely."""
    steps = np.diff(values)
    return bool((steps >= 0).all() or (steps <= 0).all())


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
    return _meeting(values, turn, first, before, after)


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
    """Return the flank that leaves the extreme along ``values``; the first value is the extreme."""
    away = np.abs(values - extreme)
    full = float(np.nanmax(away))
    steps = np.abs(np.diff(values[np.isfinite(values)]))
    moving = steps[steps > 0]
    stair = float(np.median(moving)) if len(moving) else 0.0
    tolerance = max(10 * noise, 2.5 * stair, 3 * full / max(len(values), 1))
    if not full > 2 * tolerance:
        tolerance = full / 4
    close = np.flatnonzero(away <= tolerance)
    near = int(close[-1]) + 1 if len(close) else 1
    far_candidates = np.flatnonzero(away[near:] >= min(0.3 * full + tolerance, full))
    far = near + int(far_candidates[0]) if len(far_candidates) else len(values) - 1
    index = np.arange(near, max(far, near + 2) + 1)
    index = index[index < len(values)]
    index = index[np.isfinite(values[index])]
    if len(index) < 2:
        return None
    slope, level = np.polyfit(index.astype(np.float64), values[index], 1)
    if slope == 0:
        return None
    return _Flank(near, float(slope), float(level), tolerance / abs(float(slope)))


def _meeting(values: Floats, turn: int, first: int, before: _Flank | None, after: _Flank | None) -> tuple[int, int]:
    """Return where the flanks meet the hold between them, or each other."""
    if before is None and after is None:
        return turn, turn
    near_before = before.near if before is not None else -(turn - first)
    near_after = after.near if after is not None else len(values) - 1 - (turn - first)
    lo, hi = turn - first + near_before + 1, turn - first + near_after
    expected = (before.reach if before is not None else 0.0) + (after.reach if after is not None else 0.0)
    flat = hi - lo > expected + max(3.0, 0.15 * expected)
    if before is not None and after is not None and not flat:
        across = (after.level_at - before.level_at) / (before.slope - after.slope)
        corner = turn + round(float(np.clip(across, near_before, near_after)))
        return corner, corner
    level = float(np.nanmedian(values[lo:hi])) if hi > lo else float(values[turn - first])
    end = begin = turn
    if before is not None:
        end = turn + int(np.ceil(np.clip((level - before.level_at) / before.slope, near_before, near_after)))
        begin = end if after is None else begin
    if after is not None:
        begin = turn + int(np.floor(np.clip((level - after.level_at) / after.slope, near_before, near_after)))
        end = begin if before is None else end
    return (end, begin) if end <= begin else ((end + begin) // 2,) * 2
