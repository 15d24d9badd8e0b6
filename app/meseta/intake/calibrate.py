"""From recorded channels to conductance in G0 and displacement in nm.

A setting of the recipe wins over what the file states of a piece, then of the file.  Nothing that changes a number is
assumed: where amplifier volts were recorded and neither states gain or bias, one error names the settings to give.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.errors import InputError
from meseta.intake.recording import RawChannel, Recording
from meseta.intake.units import parse_unit, unit_factor
from meseta.quantities import G0_SIEMENS
from meseta.recipe.calibration import CalibrationSettings
from meseta.traces import Quality

__all__ = ["Calibrated", "Calibration", "calibration_of"]

Floats = npt.NDArray[np.float64]
Value = float | Floats
SATURATED_SHARE: Final = 0.99
CROSSOVER_SHARE: Final = 0.9
"""The high-gain channel is used up to this share of its full scale."""


@dataclass(frozen=True)
class Calibrated:
    """Conductance of a range of samples, and the quality bits where any sample is not trusted."""

    conductance: npt.NDArray[np.float32]
    quality: npt.NDArray[np.uint8] | None


@dataclass(frozen=True)
class Calibration:
    """How one recording becomes conductance.

    Attributes
    ----------
    kind : str
        What was recorded: "conductance", "log_conductance", "current", "resistance", "linear", "logarithmic".
    channel : RawChannel
        The channel that conductance comes from; ``second`` is the high-gain one of a two-gain recording.
    constants : mapping
        Constant -> (value or (pieces,) values, where it was taken from).
    """

    kind: str
    channel: RawChannel
    second: RawChannel | None
    bias_channel: RawChannel | None
    constants: dict[str, tuple[Value, str]] = field(default_factory=dict)
    doubts: tuple[str, ...] = ()

    def constant(self, name: str, unknown: float = 0.0) -> Value:
        """Return a constant: one number, or one a piece."""
        return self.constants[name][0] if name in self.constants else unknown

    def apply(self, recording: Recording, start: int, stop: int) -> Calibrated:
        """Return the conductance over flat samples ``start`` to ``stop``."""
        if self._is_plain():
            stored = recording.stored(self.channel, start, stop)
            return Calibrated(np.asarray(stored, np.float32), None)
        spread = _Spread(recording, start, stop)
        measured, quality = self._measured(recording, spread)
        resistance = spread.of(self.constant("series_resistance_ohm"))
        if np.any(resistance):
            measured = _without_series(measured, resistance)
        with np.errstate(over="ignore"):  # what float32 cannot hold becomes infinite, as it is in the recording
            return Calibrated(measured.astype(np.float32), quality)

    def apply_into(self, recording: Recording, start: int, target: npt.NDArray[np.float32]) -> bool:
        """Fill ``target`` with recorded conductance from flat sample ``start`` on, where no number changes.

        Returns
        -------
        bool
            False where the samples need calibrating (or their reader has no way to fill an array): nothing was done.
        """
        read_into = getattr(self.channel.samples, "read_into", None)
        return bool(read_into and self._is_plain() and not self.channel.shared and read_into(start, target))

    def _is_plain(self) -> bool:
        channel = self.channel
        return (
            self.kind == "conductance"
            and channel.scale == 1.0
            and channel.offset == 0.0
            and _conductance_factor(channel.unit) == 1.0
            and not np.any(self.constant("series_resistance_ohm"))
        )

    def _measured(self, recording: Recording, spread: _Spread) -> tuple[Floats, npt.NDArray[np.uint8] | None]:
        values = recording.values(self.channel, spread.start, spread.stop)
        if self.kind == "conductance":
            return values * _conductance_factor(self.channel.unit), None
        if self.kind == "log_conductance":
            return _power(values), None
        if self.kind == "resistance":
            ohm = values * unit_factor(self.channel.unit, "ohm")
            with np.errstate(divide="ignore", invalid="ignore"):
                return np.where(ohm > 0, 1.0 / (ohm * G0_SIEMENS), np.nan), None
        current, quality = self._current(recording, values, spread)
        voltage = self._voltage(recording, spread)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(voltage == 0, np.nan, current / (voltage * G0_SIEMENS)), quality

    def _voltage(self, recording: Recording, spread: _Spread) -> Value:
        if self.bias_channel is not None:
            bias: Value = recording.values(self.bias_channel, spread.start, spread.stop)
            bias = bias * unit_factor(self.bias_channel.unit or "V", "V")
        else:
            bias = spread.of(self.constant("bias_volt"))
        return bias - spread.of(self.constant("bias_offset_volt"))

    def _current(
        self, recording: Recording, values: Floats, spread: _Spread
    ) -> tuple[Floats, npt.NDArray[np.uint8] | None]:
        if self.kind == "current":
            return values * unit_factor(self.channel.unit, "A"), None
        volts = values * unit_factor(self.channel.unit or "V", "V")
        quality = self._saturated(volts, spread)
        shifted = volts - spread.of(self.constant("offset_volt"))
        if self.kind == "logarithmic":
            decades = shifted / spread.of(self.constant("volt_per_decade"))
            return spread.of(self.constant("reference_ampere")) * _power(decades), quality
        current = shifted / spread.of(self.constant("gain_volt_per_ampere"))
        if self.second is None:
            return current, quality
        return self._stitched(recording, current, quality, spread)

    def _saturated(self, volts: Floats, spread: _Spread) -> npt.NDArray[np.uint8] | None:
        if "full_scale_volt" not in self.constants:
            return None
        beyond = np.abs(volts) >= SATURATED_SHARE * spread.of(self.constant("full_scale_volt"))
        return beyond.astype(np.uint8) * np.uint8(Quality.SATURATED) if beyond.any() else None

    def _stitched(
        self, recording: Recording, low: Floats, quality: npt.NDArray[np.uint8] | None, spread: _Spread
    ) -> tuple[Floats, npt.NDArray[np.uint8]]:
        """Return the current of the high-gain channel where it is within its range, else of the other."""
        assert self.second is not None
        volts = recording.values(self.second, spread.start, spread.stop) * unit_factor(self.second.unit or "V", "V")
        high = (volts - spread.of(self.constant("high_gain_offset_volt"))) / spread.of(
            self.constant("high_gain_volt_per_ampere")
        )
        limit = CROSSOVER_SHARE * spread.of(self.constant("full_scale_volt", 10.0))
        use = np.abs(volts) < limit
        bits = np.where(use, 0, 0 if quality is None else quality).astype(np.uint8)
        seam = np.flatnonzero(np.diff(use.astype(np.int8)))
        bits[seam] |= Quality.SEAM
        bits[seam + 1] |= Quality.SEAM
        return np.where(use, high, low), bits


class _Spread:
    """Spreads constants that differ from piece to piece over a range of flat samples."""

    def __init__(self, recording: Recording, start: int, stop: int) -> None:
        self.start, self.stop = start, stop
        self._recording = recording
        self._piece: npt.NDArray[np.int64] | None = None

    def of(self, value: Value) -> Value:
        if isinstance(value, float | int):
            return value
        if self._piece is None:
            flat = np.arange(self.start, self.stop)
            self._piece = np.searchsorted(self._recording.offsets, flat, side="right") - 1
        return np.asarray(value)[self._piece]


def _power(exponents: Floats) -> Floats:
    from meseta.intake.kernels import power_of_ten

    result: Floats = power_of_ten(np.ascontiguousarray(exponents))
    return result


def _without_series(measured: Floats, resistance: Value) -> Floats:
    """Return g / (1 - rho g), rho = R_s G0; NaN at or above the ceiling 1/rho."""
    rest = 1.0 - np.asarray(resistance) * G0_SIEMENS * measured
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(rest > 0, measured / rest, np.nan)


def _conductance_factor(unit: str) -> float:
    """Return the number that turns a conductance into G0; a bare number counts in G0."""
    if not unit or parse_unit(unit).dimension == "1":
        return parse_unit(unit).factor if unit else 1.0
    return unit_factor(unit, "G0")


# -- finding the constants --------------------------------------------------------------------------------------------


def calibration_of(recording: Recording, settings: CalibrationSettings) -> Calibration:
    """Return how a recording becomes conductance.

    Raises
    ------
    InputError
        Where no channel gives conductance, or a constant that it needs is not stated; all missing settings are named.
    """
    where = recording.source.name
    found = _Finder(recording, settings)
    channel = recording.channel("conductance", "log_conductance")
    if channel is not None:
        return _direct(channel, found)
    channel = recording.channel("current")
    if channel is not None:
        if not channel.unit:
            raise InputError(
                f"the unit of the current '{channel.name}' is not stated",
                where,
                f'give intake.channels."{channel.name}" = {{role = "current", unit = "nA"}}',
            )
        return found.made("current", channel, ("bias_volt",))
    channel = recording.channel("amplifier", "amplifier_high_gain")
    if channel is not None and settings.amplifier != "none":
        kind = found.amplifier_kind(channel)
        second = recording.channel("amplifier_high_gain") if channel.role == "amplifier" and kind == "linear" else None
        needs = ["gain_volt_per_ampere"] if kind == "linear" else ["volt_per_decade", "reference_ampere"]
        if second is not None:
            needs.append("high_gain_volt_per_ampere")
        return found.made(kind, channel, (*needs, "bias_volt"), second)
    channel = recording.channel("resistance")
    if channel is not None:
        return found.made("resistance", channel, ())
    raise _no_signal(recording)


def _direct(channel: RawChannel, found: _Finder) -> Calibration:
    return found.made(channel.role, channel, ())


def _no_signal(recording: Recording) -> InputError:
    names = [channel.name for channel in recording.channels]
    in_volts = [one.name for one in recording.channels if one.role in ("other", "voltage") and one.unit.endswith("V")]
    likely, role, unit = (in_volts[-1], "amplifier", "V") if in_volts else (names[-1], "conductance", "G0")
    shown = ", ".join(f"'{name}'" for name in names[:6]) + (" ..." if len(names) > 6 else "")
    return InputError(
        f"no channel is known to be conductance, current or amplifier volts among {shown}",
        recording.source.name,
        f'say what it is: --set intake.channels."{likely}"=\'{{role = "{role}", unit = "{unit}"}}\'',
    )


_ROLE_LIMITS: Final = {"conductance": "series", "log_conductance": "series", "resistance": "series"}


class _Finder:
    """Looks constants up: in the recipe, then beside each piece, then in the file."""

    def __init__(self, recording: Recording, settings: CalibrationSettings) -> None:
        self._recording, self._settings = recording, settings

    def find(self, name: str) -> tuple[Value, str] | None:
        given = getattr(self._settings, name, None)
        if given is not None and not (name == "bias_offset_volt" and given == 0.0):
            return float(given), "recipe"
        column = self._recording.table.get(name)
        if column is not None and column.dtype.kind in "fiu" and np.isfinite(column).all():
            values = np.asarray(column, np.float64)
            same = len(values) > 0 and bool(np.all(values == values[0]))
            return (float(values[0]) if same else values), "recording, each trace"
        value = self._recording.metadata.get(name)
        if isinstance(value, int | float) and not isinstance(value, bool):
            return float(value), "recording"
        return None

    def amplifier_kind(self, channel: RawChannel) -> str:
        if self._settings.amplifier in ("linear", "logarithmic"):
            return self._settings.amplifier
        stated = str(channel.attributes.get("amplifier", self._recording.metadata.get("amplifier", ""))).lower()
        for kind in ("linear", "logarithmic"):
            if stated and (kind.startswith(stated) or stated.startswith(kind[:3])):
                return kind
        logarithmic, linear = self.find("volt_per_decade") is not None, self.find("gain_volt_per_ampere") is not None
        if logarithmic and not linear:
            return "logarithmic"
        if linear:
            return "linear"
        bias = "" if self.find("bias_volt") or self._recording.channel("bias") else " and calibration.bias_volt"
        raise InputError(
            f"amplifier volts were recorded ('{channel.name}'), but neither recipe nor file states the gain"
            + (" or the bias" if bias else ""),
            self._recording.source.name,
            "give calibration.gain_volt_per_ampere (or calibration.volt_per_decade and "
            f"calibration.reference_ampere){bias}",
        )

    def made(
        self, kind: str, channel: RawChannel, needs: Sequence[str], second: RawChannel | None = None
    ) -> Calibration:
        """Return the calibration with all constants found, or raise for those that are missing."""
        for one in (channel, second):
            if one is not None and one.unit:
                parse_unit(one.unit, f"{self._recording.source.name}, '{one.name}'")
        bias_channel = None if self._settings.bias_volt is not None else self._recording.channel("bias")
        constants, missing = {}, []
        for name in needs:
            if name == "bias_volt" and bias_channel is not None:
                continue
            value = self.find(name)
            if value is None or (name != "offset_volt" and not np.all(np.asarray(value[0]) != 0)):
                missing.append(name)
            else:
                constants[name] = value
        if missing:
            raise self._missing(kind, channel, missing)
        constants |= self._optional(kind)
        return Calibration(
            kind,
            channel,
            second,
            bias_channel if "bias_volt" in needs else None,
            constants,
            self._doubts(kind, channel),
        )

    def _optional(self, kind: str) -> dict[str, tuple[Value, str]]:
        names = ["series_resistance_ohm"]
        if kind in ("linear", "logarithmic"):
            names += ["offset_volt", "full_scale_volt", "high_gain_offset_volt", "bias_offset_volt"]
        elif kind == "current":
            names += ["bias_offset_volt"]
        found = {name: value for name in names if (value := self.find(name)) is not None}
        if kind in _ROLE_LIMITS and found.get("series_resistance_ohm", (0, ""))[1] != "recipe":
            found.pop("series_resistance_ohm", None)
        return found

    def _doubts(self, kind: str, channel: RawChannel) -> tuple[str, ...]:
        doubts = list(channel.doubts)
        if kind == "conductance" and not channel.unit:
            doubts.append(f"the unit of '{channel.name}' is not stated: taken as G0")
        stated = self._recording.metadata.get("series_resistance_ohm")
        if kind in _ROLE_LIMITS and stated and self._settings.series_resistance_ohm is None:
            doubts.append(
                f"the file states a series resistance of {stated} ohm; it is not removed from a recorded "
                f"{channel.role} unless calibration.series_resistance_ohm says so"
            )
        return tuple(doubts)

    def _missing(self, kind: str, channel: RawChannel, names: Sequence[str]) -> InputError:
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
            self._recording.source.name,
            f"give {settings}, for example --set calibration.{names[0]}=...",
        )


def plain_constants(calibration: Calibration) -> dict[str, Any]:
    """Return the constants as plain values with their origin, for notes and the file check."""
    found: dict[str, Any] = {}
    for name, (value, origin) in calibration.constants.items():
        array = np.asarray(value)
        plain = float(array) if array.ndim == 0 else [float(array.min()), float(array.max())]
        found[name] = {"value": plain, "from": origin}
    return found
