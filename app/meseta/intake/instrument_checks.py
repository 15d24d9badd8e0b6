"""Checks of the instrument: sign, full scale, converter step, floor against thermal noise, gains, mains, response."""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.findings import Finding, Look, floor_of
from meseta.intake.mains import Pickup, find_pickup
from meseta.intake.response import rise_times, slew_limit
from meseta.intake.units import unit_factor
from meseta.quantities import BOLTZMANN_JOULE_PER_KELVIN, G0_SIEMENS, johnson_current_rms
from meseta.traces import Quality

__all__ = ["converter_step", "floor_noise", "full_scale", "gain_ratio", "mains", "response", "sign"]

Floats = npt.NDArray[np.float64]
ROOM_KELVIN: Final = 300.0
PILE_UP: Final = 0.002
FACTORS: Final = (2.0, 10.0, 100.0)
PICKUP_WINDOWS: Final = 48
LEAST_LEVELS: Final = 10
NEAR_ZERO_LEVELS: Final = 41
STEPPED_SHARE: Final = 0.2
"""Readings come in steps where fewer different values than this share of the samples occur."""


def sign(values: Sequence[Floats]) -> Finding | None:
    """Find a recording that is upside down: closed contacts must not read negative."""
    firsts = [one[: max(len(one) // 20, 3)] for one in values]
    begins = np.array([np.nanmedian(one) for one in firsts if np.isfinite(one).any()])
    if len(begins) == 0:
        return None
    negative = float(np.mean(begins < 0))
    if negative > 0.5:
        return Finding("sign", False, f"{negative:.0%} of the openings begin negative: gain or bias has the wrong sign")
    return Finding("sign", True, "openings begin positive")


def gain_ratio(part: Part) -> Finding | None:
    """Compare the two amplifiers of a two-gain recording where both are in range."""
    overlap = part.calibration.overlap
    if overlap is None:
        return None
    text = f"the second amplifier reads {overlap.ratio:.4g} +- {overlap.ratio_error:.2g} times the first in the overlap"
    if part.calibration.is_scaled_by_overlap:
        return Finding("gain ratio", True, f"{text}, and is scaled by it")
    return Finding("gain ratio", overlap.fits, text if overlap.fits else f"{text}: the two gains do not fit each other")


def converter_step(part: Part) -> Finding | None:
    """Compare the converter's step with the noise at the floor."""
    if part.calibration.kind not in ("linear", "conductance", "current"):
        return None
    values = part.conductance[: min(len(part.conductance), 500_000)].astype(np.float64)
    values = values[np.isfinite(values)]
    levels = np.unique(values)
    if len(levels) < LEAST_LEVELS:
        return None
    near_zero = np.sort(levels[np.argsort(np.abs(levels))[:NEAR_ZERO_LEVELS]])
    small = values[np.abs(values) <= np.quantile(np.abs(values), 0.3)]
    step, noise = float(np.median(np.diff(near_zero))), floor_of(values)[1]
    noise = noise if np.isfinite(noise) else float(np.std(small))
    is_stepped = len(np.unique(small)) < STEPPED_SHARE * len(small)
    if is_stepped and step > noise:
        return Finding("converter step", False, f"one step is {step:.2g} G0, coarser than the noise of {noise:.2g} G0")
    return Finding("converter step", True, f"one step of at most {step:.2g} G0 against a noise of {noise:.2g} G0")


def full_scale(part: Part) -> Finding | None:
    """Find the pile-up of samples at the amplifier's end, and whether it lies where full scale is stated."""
    if part.calibration.kind not in ("linear", "logarithmic"):
        return None
    channel = part.calibration.channel
    volts = part.recording.values(channel, 0, min(part.recording.samples, 2_000_000))
    volts = np.abs(volts[np.isfinite(volts)]) * unit_factor(channel.unit or "V", "V")
    if len(volts) == 0:
        return None
    top = float(volts.max())
    piled = float(np.mean(volts >= top * (1 - 1e-6)))
    near = float(np.mean((volts < top * (1 - 1e-6)) & (volts >= 0.98 * top)))
    stated = part.calibration.constants.get("full_scale_volt")
    if stated is None:
        if piled > PILE_UP:
            text = f"{piled:.2%} of the samples stand at the highest reading: set calibration.full_scale_volt"
            return Finding("full scale", False, text)
        return Finding("full scale", True, "no pile-up at the highest reading")
    limit = float(np.max(stated[0]))
    for factor in FACTORS:
        beyond = top > 1.05 * limit and abs(top / limit / factor - 1) < 0.05
        short = piled > max(PILE_UP, 5 * near) and abs(limit / top / factor - 1) < 0.05
        if beyond or short:
            where = f"go to {top:.3g} V" if beyond else f"pile up at {top:.3g} V"
            side = "above" if beyond else "below"
            text = (
                f"readings {where}, a factor {factor:g} {side} the stated full scale of {limit:g} V: is the scale of "
                f"the converter, or a divider before it, off by {factor:g}?"
            )
            return Finding("full scale", False, text)
    if top > 1.05 * limit:
        return Finding("full scale", False, f"readings go to {top:.3g} V, beyond the stated full scale of {limit:g} V")
    share = part.share_of(Quality.SATURATED)
    return Finding("full scale", True, f"{share:.2%} of the samples are saturated and marked")


def floor_noise(look: Look) -> Finding | None:
    """Compare the floor with thermal noise: a floor quieter than physics means a wrong gain or bias.

    Current noise sqrt(4 k T B G) (Nyquist, Phys. Rev. 32, 110, 1928) of the floor's own conductance, and, for a linear
    amplifier, of a feedback resistor of the size of its gain; bandwidth at most half the sampling rate, 300 K.
    """
    part = look.part
    if not np.isfinite(part.interval_second) or part.interval_second <= 0:
        return None
    centre, sigma = floor_of(look.pooled)
    bias = _bias(part)
    if not bias or not sigma > 0.0:
        return None
    bandwidth = 0.5 / part.interval_second
    level = max(abs(centre), sigma)
    thermal = float(johnson_current_rms(level, ROOM_KELVIN, bandwidth)) / (abs(bias) * G0_SIEMENS)
    text = f"noise of {sigma:.2g} G0 with the contact open; thermal noise alone gives up to {thermal:.2g} G0 at 300 K"
    resistor = _feedback_ohm(part)
    if resistor:
        ampere = np.sqrt(4 * BOLTZMANN_JOULE_PER_KELVIN * ROOM_KELVIN * bandwidth / resistor)
        of_amplifier = float(ampere) / (abs(bias) * G0_SIEMENS)
        text += f", a feedback resistor of {resistor:.3g} ohm {of_amplifier:.2g} G0"
        if sigma < 0.05 * of_amplifier:
            return Finding("floor", False, f"{text}: no amplifier of that gain is so quiet, is the gain or bias off?")
    return Finding("floor", sigma > 0.02 * thermal, text)


def _feedback_ohm(part: Part) -> float:
    """Return the feedback resistor that a linear amplifier of the stated gain has at most; 0 where there is none."""
    calibration = part.calibration
    if calibration.kind != "linear" or calibration.range_channel is not None:
        return 0.0
    if "reference_resistance_ohm" in calibration.constants:
        return 0.0
    name = "gain_volt_per_ampere" if calibration.second is None else "high_gain_volt_per_ampere"
    return float(np.max(np.abs(calibration.constant(name))))


def _bias(part: Part) -> float:
    if "bias_volt" in part.calibration.constants:
        return float(np.median(part.calibration.bias_at_junction_volt))
    value = np.asarray(part.recording.metadata.get("bias_volt", 0.0))
    return float(np.median(value)) if value.dtype.kind in "fiu" else 0.0


def mains(look: Look) -> Finding | None:
    """Report the mains pickup of the channel that shows the floor, against the noise there."""
    part, calibration = look.part, look.part.calibration
    if calibration.kind not in ("linear", "current", "conductance") or calibration.range_channel is not None:
        return None
    channel = calibration.second or calibration.channel
    removed = calibration.pickup.get(channel.name)
    if removed is not None:
        return Finding("mains pickup", True, f"{removed.text()}; removed from '{channel.name}'")
    unit = channel.unit or ("V" if calibration.kind == "linear" else "G0")
    read = partial(part.recording.values, channel)
    found = find_pickup(part.recording, read, unit, part.interval_second, PICKUP_WINDOWS)
    if found is None:
        return None
    if not found.is_significant:
        return Finding("mains pickup", True, "none stands out of the noise")
    return Finding("mains pickup", found.amplitude.max() <= _noise_at_floor(found), _pickup_text(found))


def _noise_at_floor(found: Pickup) -> float:
    return 1.5 * found.noise


def _pickup_text(found: Pickup) -> str:
    text = f"{found.text()}; the other noise at the floor is {found.noise:.2g} {found.unit}"
    return text if found.amplitude.max() <= _noise_at_floor(found) else f"{text}: calibration.remove_mains subtracts it"


def response(look: Look) -> list[Finding]:
    """Report rise times against current, and a slew limit that falls are seen to run at."""
    part, found = look.part, []
    centre, sigma = floor_of(look.pooled)
    lowest = max(5 * sigma + 2 * abs(centre), 1e-8) if np.isfinite(sigma) else 1e-4
    times = rise_times(look.values, lowest_g0=lowest) if lowest < 0.1 else None
    if times is not None and len(times.level_g0):
        ends = sorted({0, len(times.level_g0) - 1})
        said = [f"{times.rise_samples[at]:.2g} samples near {times.level_g0[at]:.1g} G0" for at in ends]
        found.append(Finding("rise time", True, f"the steepest falls take at most {' and '.join(said)}"))
    calibration = part.calibration
    if calibration.kind == "linear" and calibration.second is None and calibration.range_channel is None:
        factor = unit_factor(calibration.channel.unit or "V", "V")
        limit = slew_limit([_volts(part, start, stop) * factor for start, stop in look.spans])
        if limit is not None:
            found.append(_slew_finding(part, limit))
    return found


def _volts(part: Part, start: int, stop: int) -> Floats:
    row = int(np.searchsorted(part.offsets, start, side="right")) - 1
    begin = int(part.start[row]) + start - int(part.offsets[row])
    return part.recording.values(part.calibration.channel, begin, begin + stop - start)


def _slew_finding(part: Part, limit: float) -> Finding:
    per_second = limit / part.interval_second
    rate = f"{per_second:.3g} V/s" if np.isfinite(per_second) else f"{limit:.3g} V a sample"
    if part.calibration.slew_volt:
        share = part.share_of(Quality.SLEWING)
        return Finding("slew rate", True, f"falls run at {rate}; {share:.2%} of the samples are flagged")
    text = f"falls run at {rate} and no faster: these samples show the amplifier, set calibration.slew_volt_per_second"
    return Finding("slew rate", False, text)
