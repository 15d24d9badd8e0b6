"""The drive axis of a recording: displacement in nm where it is known, else the drive in its own unit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.intake.meaning.units import unit_factor
from meseta.intake.recording import RawChannel, Recording
from meseta.recipe.calibration import CalibrationSettings

__all__ = ["DriveAxis", "drive_of", "interval_doubts", "sample_interval"]

LOOKED_SAMPLES = 2_000_000
SAME_RATE = 0.01
PLAUSIBLE_NM = (0.02, 200.0)
"""Span of one trace that a displacement without a unit must have to be taken as nm (common practice, no source)."""


@dataclass(frozen=True)
class DriveAxis:
    """Where drive values come from.

    Attributes
    ----------
    channel : RawChannel or None
        The channel; None where samples are counted.
    factor : float
        Drive value in ``unit`` of one unit of the channel, or of one sample where there is no channel.
    unit : str
        "nm", "V", "s" or "step".
    polynomial : tuple of float
        nm for the powers 1, 2, 3 ... of the channel's value, times ``factor``; empty where the scale is straight.
    said : str
        One line: what the drive is and where its scale was taken from.
    doubts : tuple of str
    """

    channel: RawChannel | None
    factor: float
    unit: str
    said: str
    doubts: tuple[str, ...] = ()
    polynomial: tuple[float, ...] = ()

    def with_channel(self, channel: RawChannel) -> DriveAxis:
        """Return the same axis of another channel."""
        other = object.__new__(DriveAxis)
        other.__dict__.update(self.__dict__, channel=channel)
        return other

    def values(self, recording: Recording, start: int, stop: int) -> npt.NDArray[np.float64]:
        """(stop - start,) float64, drive in ``unit`` over flat samples; only where there is a channel."""
        assert self.channel is not None
        values = recording.values(self.channel, start, stop)
        if self.polynomial:
            values = values * np.polynomial.polynomial.polyval(values, self.polynomial)
        return values if self.factor == 1.0 else values * self.factor


def _stated(recording: Recording, settings: CalibrationSettings, name: str) -> tuple[float, str] | None:
    given = getattr(settings, name)
    if given is not None:
        return float(given), "recipe"
    value = recording.metadata.get(name)
    if isinstance(value, int | float) and not isinstance(value, bool) and value > 0:
        return float(value), "recording"
    column = recording.table.get(name)
    if column is not None and column.dtype.kind in "fiu" and len(np.unique(column)) == 1 and column[0] > 0:
        return float(column[0]), "recording"
    return None


def sample_interval(recording: Recording, settings: CalibrationSettings) -> tuple[float, str]:
    """Return (seconds from sample to sample, where it was taken from); NaN where it is not known."""
    rate = _stated(recording, settings, "sampling_hertz")
    if rate is not None and rate[1] == "recipe":
        return 1.0 / rate[0], "recipe"
    shown = _interval_by_time(recording)
    if shown is not None:
        return shown
    if rate is not None:
        return 1.0 / rate[0], rate[1]
    return float("nan"), "not known"


def _interval_by_time(recording: Recording) -> tuple[float, str] | None:
    """Return (seconds from sample to sample, whence) as a channel of the time shows it."""
    time = recording.channel("time")
    if time is None or recording.samples < 2 or not time.unit:
        return None
    last = min(int(recording.offsets[1]), 2000)
    steps = np.diff(recording.values(time, 0, last)) * unit_factor(time.unit, "s")
    steps = steps[np.isfinite(steps) & (steps > 0)]
    return (float(np.median(steps)), f"time channel '{time.name}'") if len(steps) else None


def interval_doubts(recording: Recording, settings: CalibrationSettings) -> tuple[str, ...]:
    """Return in words where a stated sampling rate and the recorded time contradict each other."""
    rate, shown = _stated(recording, settings, "sampling_hertz"), _interval_by_time(recording)
    if rate is None or shown is None or abs(rate[0] * shown[0] - 1.0) <= SAME_RATE:
        return ()
    used = "the stated rate" if rate[1] == "recipe" else "the recorded time"
    return (
        f"the {shown[1]} shows {1 / shown[0]:.4g} samples a second, {rate[0]:.4g} are stated ({rate[1]}), a factor "
        f"{max(rate[0] * shown[0], 1 / (rate[0] * shown[0])):.3g} apart: {used} is used (calibration.sampling_hertz)",
    )


def drive_of(recording: Recording, settings: CalibrationSettings, pull_sign: float) -> DriveAxis:
    """Return the drive axis: displacement, piezo volts, time, or samples counted.

    Parameters
    ----------
    recording : Recording
        With roles settled.
    settings : CalibrationSettings
    pull_sign : float
        +1 or -1: direction of the piezo in a pull, so that displacement grows while the contact is stretched.
    """
    displacement = recording.channel("displacement")
    if displacement is not None:
        return _displacement(recording, displacement, pull_sign)
    piezo = recording.channel("piezo")
    if piezo is not None:
        return _piezo(recording, settings, piezo, pull_sign)
    return _timed(recording, settings)


def _displacement(recording: Recording, channel: RawChannel, sign: float) -> DriveAxis:
    turned = "; falls while the contact is stretched, so its sign is turned" if sign < 0 else ""
    if channel.unit:
        factor = unit_factor(channel.unit, "nm", f"{recording.source.name}, '{channel.name}'")
        return DriveAxis(channel, sign * factor, "nm", f"displacement from '{channel.name}' in {channel.unit}{turned}")
    first, last = 0, int(recording.offsets[1])
    values = recording.values(channel, first, last)
    span = float(np.nanmax(values) - np.nanmin(values)) if len(values) else 0.0
    if PLAUSIBLE_NM[0] <= span <= PLAUSIBLE_NM[1]:
        doubt = f"the unit of '{channel.name}' is not stated: taken as nm, as its span of {span:.3g} allows"
        return DriveAxis(channel, sign, "nm", f"displacement from '{channel.name}'{turned}", (doubt,))
    doubt = (
        f"the unit of '{channel.name}' is not stated, and its span of {span:.3g} is not like nm: left in its own unit"
    )
    return DriveAxis(channel, sign, "own unit", f"drive from '{channel.name}'", (doubt,))


def _piezo(recording: Recording, settings: CalibrationSettings, channel: RawChannel, sign: float) -> DriveAxis:
    volts = unit_factor(channel.unit or "V", "V", f"{recording.source.name}, '{channel.name}'")
    if settings.nm_polynomial:
        return _bent(recording, settings, channel, volts, sign)
    constant = _stated(recording, settings, "nm_per_volt")
    if constant is not None:
        said = f"displacement from '{channel.name}' at {constant[0]:g} nm/V ({constant[1]})"
        doubts = () if channel.unit else (f"the unit of '{channel.name}' is not stated: taken as V",)
        return DriveAxis(channel, sign * volts * constant[0], "nm", said, doubts)
    doubt = "nm per volt is not stated: the drive stays in volts (calibration.nm_per_volt)"
    return DriveAxis(channel, sign * volts, "V", f"piezo volts from '{channel.name}'", (doubt,))


def _bent(
    recording: Recording, settings: CalibrationSettings, channel: RawChannel, volts: float, sign: float
) -> DriveAxis:
    """Return the displacement by a polynomial of the piezo volts, with a doubt where it turns on the way."""
    powers = tuple(one * volts ** (power + 1) for power, one in enumerate(settings.nm_polynomial))
    looked = recording.values(channel, 0, min(recording.samples, LOOKED_SAMPLES))
    looked = looked[np.isfinite(looked)]
    doubts: tuple[str, ...] = ()
    if len(looked):
        slopes = np.polynomial.polynomial.polyval(
            np.linspace(looked.min(), looked.max(), 257), [one * (n + 1) for n, one in enumerate(powers)]
        )
        if not ((slopes > 0).all() or (slopes < 0).all()):
            doubts = ("the displacement polynomial turns within the range of the piezo (calibration.nm_polynomial)",)
    terms = " + ".join(f"{one:g} U^{power + 1}" for power, one in enumerate(settings.nm_polynomial))
    said = f"displacement from '{channel.name}' as {terms} nm (recipe)"
    return DriveAxis(channel, sign, "nm", said, doubts, powers)


def _timed(recording: Recording, settings: CalibrationSettings) -> DriveAxis:
    """Return the drive where neither displacement nor piezo were recorded."""
    speed, step = _stated(recording, settings, "nm_per_second"), _stated(recording, settings, "nm_per_sample")
    interval, origin = sample_interval(recording, settings)
    if step is not None and (step[1] == "recipe" or speed is None):
        return DriveAxis(None, step[0], "nm", f"displacement of {step[0]:g} nm a sample ({step[1]})")
    time = recording.channel("time")
    if time is not None and time.unit and settings.sampling_hertz is None:
        seconds = unit_factor(time.unit, "s", f"{recording.source.name}, '{time.name}'")
        if speed is not None:
            said = f"displacement from '{time.name}' at {speed[0]:g} nm/s ({speed[1]})"
            return DriveAxis(time, seconds * speed[0], "nm", said)
        doubt = "the stretching speed is not stated: the drive stays in seconds (calibration.nm_per_second)"
        return DriveAxis(time, seconds, "s", f"time from '{time.name}'", (doubt,))
    if np.isfinite(interval):
        if speed is not None:
            said = f"displacement at {speed[0]:g} nm/s ({speed[1]}), {1 / interval:g} samples a second ({origin})"
            return DriveAxis(None, speed[0] * interval, "nm", said)
        doubt = "the stretching speed is not stated: the drive stays in seconds (calibration.nm_per_second)"
        return DriveAxis(None, interval, "s", f"{1 / interval:g} samples a second ({origin})", (doubt,))
    doubt = "neither displacement, piezo, time nor a rate is stated: the drive counts samples"
    return DriveAxis(None, 1.0, "step", "samples counted", (doubt,))
