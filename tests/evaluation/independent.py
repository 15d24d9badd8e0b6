"""A second simulator, written on its own in plain numpy, to judge the plateau finder.

It shares no code and no detail with ``meseta.simulate``: other populations, other lengths, 1/f noise made in the
frequency domain, white noise in log G at low conductance, a boxcar and a one-pole filter, bursts of missing samples,
saturation, an offset that is left in, and a series resistance that is taken out sample by sample after all noise.
Nothing of the finder may be tuned on the seeds from 100 on.

Conventions: conductance in G0, ranges half-open, one list entry a trace.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

KINDS = ("staircase", "molecule50", "molecule20", "molecule5", "tunnelling")
LOW = "low"
"""A kind apart: every trace has a molecular plateau from 3 to 10 floor sigma, evenly in log G."""
LEVELS = ("clean", "hard")
STEP_NM = 0.0016
SAMPLES = 2500
OHM_OF_G0 = 12906.403729652257  # h/2e^2, CODATA 2022


@dataclass(frozen=True)
class Noise:
    floor_g0: float
    relative: float
    decades_at_low: float
    pink_share: float
    telegraph_share: float
    pickup_g0: float
    spikes_a_trace: float
    missing_share: float
    saturation_g0: float
    offset_g0: float
    series_ohm: float
    boxcar: int
    pole: float
    converter_g0: float


NOISES = {
    "clean": Noise(6e-7, 0.003, 0.02, 0.3, 0.0, 0.0, 0.0, 0.0, 40.0, 0.0, 0.0, 1, 0.0, 0.0),
    "hard": Noise(3e-6, 0.010, 0.10, 0.6, 0.3, 1.5e-6, 0.7, 0.002, 7.0, 1e-6, 300.0, 3, 0.4, 4e-7),
}


@dataclass(frozen=True)
class Truth:
    """True plateaus: (n,) arrays; ``level_g0`` is the noiseless mean conductance of the junction."""

    trace: np.ndarray
    start: np.ndarray
    stop: np.ndarray
    level_g0: np.ndarray
    molecule: np.ndarray


@dataclass(frozen=True)
class Recording:
    kind: str
    level: str
    conductance: list[np.ndarray]
    step_nm: float
    floor_sigma_g0: float
    rise_samples: float
    truth: Truth


def recording(kind: str, level: str, traces: int, seed: int) -> Recording:
    """Return traces of one kind and noise level with their truth."""
    rng = np.random.default_rng([seed, (*KINDS, LOW).index(kind), LEVELS.index(level)])
    noise = NOISES[level]
    values, rows = [], []
    for trace in range(traces):
        ideal, plateaus, quiet = _junction(kind, rng, noise.floor_g0)
        shown = _instrument(_fluctuations(ideal, quiet, plateaus, noise, rng), noise, rng, trace)
        values.append(shown.astype(np.float32))
        for start, stop, molecule in plateaus:
            mean = float(ideal[start:stop].mean())
            if mean / (1 + mean * noise.series_ohm / OHM_OF_G0) < 0.97 * noise.saturation_g0:
                rows.append((trace, start, stop, mean, molecule))
    table = np.array(rows, float).reshape(-1, 5)
    truth = Truth(
        table[:, 0].astype(int), table[:, 1].astype(int), table[:, 2].astype(int), table[:, 3], table[:, 4] > 0
    )
    rise = np.log(9.0) / -np.log(noise.pole) if noise.pole > 0 else 0.0
    return Recording(kind, level, values, STEP_NM, noise.floor_g0, noise.boxcar + rise, truth)


def _junction(
    kind: str, rng: np.random.Generator, floor_g0: float
) -> tuple[np.ndarray, list[tuple[int, int, bool]], np.ndarray]:
    """Return noiseless conductance, plateaus (start, stop, molecule), and which samples are at low conductance."""
    ideal, plateaus, at = np.zeros(SAMPLES), [], 0
    if kind != "tunnelling":
        for atoms in range(int(rng.integers(3, 7)), 0, -1):
            if atoms > 1 and rng.random() < 0.2:
                continue
            length = int((0.04 + rng.exponential(0.09 if atoms > 1 else 0.22)) / STEP_NM)
            length = min(length, SAMPLES - 600 - at)
            value = atoms * rng.normal(0.965, 0.03) + 0.1 * (atoms > 3) * rng.normal()
            tilt = rng.uniform(0.0, 0.03) * atoms**0.5
            shape = 1 + tilt * (0.5 - np.linspace(0, 1, length) ** rng.uniform(0.7, 1.5))
            ideal[at : at + length] = value * shape
            plateaus.append((at, at + length, False))
            at += length
        first = 10 ** rng.uniform(-3.6, -2.2)
    else:
        first = rng.uniform(1.5, 4.0)
    rupture, share = at, {"molecule50": 0.5, "molecule20": 0.2, "molecule5": 0.05, LOW: 1.0}.get(kind, 0.0)
    decay = rng.uniform(7.5, 13.0)
    steps = np.arange(SAMPLES - rupture)
    gap = first * 10 ** (-decay * STEP_NM * steps)
    if rng.random() < share:
        length = int(rng.uniform(0.15, 0.9) / STEP_NM)
        level = floor_g0 * 10 ** rng.uniform(np.log10(3), 1) if kind == LOW else 10 ** rng.normal(-3.7, 0.28)
        slope = rng.uniform(-0.9, 0.15)
        inside = steps[:length]
        own = level * 10 ** (slope * STEP_NM * (inside - length / 2))
        gap *= 10 ** rng.uniform(-2.5, -1.5)  # the molecule is caught once the gap is wide
        gap[:length] += own
        settled = int(np.argmax(gap[:length] < 1.06 * own)) if (gap[:length] < 1.06 * own).any() else length
        if length - settled > 1:
            plateaus.append((rupture + settled, rupture + length, True))
    ideal[rupture:] = gap
    return ideal, plateaus, np.arange(SAMPLES) >= rupture


def _pink(samples: int, rng: np.random.Generator) -> np.ndarray:
    """Return 1/f noise of unit variance, shaped in the frequency domain."""
    spectrum = np.fft.rfft(rng.normal(size=2 * samples))
    spectrum[0] = 0.0
    spectrum[1:] /= np.sqrt(np.arange(1, len(spectrum)))
    noise = np.fft.irfft(spectrum)[:samples]
    return noise / noise.std()


def _fluctuations(
    ideal: np.ndarray,
    low: np.ndarray,
    plateaus: list[tuple[int, int, bool]],
    noise: Noise,
    rng: np.random.Generator,
) -> np.ndarray:
    pink, white = _pink(len(ideal), rng), rng.normal(size=len(ideal))
    mixed = np.sqrt(noise.pink_share) * pink + np.sqrt(1 - noise.pink_share) * white
    decades = np.where(low, noise.decades_at_low, noise.relative / np.log(10)) * mixed
    for start, stop, _ in plateaus:
        if rng.random() < noise.telegraph_share:
            flips = np.cumsum(rng.random(stop - start) < rng.uniform(0.005, 0.05)) % 2
            decades[start:stop] += rng.uniform(0.01, 0.035) * (flips - 0.5)
    return ideal * 10**decades


def _instrument(contact: np.ndarray, noise: Noise, rng: np.random.Generator, trace: int) -> np.ndarray:
    samples, rho = len(contact), noise.series_ohm / OHM_OF_G0
    reading = contact / (1 + rho * contact)
    for place in rng.integers(0, samples, rng.poisson(noise.spikes_a_trace)):
        reading[place] += rng.choice([-1, 1]) * noise.floor_g0 * 10 ** rng.uniform(1.5, 3.0)
    if noise.boxcar > 1:
        padded = np.concatenate([np.full(noise.boxcar - 1, reading[0]), reading])
        reading = np.convolve(padded, np.full(noise.boxcar, 1 / noise.boxcar), "valid")
    if noise.pole > 0:
        state = reading[0]
        for i in range(samples):
            state = noise.pole * state + (1 - noise.pole) * reading[i]
            reading[i] = state
    reading = reading + noise.floor_g0 * rng.normal(size=samples) + noise.offset_g0
    turns = 2 * np.pi * 0.0047 * (np.arange(samples) + 3011 * trace)
    reading += noise.pickup_g0 * (np.sin(turns) + 0.4 * np.sin(2 * turns + 1) + 0.2 * np.sin(5 * turns))
    reading = np.minimum(reading, noise.saturation_g0)
    if noise.converter_g0 > 0:
        step = np.where(np.abs(reading) < 5e-3, noise.converter_g0, 300 * noise.converter_g0)
        reading = np.round(reading / step) * step
    reading = reading / (1 - rho * reading)
    gaps = rng.random(samples) < noise.missing_share / 4
    for place in np.flatnonzero(gaps):
        reading[place : place + int(rng.integers(1, 8))] = np.nan
    return reading
