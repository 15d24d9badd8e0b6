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
    values: Floats, phase: Floats, runs: Integers, harmonics: int, matrix: Floats, vector: Floats, total: Floats
) -> None:
    """Add up the normal equations of a Fourier series over each run of samples, less the run's own mean.

    ``phase`` is the angle of the fundamental at every sample; ``runs`` (n, 2) half-open ranges.  Columns are
    cos 1, sin 1, cos 2, sin 2 ...; ``matrix`` (n, k, k) and ``vector`` (n, k) begin as zeros; ``total`` (n,) is filled
    with the sums of squares of the values.
    """
    size = 2 * harmonics
    row, mean = np.empty(size), np.empty(size)
    for run in range(len(runs)):
        begin, end = runs[run, 0], runs[run, 1]
        count = end - begin
        mean[:] = 0.0
        centre = 0.0
        for index in range(begin, end):
            _series(phase[index], harmonics, row)
            for place in range(size):
                mean[place] += row[place]
            centre += values[index]
        for place in range(size):
            mean[place] /= count
        centre /= count
        total[run] = 0.0
        for index in range(begin, end):
            _series(phase[index], harmonics, row)
            away = values[index] - centre
            total[run] += away * away
            for place in range(size):
                row[place] -= mean[place]
                vector[run, place] += row[place] * away
            for one in range(size):
                for other in range(one + 1):
                    matrix[run, one, other] += row[one] * row[other]
        for one in range(size):
            for other in range(one):
                matrix[run, other, one] = matrix[run, one, other]


@kernel
def _series(angle: float, harmonics: int, row: Floats) -> None:
    """Fill cos and sin of the multiples of an angle, by the addition theorem."""
    cosine, sine = math.cos(angle), math.sin(angle)
    row[0], row[1] = cosine, sine
    for place in range(1, harmonics):
        before_cosine, before_sine = row[2 * place - 2], row[2 * place - 1]
        row[2 * place] = before_cosine * cosine - before_sine * sine
        row[2 * place + 1] = before_sine * cosine + before_cosine * sine


@kernel
def subtract_pickup(values: Floats, first: int, cycles_a_sample: float, at: Integers, parts: Floats) -> None:
    """Subtract a Fourier series whose parts run linearly between anchors, in place.

    ``values`` begin at flat sample ``first``; ``at`` (n,) are ascending flat samples with parts (n, 2 harmonics); the
    first and last parts hold beyond them.
    """
    harmonics, last, place = parts.shape[1] // 2, len(at) - 1, 0
    row = np.empty(2 * harmonics)
    for index in range(len(values)):
        flat = first + index
        while place < last and at[place + 1] <= flat:
            place += 1
        following = min(place + 1, last)
        share = 0.0
        if flat > at[place] and following > place:
            share = (flat - at[place]) / (at[following] - at[place])
        turns = flat * cycles_a_sample
        _series(2.0 * math.pi * (turns - math.floor(turns)), harmonics, row)
        for part in range(2 * harmonics):
            size = parts[place, part] + share * (parts[following, part] - parts[place, part])
            values[index] -= size * row[part]


@warm_up
def _compile() -> None:
    values, begins, bits = np.array([0.0, 1.0, 0.0, 2.0]), np.zeros(1, np.int64), np.zeros(4, np.uint8)
    follow_curve(values, np.array([0.0, 1.0]), np.zeros((4, 1)), 0.0, 1.0, 8, 1, np.empty(4), bits)
    choose_gain(values, begins, 0.9, 0.8, np.empty(4, np.bool_))
    flag_switches(np.array([0, 0, 1, 1]), begins, 1, 4, 8, bits)
    flag_slewing(values, begins, 1.0, 2, bits)
    runs = np.array([[0, 4]], np.int64)
    pickup_sums(values, values, runs, 2, np.zeros((1, 4, 4)), np.zeros((1, 4)), np.zeros(1))
    subtract_pickup(values, 0, 0.1, np.array([0, 3]), np.zeros((2, 4)))
