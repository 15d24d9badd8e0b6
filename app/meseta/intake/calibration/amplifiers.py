"""Amplifier volts to ampere: linear, logarithmic, by a measured curve, one or two gains, switched ranges."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.calibration.spread import Spread, Value
from meseta.intake.meaning.units import unit_factor
from meseta.intake.recording import RawChannel, Recording
from meseta.traces import Quality

if TYPE_CHECKING:
    from meseta.intake.calibration.calibrate import Calibration

__all__ = ["ASSUMED_FULL_SCALE_VOLT", "SATURATED_SHARE", "SLEWING_SHARE", "current_of", "power_of_ten"]

Floats = npt.NDArray[np.float64]
Bits = npt.NDArray[np.uint8]
SATURATED_SHARE: Final = 0.99
SLEWING_SHARE: Final = 0.9
ASSUMED_FULL_SCALE_VOLT: Final = 10.0
"""Taken for the switch between two amplifiers where no full scale is stated; the notes say so."""


def current_of(calibration: Calibration, spread: Spread) -> tuple[Floats, Bits | None]:
    """Return (ampere, quality bits or None where every sample is trusted) over a range of samples.

    A logarithmic amplifier that shows sizes only gives sizes: its sign is that of the bias.
    """
    volts = _volts(calibration, calibration.channel, spread.recording, spread.start, spread.stop)
    given = volts
    if calibration.channel.name in calibration.pickup:
        given = _given(calibration.channel, spread.recording, spread.start, spread.stop)
    bits = _flags(calibration, given, spread)
    shifted = volts - spread.of(calibration.constant("offset_volt"))
    if calibration.curve is not None:
        ampere, beyond = calibration.curve.current(np.ascontiguousarray(shifted))
        return ampere, _merged(bits, beyond)
    if calibration.kind == "logarithmic":
        return _logarithmic(calibration, shifted, spread), bits
    if calibration.range_channel is not None:
        return _ranged(calibration, calibration.range_channel, shifted, bits, spread)
    low = shifted / spread.of(calibration.constant("gain_volt_per_ampere"))
    if calibration.second is None:
        return low, bits
    return _stitched(calibration, calibration.second, low, bits, spread)


def power_of_ten(exponents: Floats) -> Floats:
    """Return 10**x, the same bits on every machine."""
    from meseta.intake.kernels import power_of_ten as compiled

    result: Floats = compiled(np.ascontiguousarray(exponents))
    return result


def _volts(calibration: Calibration, channel: RawChannel, recording: Recording, start: int, stop: int) -> Floats:
    return calibration.recorded(recording, channel, start, stop) * unit_factor(channel.unit or "V", "V")


def _given(channel: RawChannel, recording: Recording, start: int, stop: int) -> Floats:
    """Return the volts that the amplifier gave, pickup and all: its ends and its speed are in terms of these."""
    return recording.values(channel, start, stop) * unit_factor(channel.unit or "V", "V")


def _logarithmic(calibration: Calibration, shifted: Floats, spread: Spread) -> Floats:
    """Return I_ref 10^(U/s), or I_ref (10^(U/s) - 10^(-U/s)) for an amplifier of both polarities.

    The second is the law of two junctions back to back, I = I_ref 2 sinh(ln 10 U/s): each is a diode with
    I = I_ref (exp(q U/kT) - 1) (Shockley, Bell Syst. Tech. J. 28, 435, 1949), the leakage of one makes up for the
    "- 1" of the other.
    """
    decades = shifted / spread.of(calibration.constant("volt_per_decade"))
    reference: Value = spread.of(calibration.constant("reference_ampere"))
    if calibration.both_polarities:
        return reference * (power_of_ten(decades) - power_of_ten(-decades))
    return reference * power_of_ten(decades)


def _flags(calibration: Calibration, volts: Floats, spread: Spread) -> Bits | None:
    """Return where the amplifier is saturated, or moves as fast as it can."""
    bits = None
    if "full_scale_volt" in calibration.constants:
        beyond = np.abs(volts) >= SATURATED_SHARE * spread.of(calibration.constant("full_scale_volt"))
        bits = beyond.astype(np.uint8) * np.uint8(Quality.SATURATED) if beyond.any() else None
    if calibration.slew_volt:
        bits = _merged(bits, _slewing(calibration, volts, spread))
    return bits


def _slewing(calibration: Calibration, volts: Floats, spread: Spread) -> Bits:
    from meseta.intake.calibration.kernels import flag_slewing

    recording = spread.recording
    before, after = int(spread.start > 0), int(spread.stop < recording.samples)
    wide = Spread(recording, spread.start - before, spread.stop + after)
    ends = [_given(calibration.channel, recording, wide.start, spread.start), volts]
    ends.append(_given(calibration.channel, recording, spread.stop, wide.stop))
    bits = np.zeros(wide.stop - wide.start, np.uint8)
    flag_slewing(
        np.concatenate(ends), wide.piece_begins(), SLEWING_SHARE * calibration.slew_volt, Quality.SLEWING, bits
    )
    own: Bits = bits[before : before + len(volts)]
    return own


def _stitched(
    calibration: Calibration, second: RawChannel, low: Floats, bits: Bits | None, spread: Spread
) -> tuple[Floats, Bits]:
    """Return the current of the high-gain channel where it is within its range, else of the other."""
    full = float(np.max(calibration.constant("full_scale_volt", ASSUMED_FULL_SCALE_VOLT)))

    seen: list[tuple[int, Floats]] = []

    def share(start: int, stop: int) -> Floats:
        seen.append((start, _given(second, spread.recording, start, stop)))
        return np.abs(seen[-1][1]) / full

    use, seams = calibration.switching.choose(share, spread)
    begin, wide = seen[-1]  # the range itself, and what it needed before and behind
    volts = wide[spread.start - begin : spread.stop - begin]
    if second.name in calibration.pickup:
        volts = _volts(calibration, second, spread.recording, spread.start, spread.stop)
    high = (volts - spread.of(calibration.constant("high_gain_offset_volt"))) / spread.of(
        calibration.constant("high_gain_volt_per_ampere")
    )
    if calibration.is_scaled_by_overlap and calibration.overlap is not None:
        high = (high - calibration.overlap.offset_ampere) / calibration.overlap.ratio
    of_low = np.zeros(len(low), np.uint8) if bits is None else bits
    return np.where(use, high, low), np.where(use, 0, of_low).astype(np.uint8) | seams


def _ranged(
    calibration: Calibration, codes: RawChannel, shifted: Floats, bits: Bits | None, spread: Spread
) -> tuple[Floats, Bits]:
    """Return the current of an amplifier that switches ranges and records which."""
    recording = spread.recording
    gain, switches = calibration.switching.gains(
        lambda start, stop: recording.values(codes, start, stop), spread, recording.source.name
    )
    return shifted / gain, switches if bits is None else bits | switches


def _merged(bits: Bits | None, more: Bits) -> Bits | None:
    if not more.any():
        return bits
    return more if bits is None else bits | more
