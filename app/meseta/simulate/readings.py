"""From noiseless junctions to readings: 1/f and telegraph noise, current noise, pickup, spikes, the amplifier."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.quantities import G0_SIEMENS, johnson_current_rms
from meseta.simulate import kernels
from meseta.simulate.pieces import Pieces
from meseta.simulate.settings import SimulationSettings
from meseta.simulate.streams import stream

__all__ = ["Amplifier", "Readings", "amplifier_of", "read_pieces"]

Floats = npt.NDArray[np.float64]
Floats32 = npt.NDArray[np.float32]
Integers = npt.NDArray[np.int64]

_PINK_SECTIONS: Final = 7
_PINK_WARM: Final = 12_000
_SWITCHES: Final = 64
TRUTH_TOLERANCE: Final = 0.05


@dataclass(frozen=True)
class Amplifier:
    """The numbers that the amplifier kernels take.

    Attributes
    ----------
    floor_sigma, thermal : float
        Current noise before the filter in G0: at the floor, and thermal at one conductance quantum.
    coefficient : float
        1 - exp(-2 pi f/f_s) of one pole.
    mains : float
        Radians a sample.
    rise_samples : float
        10 to 90 % of a step.
    smallest_g0 : float
        Least current that a logarithmic amplifier tells from none.
    """

    logarithmic: bool
    rho: float
    floor_sigma: float
    thermal: float
    pickup: float
    mains: float
    coefficient: float
    poles: int
    rise_samples: float
    smallest_g0: float


def amplifier_of(settings: SimulationSettings) -> Amplifier:
    """Return the amplifier of the settings.

    Two equal poles have their -3 dB point at 0.6436 of each one's.  A one-pole filter of coefficient a passes a share
    a/(2 - a) of the variance of white noise, so the noise before it is larger than what is asked for at the floor
    (textbook).  Thermal noise is sqrt(4 k_B T G B) (Johnson and Nyquist), B the noise bandwidth.
    """
    levels, poles = settings.levels, settings.filter_poles
    corner = levels.bandwidth_hertz / (1.0 if poles == 1 else math.sqrt(math.sqrt(2.0) - 1.0))
    coefficient = 1.0 - math.exp(-2.0 * math.pi * corner / settings.sampling_hertz)
    passed = _passed_variance(coefficient, poles)
    half_rate = settings.sampling_hertz / 2
    thermal = float(johnson_current_rms(1.0, settings.temperature_kelvin, half_rate)) / settings.ampere_per_g0
    floor_sigma = levels.floor_sigma_g0 / math.sqrt(passed)
    rise = (0.3497 if poles == 1 else 0.3442) * settings.sampling_hertz / levels.bandwidth_hertz
    return Amplifier(
        logarithmic=settings.amplifier == "logarithmic",
        rho=settings.series_resistance_ohm * G0_SIEMENS,
        floor_sigma=floor_sigma,
        thermal=thermal,
        pickup=levels.pickup_g0,
        mains=2.0 * math.pi * settings.mains_hertz / settings.sampling_hertz,
        coefficient=coefficient,
        poles=poles,
        rise_samples=rise,
        smallest_g0=0.02 * floor_sigma,
    )


def _passed_variance(a: float, poles: int) -> float:
    """Return the share of white variance that one pole, or two equal ones, let through."""
    kept = 1.0 - a
    if poles == 1:
        return a / (1.0 + kept)
    return a**4 * (1.0 + kept**2) / (1.0 - kept**2) ** 3


@dataclass(frozen=True)
class Readings:
    """What the amplifier shows of a block, before the converter: G0, or log10 G/G0 for a logarithmic amplifier.

    ``start``, ``stop``, ``level_g0`` are (traces, pieces): the true ranges and conductances.
    """

    shown: Floats
    start: Integers
    stop: Integers
    level_g0: Floats


def read_pieces(
    pieces: Pieces, settings: SimulationSettings, key: int, block: int, first_sample: Integers, samples: int
) -> Readings:
    """Pass a block of traces through noise and amplifier.

    Parameters
    ----------
    pieces : Pieces
    settings : SimulationSettings
    key, block : int
        Key of the random streams.
    first_sample : (traces,) int64
        Place of each trace in the record; sets the phase of the mains.
    samples : int
        Samples a trace.
    """
    amplifier = amplifier_of(settings)
    traces = len(pieces.stop)
    ideal = np.empty((traces, samples))
    kernels.draw_ideal(pieces.stop, pieces.log10_g0, pieces.slope, pieces.tunnel_log10_g0, pieces.tunnel_slope, ideal)
    silent = np.zeros((traces, samples), np.float32)
    clean = _amplified(ideal, silent, amplifier, first_sample, quiet=True)
    start, stop, level = _truth(clean, ideal, pieces, amplifier)
    junction = np.empty_like(ideal)
    _shake(ideal, pieces, settings, key, block, junction)
    white = _current_noise(settings, key, block, traces, samples)
    shown = _amplified(junction, white, amplifier, first_sample, quiet=False, out=clean)
    return Readings(shown, start, stop, level)


def _amplified(
    contact: Floats,
    white: Floats32,
    amplifier: Amplifier,
    first_sample: Integers,
    *,
    quiet: bool,
    out: Floats | None = None,
) -> Floats:
    shown = np.empty_like(contact) if out is None else out
    phase = np.remainder(amplifier.mains * first_sample, 2.0 * math.pi)
    common = (
        contact,
        white,
        amplifier.rho,
        0.0 if quiet else amplifier.floor_sigma,
        0.0 if quiet else amplifier.thermal,
        0.0 if quiet else amplifier.pickup,
        amplifier.mains,
        phase,
        amplifier.coefficient,
        amplifier.poles,
    )
    if amplifier.logarithmic:
        kernels.amplify_logarithmic(*common, amplifier.smallest_g0, shown)
    else:
        kernels.amplify_linear(*common, shown)
    return shown


def _truth(clean: Floats, ideal: Floats, pieces: Pieces, amplifier: Amplifier) -> tuple[Integers, Integers, Floats]:
    start, stop = np.empty_like(pieces.stop), np.empty_like(pieces.stop)
    level = np.empty(pieces.stop.shape)
    kernels.true_ranges(
        clean,
        ideal,
        pieces.stop,
        pieces.log10_g0,
        pieces.slope,
        pieces.kind,
        amplifier.logarithmic,
        amplifier.rho,
        math.ceil(amplifier.rise_samples),
        TRUTH_TOLERANCE,
        start,
        stop,
        level,
    )
    return start, stop, level


def _shake(ideal: Floats, pieces: Pieces, settings: SimulationSettings, key: int, block: int, junction: Floats) -> None:
    """Put 1/f noise (continuous along the block) and telegraph noise on the junctions."""
    traces, samples = ideal.shape
    rng = stream(key, "conductance noise", block)
    white = rng.standard_normal(_PINK_WARM + traces * samples, np.float32)
    pink = np.empty((traces, samples), np.float32)
    kernels.pink_noise(white, _PINK_WARM, *kernels.pink_filter(_PINK_SECTIONS), pink.reshape(-1))
    events = stream(key, "events", block)
    switching = events.random(traces) < settings.levels.telegraph_share
    size = np.where(switching, events.uniform(0.02, 0.10, traces), 0.0)
    dwell = np.exp(events.uniform(np.log(5e-4), np.log(1e-2), traces)) * settings.sampling_hertz
    gaps = events.exponential(1.0, (traces, _SWITCHES)) * dwell[:, None]
    switches = np.cumsum(np.maximum(np.rint(gaps), 1), axis=1).astype(np.int64)
    kernels.shake(ideal, pink, pieces.stop, pieces.relative, pieces.kind, size, switches, junction)


def _current_noise(settings: SimulationSettings, key: int, block: int, traces: int, samples: int) -> Floats32:
    """Return unit white noise with spikes in its unit, (traces, samples)."""
    rng = stream(key, "current noise", block)
    white = rng.standard_normal((traces, samples), np.float32)
    rate = settings.levels.spikes_per_million * 1e-6
    count = rng.poisson(rate * white.size)
    place = rng.integers(0, white.size, count)
    height = rng.choice([-1.0, 1.0], count) * (20.0 + rng.exponential(100.0, count))
    np.add.at(white.reshape(-1), place, height.astype(np.float32))
    return white
