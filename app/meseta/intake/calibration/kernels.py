"""Compiled kernels of calibration: amplifier curves, gain switches, mains pickup, slew limit."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["choose_gain", "flag_slewing", "flag_switches", "follow_curve", "pickup_sums", "subtract_pickup"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Bits = npt.NDArray[np.uint8]
ANEW = 256
"""Samples after which a turned angle is taken anew: rounding has no room to add up."""


@kernel
def follow_curve(
    volts: Floats,
    knots: Floats,
    coefficients: Floats,
    scale: float,
    sign: float,
    low_bit: int,
    high_bit: int,
    ampere: Floats,
    bits: Bits,
) -> None:
    """Fill the current of every reading; NaN with its bit beyond the ends, NaN where the reading is NaN."""
    last = len(knots) - 1
    for index in range(len(volts)):
        value = volts[index]
        ampere[index] = np.nan
        if math.isnan(value):
            continue
        if value < knots[0]:
            bits[index] |= np.uint8(low_bit)
            continue
        if value > knots[last]:
            bits[index] |= np.uint8(high_bit)
            continue
        low, high = 0, last
        while high - low > 1:
            middle = (low + high) // 2
            if knots[middle] <= value:
                low = middle
            else:
                high = middle
        away = value - knots[low]
        y = coefficients[0, low]
        for power in range(1, 4):
            y = y * away + coefficients[power, low]
        ampere[index] = scale * math.sinh(y) if scale > 0.0 else sign * math.exp(y)


@kernel
def choose_gain(share: Floats, begins: Integers, leave: float, back: float, use: npt.NDArray[np.bool_]) -> None:
    """Fill where the high-gain channel is used: left at ``leave`` of its full scale, taken again below ``back``.

    A piece begins with the high gain where it is below ``leave``.  NaN is never used and changes nothing.
    """
    piece, high = 0, True
    for index in range(len(share)):
        value = share[index]
        if piece < len(begins) and index == begins[piece]:
            piece += 1
            high = value < leave
        elif high and value >= leave:
            high = False
        elif not high and value < back:
            high = True
        use[index] = high and not math.isnan(value)


@kernel
def flag_switches(state: Integers, begins: Integers, dead: int, seam_bit: int, dead_bit: int, bits: Bits) -> None:
    """Mark both samples at every change of state, and ``dead`` samples from it on; a piece begins without a change."""
    piece, left = 0, 0
    for index in range(len(state)):
        if piece < len(begins) and index == begins[piece]:
            piece, left = piece + 1, 0
        elif state[index] != state[index - 1]:
            bits[index - 1] |= np.uint8(seam_bit)
            bits[index] |= np.uint8(seam_bit)
            left = dead
        if left > 0:
            bits[index] |= np.uint8(dead_bit)
            left -= 1


@kernel
def flag_slewing(volts: Floats, begins: Integers, limit: float, bit: int, bits: Bits) -> None:
    """Mark both samples of every step of at least ``limit``; steps from piece to piece are none."""
    piece = 0
    for index in range(len(volts)):
        if piece < len(begins) and index == begins[piece]:
            piece += 1
        elif abs(volts[index] - volts[index - 1]) >= limit:
            bits[index - 1] |= np.uint8(bit)
            bits[index] |= np.uint8(bit)


@kernel
def pickup_sums(
    values: Floats,
    first: int,
    cycles_a_sample: float,
    runs: Integers,
    harmonics: int,
    matrix: Floats,
    vector: Floats,
    total: Floats,
) -> None:
    """Fill the normal equations of a Fourier series over each run of samples, less the run's own mean.

    ``values`` begin at flat sample ``first``; ``runs`` (n, 2) are half-open ranges of them without NaN.  Columns are
    cos 1, sin 1, cos 2, sin 2 ...; ``matrix`` (n, k, k), ``vector`` (n, k) and ``total`` (n,), the sums of squares, are
    filled.  Products of two columns are sums of cosines over equal steps, which have a closed form; only the products
    with the values are added up sample by sample.
    """
    size = 2 * harmonics
    row, mean, added = np.empty(size), np.empty(size), np.empty(size)
    cosines, sines = np.empty(size + 1), np.empty(size + 1)
    step = 2.0 * math.pi * cycles_a_sample
    turn_cosine, turn_sine = math.cos(step), math.sin(step)
    for run in range(len(runs)):
        begin, end = runs[run, 0], runs[run, 1]
        count = end - begin
        turns = (first + begin) * cycles_a_sample
        angle = 2.0 * math.pi * (turns - math.floor(turns))
        _sums_of_steps(angle, step, count, cosines, sines)
        for one in range(harmonics):
            mean[2 * one], mean[2 * one + 1] = cosines[one + 1] / count, sines[one + 1] / count
        base = values[begin]
        centre, square = 0.0, 0.0
        added[:] = 0.0
        cosine, sine = math.cos(angle), math.sin(angle)
        for index in range(begin, end):
            away = values[index] - base
            centre += away
            square += away * away
            _multiples(cosine, sine, harmonics, row)
            for place in range(size):
                added[place] += row[place] * away
            cosine, sine = cosine * turn_cosine - sine * turn_sine, sine * turn_cosine + cosine * turn_sine
        centre /= count
        total[run] = max(square - count * centre * centre, 0.0)
        for place in range(size):
            vector[run, place] = added[place] - count * mean[place] * centre
        for one in range(harmonics):
            for other in range(harmonics):
                both, apart = one + other + 2, abs(one - other)
                turned = sines[apart] if one >= other else -sines[apart]
                _fill_pair(matrix[run], mean, count, one, other, cosines[both], cosines[apart], sines[both], turned)


@kernel
def _sums_of_steps(angle: float, step: float, count: int, cosines: Floats, sines: Floats) -> None:
    """Fill the sums of cos and sin of k (angle + n step) over n < count, for k = 0, 1, 2 ... (geometric series)."""
    cosines[0], sines[0] = count, 0.0
    for multiple in range(1, len(cosines)):
        half = 0.5 * multiple * step
        middle = multiple * (angle + 0.5 * (count - 1) * step)
        length = math.sin(count * half) / math.sin(half)
        cosines[multiple], sines[multiple] = length * math.cos(middle), length * math.sin(middle)


@kernel
def _fill_pair(
    matrix: Floats,
    mean: Floats,
    count: int,
    one: int,
    other: int,
    cosine_both: float,
    cosine_apart: float,
    sine_both: float,
    sine_apart: float,
) -> None:
    """Fill the four products of two harmonics, each less its mean, from sums over their sum and difference."""
    a, b = 2 * one, 2 * other
    matrix[a, b] = 0.5 * (cosine_apart + cosine_both) - count * mean[a] * mean[b]
    matrix[a + 1, b + 1] = 0.5 * (cosine_apart - cosine_both) - count * mean[a + 1] * mean[b + 1]
    matrix[a, b + 1] = 0.5 * (sine_both - sine_apart) - count * mean[a] * mean[b + 1]
    matrix[a + 1, b] = 0.5 * (sine_both + sine_apart) - count * mean[a + 1] * mean[b]


@kernel
def _multiples(cosine: float, sine: float, harmonics: int, row: Floats) -> None:
    """Fill cos and sin of the multiples of an angle from its own, by the addition theorem."""
    row[0], row[1] = cosine, sine
    for place in range(1, harmonics):
        before_cosine, before_sine = row[2 * place - 2], row[2 * place - 1]
        row[2 * place] = before_cosine * cosine - before_sine * sine
        row[2 * place + 1] = before_sine * cosine + before_cosine * sine


@kernel
def subtract_pickup(values: Floats, first: int, cycles_a_sample: float, at: Integers, parts: Floats) -> None:
    """Subtract a Fourier series whose parts run linearly between anchors, in place.

    ``values`` begin at flat sample ``first``; ``at`` (n,) are ascending flat samples with parts (n, 2 harmonics); the
    first and last parts hold beyond them.  The angle is turned on from sample to sample and taken anew at every flat
    multiple of :data:`ANEW`, so that a result does not depend on where a block begins.
    """
    harmonics, last = parts.shape[1] // 2, len(at) - 1
    place = max(int(np.searchsorted(at, first, side="right")) - 1, 0)
    row = np.empty(2 * harmonics)
    step = 2.0 * math.pi * cycles_a_sample
    turn_cosine, turn_sine = math.cos(step), math.sin(step)
    cosine, sine = 1.0, 0.0
    begin = first // ANEW * ANEW
    for flat in range(begin, first + len(values)):
        if flat % ANEW == 0:
            turns = flat * cycles_a_sample
            angle = 2.0 * math.pi * (turns - math.floor(turns))
            cosine, sine = math.cos(angle), math.sin(angle)
        if flat >= first:
            while place < last and at[place + 1] <= flat:
                place += 1
            following = min(place + 1, last)
            share = 0.0
            if flat > at[place] and following > place:
                share = (flat - at[place]) / (at[following] - at[place])
            _multiples(cosine, sine, harmonics, row)
            for part in range(2 * harmonics):
                size = parts[place, part] + share * (parts[following, part] - parts[place, part])
                values[flat - first] -= size * row[part]
        cosine, sine = cosine * turn_cosine - sine * turn_sine, sine * turn_cosine + cosine * turn_sine


@warm_up
def _compile() -> None:
    values, begins, bits = np.array([0.0, 1.0, 0.0, 2.0]), np.zeros(1, np.int64), np.zeros(4, np.uint8)
    follow_curve(values, np.array([0.0, 1.0]), np.zeros((4, 1)), 0.0, 1.0, 8, 1, np.empty(4), bits)
    choose_gain(values, begins, 0.9, 0.8, np.empty(4, np.bool_))
    flag_switches(np.array([0, 0, 1, 1]), begins, 1, 4, 8, bits)
    flag_slewing(values, begins, 1.0, 2, bits)
    runs = np.array([[0, 4]], np.int64)
    pickup_sums(values, 0, 0.1, runs, 2, np.zeros((1, 4, 4)), np.zeros((1, 4)), np.zeros(1))
    subtract_pickup(values, 0, 0.1, np.array([0, 3]), np.zeros((2, 4)))
