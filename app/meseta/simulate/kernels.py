"""Compiled kernels of the simulation: draw pieces, make noise, pass the amplifier, find the true ranges."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = [
    "amplify_linear",
    "amplify_logarithmic",
    "draw_ideal",
    "pink_filter",
    "pink_noise",
    "quantise_linear",
    "quantise_logarithmic",
    "remembered",
    "shake",
    "true_ranges",
]

Floats = npt.NDArray[np.float64]
Floats32 = npt.NDArray[np.float32]
Integers = npt.NDArray[np.int64]
Bytes = npt.NDArray[np.uint8]


@kernel
def remembered(fresh: Floats, kept: float) -> Floats:
    """Return the stationary first-order autoregressive row x[t] = kept x[t-1] + sqrt(1 - kept²) fresh[t]."""
    out = np.empty_like(fresh)
    rest = math.sqrt(1.0 - kept * kept)
    last = fresh[0] if len(fresh) else 0.0
    for i in range(len(fresh)):
        last = fresh[0] if i == 0 else kept * last + rest * fresh[i]
        out[i] = last
    return out


@kernel
def draw_ideal(
    stop: Integers, log10_g0: Floats, slope: Floats, tunnel_log10_g0: Floats, tunnel_slope: Floats, ideal: Floats
) -> None:
    """Write the noiseless conductance of every trace: within a piece both parts are geometric rows."""
    ten = math.log(10.0)
    for t in range(stop.shape[0]):
        i = 0
        for p in range(stop.shape[1]):
            if stop[t, p] <= i:
                continue
            own, own_factor = math.exp(ten * log10_g0[t, p]), math.exp(ten * slope[t, p])
            gap, gap_factor = math.exp(ten * tunnel_log10_g0[t, p]), math.exp(ten * tunnel_slope[t, p])
            while i < stop[t, p]:
                ideal[t, i] = own + gap
                own *= own_factor
                gap *= gap_factor
                i += 1


@kernel
def pink_filter(sections: int) -> tuple[Floats, Floats, float]:
    """Return poles, zeros and gain of a row of first-order sections whose output falls as 1/f in power.

    Poles stand a factor 4 apart in frequency, zeros half-way between on the logarithmic axis (matched z-transform),
    from half the sampling rate down to 4^-(sections - 1)/4 of it; the gain makes white noise of unit variance into
    pink noise of unit variance.
    """
    poles, zeros = np.empty(sections), np.empty(sections)
    for k in range(sections):
        frequency = 0.25 * 4.0 ** (k - sections + 1)
        poles[k] = math.exp(-2.0 * math.pi * frequency)
        zeros[k] = math.exp(-4.0 * math.pi * frequency)
    state, power = np.zeros(sections), 0.0
    impulses = int(30 * 4 ** (sections - 1))
    for i in range(impulses):
        value = 1.0 if i == 0 else 0.0
        for k in range(sections):
            inner = value + poles[k] * state[k]
            value = inner - zeros[k] * state[k]
            state[k] = inner
        power += value * value
    return poles, zeros, 1.0 / math.sqrt(power)


@kernel
def pink_noise(white: Floats32, warm: int, poles: Floats, zeros: Floats, gain: float, pink: Floats32) -> None:
    """Filter one row of white noise into pink noise; the first ``warm`` samples only set its state."""
    state = np.zeros(len(poles))
    for i in range(len(white)):
        value = gain * white[i]
        for k in range(len(poles)):
            inner = value + poles[k] * state[k]
            value = inner - zeros[k] * state[k]
            state[k] = inner
        if i >= warm:
            pink[i - warm] = value


@kernel
def shake(
    ideal: Floats,
    pink: Floats32,
    stop: Integers,
    relative: Floats,
    kind: Bytes,
    telegraph: Floats,
    switches: Integers,
    junction: Floats,
) -> None:
    """Write the conductance with its relative 1/f noise and, on plateaus, telegraph noise (never below a tenth)."""
    for t in range(ideal.shape[0]):
        i, s, sign = 0, 0, 0.5
        for p in range(stop.shape[1]):
            while i < stop[t, p]:
                while s < switches.shape[1] and switches[t, s] <= i:
                    s += 1
                    sign = -sign
                factor = 1.0 + relative[t, p] * pink[t, i]
                if kind[t, p] > 0:
                    factor += sign * telegraph[t]
                junction[t, i] = ideal[t, i] * max(factor, 0.1)
                i += 1


@kernel
def _measured(contact: float, rho: float) -> float:
    return contact / (1.0 + rho * contact)


@kernel
def amplify_linear(
    contact: Floats,
    white: Floats32,
    rho: float,
    floor_sigma: float,
    thermal: float,
    pickup: float,
    mains: float,
    phase: Floats,
    coefficient: float,
    poles: int,
    reading: Floats,
) -> None:
    """Write what a linear amplifier shows, in G0: series resistor, current noise, pickup, low-pass filter.

    Parameters
    ----------
    contact : (traces, samples)
    white : (traces, samples)
        Unit noise plus spikes in its unit.
    rho : float
        Series resistance times G0.
    floor_sigma, thermal : float
        Standard deviation of the current noise before the filter, at the floor and thermal at 1 G0.
    pickup, mains : float
        Amplitude in G0 and radians a sample.
    phase : (traces,)
        Phase of the mains at the first sample.
    coefficient : float
        1 - exp(-2 pi f/f_s) of one pole.
    """
    for t in range(contact.shape[0]):
        one = two = _measured(contact[t, 0], rho)
        cosine, sine = math.cos(phase[t]), math.sin(phase[t])
        turn_c, turn_s = math.cos(mains), math.sin(mains)
        for i in range(contact.shape[1]):
            value = _measured(contact[t, i], rho)
            value += white[t, i] * math.sqrt(floor_sigma * floor_sigma + thermal * thermal * value)
            if pickup > 0.0:
                value += pickup * (sine + 0.3 * sine * (3.0 - 4.0 * sine * sine))
                cosine, sine = cosine * turn_c - sine * turn_s, sine * turn_c + cosine * turn_s
            one += coefficient * (value - one)
            two += coefficient * (one - two)
            reading[t, i] = two if poles == 2 else one


@kernel
def amplify_logarithmic(
    contact: Floats,
    white: Floats32,
    rho: float,
    floor_sigma: float,
    thermal: float,
    pickup: float,
    mains: float,
    phase: Floats,
    coefficient: float,
    poles: int,
    smallest: float,
    reading: Floats,
) -> None:
    """Write what a logarithmic amplifier shows, as log10 G/G0: it takes the current's size, then filters the logarithm.

    Parameters are those of :func:`amplify_linear`; ``smallest`` is the least current it tells from none, in G0.
    """
    for t in range(contact.shape[0]):
        one = two = math.log10(max(_measured(contact[t, 0], rho), smallest))
        cosine, sine = math.cos(phase[t]), math.sin(phase[t])
        turn_c, turn_s = math.cos(mains), math.sin(mains)
        for i in range(contact.shape[1]):
            value = _measured(contact[t, i], rho)
            value += white[t, i] * math.sqrt(floor_sigma * floor_sigma + thermal * thermal * value)
            if pickup > 0.0:
                value += pickup * (sine + 0.3 * sine * (3.0 - 4.0 * sine * sine))
                cosine, sine = cosine * turn_c - sine * turn_s, sine * turn_c + cosine * turn_s
            shown = math.log10(max(abs(value), smallest))
            one += coefficient * (shown - one)
            two += coefficient * (one - two)
            reading[t, i] = two if poles == 2 else one


@kernel
def quantise_linear(
    reading: Floats, fine: float, coarse: float, hand_over: float, full_scale: float, out: Floats32
) -> None:
    """Write readings in G0 in steps of the converter: fine ones below the hand-over of two gains, coarse ones above."""
    for t in range(reading.shape[0]):
        for i in range(reading.shape[1]):
            value = min(max(reading[t, i], -full_scale), full_scale)
            step = fine if abs(value) < hand_over else coarse
            out[t, i] = np.rint(value / step) * step if step > 0.0 else value


@kernel
def quantise_logarithmic(reading: Floats, step_decades: float, highest: float, out: Floats32) -> None:
    """Write readings of log10 G/G0 as conductance in G0, in steps of the converter."""
    for t in range(reading.shape[0]):
        for i in range(reading.shape[1]):
            value = min(reading[t, i], highest)
            if step_decades > 0.0:
                value = np.rint(value / step_decades) * step_decades
            out[t, i] = 10.0**value


@kernel
def true_ranges(
    clean: Floats,
    ideal: Floats,
    stop: Integers,
    log10_g0: Floats,
    slope: Floats,
    kind: Bytes,
    logarithmic: bool,
    rho: float,
    lag: int,
    tolerance: float,
    start_out: Integers,
    stop_out: Integers,
    level_out: Floats,
) -> None:
    """Write where the noiseless reading lies within ``tolerance`` of each plateau's own conductance.

    The search begins at the piece's first sample; after its last one the reading may stay for at most ``lag`` samples.
    A plateau that the reading never comes to gets an empty range.
    """
    for t in range(stop.shape[0]):
        begin, taken = 0, 0
        for p in range(stop.shape[1]):
            end = stop[t, p]
            start_out[t, p], stop_out[t, p], level_out[t, p] = begin, begin, np.nan
            if kind[t, p] > 0 and end > begin and log10_g0[t, p] > -300.0:
                first = max(begin, taken)
                while first < end and not _inside(
                    clean[t, first], log10_g0[t, p] + slope[t, p] * (first - begin), rho, logarithmic, tolerance
                ):
                    first += 1
                last = end
                while (
                    first < end
                    and last < min(end + lag, clean.shape[1])
                    and _inside(
                        clean[t, last], log10_g0[t, p] + slope[t, p] * (last - begin), rho, logarithmic, tolerance
                    )
                ):
                    last += 1
                total = 0.0
                for i in range(first, end):
                    total += ideal[t, i]
                if first < end:
                    taken = last
                    start_out[t, p], stop_out[t, p], level_out[t, p] = first, last, total / (end - first)
            begin = max(begin, end)


@kernel
def _inside(reading: float, log10_g0: float, rho: float, logarithmic: bool, tolerance: float) -> bool:
    own = _measured(math.exp(math.log(10.0) * log10_g0), rho)
    value = math.exp(math.log(10.0) * reading) if logarithmic else reading
    return abs(value - own) <= tolerance * own


@warm_up
def _compile() -> None:
    """Call every kernel on tiny arrays of the types used in earnest."""
    plan = np.zeros((1, 2))
    stop = np.array([[4, 8]], np.int64)
    kind = np.array([[1, 0]], np.uint8)
    wide = np.zeros((1, 8))
    narrow = np.zeros((1, 8), np.float32)
    remembered(np.zeros(3), 0.5)
    draw_ideal(stop, plan, plan, plan, plan, wide)
    poles, zeros, gain = pink_filter(2)
    pink_noise(np.zeros(8, np.float32), 0, poles, zeros, gain, narrow[0])
    shake(wide, narrow, stop, plan, kind, np.zeros(1), np.zeros((1, 2), np.int64), wide)
    phase = np.zeros(1)
    amplify_linear(wide, narrow, 0.0, 1e-6, 0.0, 0.0, 0.1, phase, 0.5, 2, wide)
    amplify_logarithmic(wide, narrow, 0.0, 1e-6, 0.0, 0.0, 0.1, phase, 0.5, 2, 1e-9, wide)
    quantise_linear(wide, 1e-6, 1e-4, 1e-2, 10.0, narrow)
    quantise_logarithmic(wide, 1e-4, 1.0, narrow)
    ranges = np.zeros((1, 2), np.int64)
    true_ranges(wide, wide, stop, plan, plan, kind, False, 0.0, 1, 0.05, ranges, ranges.copy(), plan.copy())
