"""Checks of the instrument: full scale, converter step, floor against thermal noise, gains, mains, response."""

from __future__ import annotations

from functools import partial
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.calibration.mains import Pickup, find_pickup
from meseta.intake.checks.findings import STEPPED_SHARE, Finding, Look, step_near
from meseta.intake.checks.rate import LEAST_OF_NOISE, mains_elsewhere
from meseta.intake.checks.response import rise_times, slew_limit
from meseta.intake.meaning.units import unit_factor
from meseta.quantities import BOLTZMANN_JOULE_PER_KELVIN, G0_SIEMENS, johnson_current_rms
from meseta.traces import Quality

__all__ = ["converter_step", "floor_noise", "full_scale", "gain_ratio", "mains", "response"]

Floats = npt.NDArray[np.float64]
ROOM_KELVIN: Final = 300.0
PILE_UP: Final = 0.002
FACTORS: Final = (2.0, 10.0, 100.0)
PICKUP_WINDOWS: Final = 48
SLOWEST_SHOWN: Final = 5.0
"""Where the steepest falls take that many times longer than elsewhere the contact is slow, not the amplifier."""
RATIO_ROOM: Final = 0.05
LEAST_LEVELS: Final = 10
COARSEST_G0: Final = 0.03


def gain_ratio(part: Part) -> Finding | None:
    """Compare the two amplifiers of a two-gain recording where both are in range."""
    second, overlap = part.calibration.second, part.calibration.overlap
    if second is None:
        return None
    first_gain, second_gain = (
        float(np.median(np.abs(part.calibration.constant(name))))
        for name in ("gain_volt_per_ampere", "high_gain_volt_per_ampere")
    )
    if second_gain < first_gain:
        text = f"the second amplifier, of {second_gain:.3g} V/A, is said to have less gain than the first, of "
        return Finding("gain ratio", False, f"{text}{first_gain:.3g} V/A: are the gains, or the channels, swapped?")
    if overlap is None:
        return None
    text = f"the second amplifier reads {overlap.ratio:.4g} +- {overlap.ratio_error:.2g} times the first in the overlap"
    if overlap.ratio < 0:
        return Finding("gain ratio", False, f"{text}: one of the two gains has the wrong sign")
    if part.calibration.is_scaled_by_overlap:
        return Finding("gain ratio", True, f"{text}, and is scaled by it")
    if overlap.fits:
        return Finding("gain ratio", True, text)
    text += ": the two gains do not fit each other"
    for factor in FACTORS:
        for made, side in ((overlap.ratio / factor, "small"), (overlap.ratio * factor, "large")):
            if abs(made - 1.0) < RATIO_ROOM:
                other = "large" if side == "small" else "small"
                text += f"; the second is stated a factor {factor:g} too {side}, or the first too {other}"
                return Finding("gain ratio", False, text)
    return Finding("gain ratio", False, text)


def converter_step(look: Look) -> Finding | None:
    """Compare the converter's step with the noise at the floor.

    A floor within one step is the converter's limit and no mistake; a step that swallows single atoms is one.
    """
    part, floor = look.part, look.floor
    if part.calibration.kind not in ("linear", "conductance", "current") or part.calibration.second is not None:
        return None
    values = look.pooled[np.isfinite(look.pooled)]
    if len(np.unique(values)) < LEAST_LEVELS:
        return None
    step = step_near(values, floor.level_g0 if floor.is_seen else 0.0)
    lowest = values[np.abs(values) <= np.quantile(np.abs(values), 0.3)]
    if len(np.unique(lowest)) >= STEPPED_SHARE * len(lowest):
        noise = f" against a noise of {floor.sigma_g0:.2g} G0" if floor.is_seen else ""
        return Finding("converter step", True, f"one step of at most {step:.2g} G0{noise}")
    text = f"one step is {step:.2g} G0"
    if not floor.is_seen:
        text += ", and no floor is seen to compare it with"
    elif floor.sigma_g0 < step:
        text += ": the floor lies within one converter step, readings say nothing finer than that"
    else:
        text += f" against a noise of {floor.sigma_g0:.2g} G0"
    if step > COARSEST_G0:
        return Finding("converter step", False, f"{text}: too coarse to tell contacts apart, is more gain possible?")
    return Finding("converter step", True, text)


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
    if top == 0.0:
        return Finding("full scale", False, "every reading is 0 V: was the amplifier recorded?")
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
    centre, sigma = look.floor.level_g0, look.floor.sigma_g0
    bias = _bias(part)
    if not bias or not sigma > 0.0 or look.floor.is_within_a_step:
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
    if found is None or not found.is_significant or found.amplitude[0] < LEAST_OF_NOISE * found.noise:
        elsewhere = mains_elsewhere(part.recording, read, unit, part.interval_second)
        if elsewhere is not None:
            return elsewhere
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
    floor = look.floor
    lowest = max(floor.reach(5.0, 5.0) + abs(floor.level_g0), 1e-8) if floor.is_seen else 1e-4
    times = rise_times(look.values, lowest_g0=lowest) if lowest < 0.1 else None
    if times is not None and len(times.level_g0):
        shown = np.flatnonzero(times.rise_samples <= SLOWEST_SHOWN * max(float(times.rise_samples.min()), 1.0))
        ends = sorted({int(shown[0]), int(shown[-1])})
        said = [
            f"{times.rise_samples[at]:.2g} +- {times.error_samples[at]:.1g} samples from {times.level_g0[at]:.1g} G0"
            for at in ends
        ]
        found.append(Finding("rise time", True, f"the steepest falls take {' and '.join(said)} (90 to 10 %)"))
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
