"""What there is to say of the constants of a calibration: doubts, what is missing, plain values for notes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.calibration.calibrate import AMPLIFIER_KINDS, Calibration
from meseta.intake.calibration.drive import interval_doubts
from meseta.intake.meaning.roles import DRIVE_ROLES, guess_role
from meseta.intake.meaning.units import unit_factor
from meseta.intake.recording import RawChannel, Recording
from meseta.recipe.calibration import CalibrationSettings

__all__ = ["DIRECT", "doubts_of", "missing", "no_signal", "plain_constants"]

DIRECT: Final = ("conductance", "log_conductance", "resistance")
"""Recorded quantities that somebody calibrated already; only the recipe may correct them."""
SAME_BIAS: Final = 0.02
LOOKED_SAMPLES: Final = 100_000


def doubts_of(recording: Recording, settings: CalibrationSettings, kind: str, channel: RawChannel) -> tuple[str, ...]:
    """Return what is taken for granted, or stated and not used, where this channel becomes conductance."""
    doubts: list[str] = []
    if kind == "conductance" and not channel.unit:
        doubts.append(f"the unit of '{channel.name}' is not stated: taken as G0")
    if kind == "log_conductance" and not channel.unit:
        doubts.append(f"the unit of '{channel.name}' is not stated: taken as log10 of G/G0")
    second = recording.channel("amplifier_high_gain") if kind == "linear" and channel.role == "amplifier" else None
    bias = recording.channel("bias") if kind not in DIRECT and settings.bias_volt is None else None
    in_volts = (channel if kind in AMPLIFIER_KINDS else None, second, bias)
    doubts += [f"the unit of '{one.name}' is not stated: taken as V" for one in in_volts if one and not one.unit]
    for name, words in (("series_resistance_ohm", "series"), ("source_resistance_ohm", "source")):
        stated = recording.metadata.get(name)
        if kind in DIRECT and stated and getattr(settings, name) is None:
            doubts.append(
                f"the file states a {words} resistance of {stated} ohm; it is not removed from a recorded "
                f"{channel.role} unless calibration.{name} says so"
            )
    resistor = recording.metadata.get("reference_resistance_ohm")
    if resistor and settings.reference_resistance_ohm is None:
        doubts.append(
            f"the file states a reference resistor of {resistor} ohm; it is not used unless "
            "calibration.reference_resistance_ohm says so"
        )
    without = [name for name in ("bias_divided_by", "reference_resistance_ohm") if getattr(settings, name)]
    if kind in DIRECT and without:
        doubts.append(f"calibration.{without[0]} has no effect on a recorded {channel.role}")
    doubts += _overruled(recording, settings, kind)
    return (*doubts, *_bias_doubts(recording, settings, kind), *interval_doubts(recording, settings))


def _overruled(recording: Recording, settings: CalibrationSettings, kind: str) -> list[str]:
    """Return in words which constants of the recipe contradict those that the recording states."""
    names = {
        "linear": ("bias_volt", "gain_volt_per_ampere", "high_gain_volt_per_ampere"),
        "logarithmic": ("bias_volt", "volt_per_decade", "reference_ampere"),
        "current": ("bias_volt",),
        "curve": ("bias_volt",),
    }.get(kind, ())
    drive = ("nm_per_volt",) if recording.channel("piezo") is not None else ()
    said = []
    for name in (*names, *drive):
        given, column = getattr(settings, name, None), recording.table.get(name)
        stated: Any = recording.metadata.get(name) if column is None else column
        values = np.asarray(stated if stated is not None else np.nan)
        values = values[np.isfinite(values)] if values.dtype.kind in "fiu" else np.empty(0)
        if given and len(values) and np.max(np.abs(values - given)) > SAME_BIAS * abs(given):
            shown = f"{values.min():.6g}" + (f" to {values.max():.6g}" if values.min() < values.max() else "")
            said.append(
                f"{name} is stated as {shown}, the recipe says {given:.6g} (calibration.{name}): the latter is used"
            )
    return said


def _bias_doubts(recording: Recording, settings: CalibrationSettings, kind: str) -> tuple[str, ...]:
    """Return in words where the bias of the recipe contradicts the recorded one."""
    channel = recording.channel("bias")
    if kind in DIRECT or settings.bias_volt is None or channel is None:
        return ()
    values = recording.values(channel, 0, min(recording.samples, LOOKED_SAMPLES)) * unit_factor(
        channel.unit or "V", "V"
    )
    values = values[np.isfinite(values)]
    shown = float(np.median(values)) if len(values) else settings.bias_volt
    if abs(shown - settings.bias_volt) <= SAME_BIAS * abs(settings.bias_volt):
        return ()
    return (
        f"the channel '{channel.name}' shows a bias of {shown:.4g} V, the recipe {settings.bias_volt:.4g} V "
        "(calibration.bias_volt): the latter is used; leave it unset to take the recorded one, with "
        "calibration.bias_divided_by where a divider follows it",
    )


def missing(recording: Recording, kind: str, channel: RawChannel, names: Sequence[str]) -> InputError:
    """Return the error that names all constants that neither recipe nor file states."""
    words = {
        "bias_volt": "the bias",
        "gain_volt_per_ampere": "the gain",
        "volt_per_decade": "the volts per decade",
        "reference_ampere": "the reference current",
        "high_gain_volt_per_ampere": "the gain of the second amplifier",
    }
    what = "a current was recorded" if kind == "current" else "amplifier volts were recorded"
    lacking = " and ".join(words.get(name, name) for name in names)
    settings = " and ".join(f"calibration.{name}" for name in names)
    return InputError(
        f"{what} ('{channel.name}'), but neither recipe nor file states {lacking}",
        recording.source.name,
        f"give {settings}, for example --set calibration.{names[0]}=...",
    )


def no_signal(recording: Recording) -> InputError:
    """Return the error for a recording of which no channel gives conductance."""
    names = [channel.name for channel in recording.channels]
    open_ones = [one for one in recording.channels if one.role in ("other", "voltage") and not _may_drive(one)]
    in_volts = [one.name for one in open_ones if one.unit.endswith("V")]
    last = open_ones[-1].name if open_ones else names[-1]
    likely, role, unit = (in_volts[-1], "amplifier", "V") if in_volts else (last, "conductance", "G0")
    shown = ", ".join(f"'{name}'" for name in names[:6]) + (" ..." if len(names) > 6 else "")
    return InputError(
        f"no channel is known to be conductance, current or amplifier volts among {shown}",
        recording.source.name,
        f'say what it is: --set intake.channels."{likely}"=\'{{role = "{role}", unit = "{unit}"}}\'',
    )


def _may_drive(channel: RawChannel) -> bool:
    """Return whether an attribute speaks of the drive."""
    words = [str(value) for value in channel.attributes.values() if isinstance(value, str)]
    return any(
        guess_role(word).role in DRIVE_ROLES for text in words for word in (text, *text.split()) if len(word) > 1
    )


def plain_constants(calibration: Calibration) -> dict[str, Any]:
    """Return the constants as plain values with their origin, for notes and the file check."""
    found: dict[str, Any] = {}
    for name, (value, origin) in calibration.constants.items():
        array = np.asarray(value)
        plain = float(array) if array.ndim == 0 else [float(array.min()), float(array.max())]
        found[name] = {"value": plain, "from": origin}
    if calibration.curve is not None:
        volt = calibration.curve.volt
        found["amplifier_curve"] = {
            "value": f"{len(volt)} points from {volt[0]:g} to {volt[-1]:g} V",
            "from": "recipe",
        }
    if calibration.overlap is not None:
        origin = "fitted in the overlap" + (", used" if calibration.is_scaled_by_overlap else ", not used")
        for name in ("ratio", "ratio_error", "offset_ampere"):
            found[f"overlap_{name}"] = {"value": getattr(calibration.overlap, name), "from": origin}
    return found
