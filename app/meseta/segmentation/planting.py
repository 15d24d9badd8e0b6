"""Plateaus of known make, planted into a recording's own traces.

A planted plateau is a conductance in parallel with what the trace shows anyway, so noise of the floor, pickup, leakage
and the tunnelling beneath it are the recording's own; only its relative noise and the rise of the amplifier come from
the noise model.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Final

import numpy as np
import numpy.typing as npt
from scipy.ndimage import uniform_filter1d

from meseta.segmentation.ranges import phase_bounds, runs_backward
from meseta.segmentation.results import NoiseModel
from meseta.traces import Channel, TraceSet

__all__ = ["plant"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

SMOOTHING: Final = 9
"""Samples of the running mean in which the place of a plateau is looked for."""


def plant(
    traces: TraceSet,
    rows: Integers,
    level_g0: float,
    length: float,
    slope_decades: float,
    noise: NoiseModel,
    phases: Sequence[str],
    rng: np.random.Generator,
) -> tuple[TraceSet, Integers, Integers]:
    """Return the chosen traces with a plateau planted in each, and its range of samples.

    The plateau begins where the trace falls below its conductance for the last time; the stretch in which the trace
    falls on to a twentieth of that is left out, as the bridge forms at once (its samples are made up at the end by the
    trace's own last ones).  A trace too short for the plateau stays as it is, with an empty range.
    """
    part = traces.take(rows)
    begin, end = phase_bounds(part, phases)
    backward = runs_backward(phases)
    drive = part.drive_values(0, part.traces)
    values = part.conductance.astype(np.float64)
    start, stop = np.zeros(len(rows), np.int64), np.zeros(len(rows), np.int64)
    for k in range(len(rows)):
        span = slice(int(begin[k]), int(end[k]))
        order = slice(None, None, -1) if backward else slice(None)
        g = values[span][order]
        step = abs(drive[span][-1] - drive[span][0]) / max(len(g) - 1, 1) if len(g) > 1 else np.nan
        samples = round(length / step) if step > 0 else 0
        first, late = _place(g - noise.floor_g0, level_g0, noise.floor_sigma_g0)
        if samples < 2 or late + samples > len(g):
            continue
        g = np.concatenate([g[:first], g[late:], g[::-1][: late - first]])
        g[first : first + samples + 64] += _plateau(level_g0, samples, step * slope_decades, noise, rng)[
            : len(g) - first
        ]
        values[span] = g[order]
        inside = (len(g) - first - samples, len(g) - first) if backward else (first, first + samples)
        start[k], stop[k] = (int(begin[k] - part.offsets[k]) + edge for edge in inside)
    channels = {"conductance": Channel.of(values, "G0")}
    return replace(part, channels=channels, key=f"{part.key}+planted"), start, stop


def _place(g: Floats, level: float, sigma: float) -> tuple[int, int]:
    """Return the sample at which the trace falls below the level, and below a twentieth of it or the floor."""
    smooth = uniform_filter1d(np.where(np.isfinite(g), g, 0.0), SMOOTHING)
    above = np.flatnonzero(smooth >= level)
    first = int(above[-1]) + 1 if len(above) else len(g)
    # The running mean lags behind a jump by half its samples; the bridge forms before the trace has dipped.
    for _ in range(SMOOTHING // 2):
        first -= 1 if 0 < first < len(g) and g[first - 1] < level else 0
    away = np.flatnonzero(smooth[first:] < max(0.05 * level, sigma))
    return first, first + int(away[0]) if len(away) else len(g)


def _plateau(level: float, samples: int, slope: float, noise: NoiseModel, rng: np.random.Generator) -> Floats:
    """Return a plateau and 64 samples after it: relative noise of the recording, edges as slow as its amplifier."""
    from scipy.signal import lfilter

    shape = np.zeros(samples + 64)
    x = np.arange(samples) - 0.5 * (samples - 1)
    floor = noise.floor_sigma_g0
    single = float(noise.sigma(level)) ** 2 - floor**2
    white = min(float(np.interp(level, noise.level_g0, noise.white_g0)) ** 2, max(single, 0.0)) if single > 0 else 0.0
    slow = max(single - white, 0.0)
    relative = np.sqrt(white) * rng.standard_normal(samples) + np.sqrt(slow) * _slow_noise(samples, rng)
    shape[:samples] = level * 10 ** (slope * x) * (1 + relative / level)
    keep = float(np.exp(-2.2 / max(noise.rise_samples, 1e-9))) if noise.rise_samples > 1 else 0.0
    return np.asarray(lfilter([1 - keep], [1, -keep], shape), float)


def _slow_noise(samples: int, rng: np.random.Generator, kept: float = 0.9) -> Floats:
    """Return correlated noise of unit variance (first-order autoregressive)."""
    from scipy.signal import lfilter

    fresh = rng.standard_normal(samples) * np.sqrt(1 - kept**2)
    fresh[0] /= np.sqrt(1 - kept**2)
    return np.asarray(lfilter([1.0], [1.0, -kept], fresh), float)
