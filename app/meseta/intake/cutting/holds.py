"""Holds on the way: stretches within a ramp in which the drive stands still."""

from __future__ import annotations

from typing import Final

import numpy as np
import numpy.typing as npt

__all__ = ["holds_within"]

Floats = npt.NDArray[np.float64]
LEAST_SAMPLES: Final = 20
LEAST_BLOCKS: Final = 3
STILL: Final = 0.2
"""A block moves if it goes at more than this share of the usual speed."""
EDGE_SIGMAS: Final = 4.0


def holds_within(values: Floats, noise: float) -> list[tuple[int, int]]:
    """Return half-open ranges of a ramp in which the drive stands still, its ends left out.

    The ramp is looked at in blocks, long enough that noise cannot pass for motion; runs of blocks that go at less than
    a fifth of the usual speed are holds, and their ends are found sample by sample.

    Parameters
    ----------
    values : (samples,) float64
        The drive over one ramp.
    noise : float
        Standard deviation of its noise.
    """
    finite = np.isfinite(values)
    if len(values) < 4 * LEAST_SAMPLES or not finite.all():
        return []
    speed = abs(float(values[-1] - values[0])) / len(values)
    if speed == 0:
        return []
    steps = np.flatnonzero(np.diff(values))
    wait = float(np.median(np.diff(steps))) if len(steps) > 1 else 1.0
    size = int(np.ceil(max(5.0, 4 * wait, (8 * noise / (STILL * speed)) ** (2 / 3))))
    blocks = len(values) // size
    if blocks < 4 * LEAST_BLOCKS:
        return []
    means = values[: blocks * size].reshape(blocks, size).mean(axis=1)
    moves = np.abs(np.diff(means)) / size
    usual = float(np.median(moves[moves > STILL * speed])) if (moves > STILL * speed).any() else speed
    still = np.concatenate([[False], moves < STILL * usual, [False]])
    edges = np.flatnonzero(np.diff(still)).reshape(-1, 2)
    found = []
    for first, last in edges.tolist():
        if last - first + 1 < LEAST_BLOCKS:
            continue
        level = float(np.median(values[first * size : (last + 1) * size]))
        begin, end = _widened(values, first * size + size // 2, (last + 1) * size - size // 2, level, noise, usual)
        if end - begin >= LEAST_SAMPLES and begin > 0 and end < len(values):
            found.append((begin, end))
    return found


def _widened(values: Floats, begin: int, end: int, level: float, noise: float, speed: float) -> tuple[int, int]:
    """Return the range widened to the last samples that are at the level."""
    tolerance = EDGE_SIGMAS * noise + 0.5 * speed
    while begin > 0 and abs(values[begin - 1] - level) <= tolerance:
        begin -= 1
    while end < len(values) and abs(values[end] - level) <= tolerance:
        end += 1
    lag = round(EDGE_SIGMAS * noise / speed) if speed else 0  # what the ramp takes to leave the noise behind
    return (begin + lag, end - lag) if end - begin > 2 * lag else (begin, end)
