"""The constants of a calibration: looked up in the recipe, then beside each piece, then in the file.

Nothing that changes a number is assumed: where amplifier volts were recorded and neither recipe nor file states gain or
bias, one error names the settings to give.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from functools import partial

import numpy as np

from meseta.errors import InputError
from meseta.intake.calibration.calibrate import AMPLIFIER_KINDS, Calibration
from meseta.intake.calibration.constants_said import DIRECT, doubts_of, missing, no_signal
from meseta.intake.calibration.curve import curve_of
from meseta.intake.calibration.drive import sample_interval
from meseta.intake.calibration.mains import find_pickup
from meseta.intake.calibration.spread import Value
from meseta.intake.calibration.switching import Switching
from meseta.intake.calibration.two_gain import overlap_doubts, overlap_of
from meseta.intake.meaning.units import parse_unit
from meseta.intake.recording import RawChannel, Recording
from meseta.recipe.calibration import CalibrationSettings

__all__ = ["calibration_of"]


def calibration_of(recording: Recording, settings: CalibrationSettings) -> Calibration:
    """Return how a recording becomes conductance.

    Raises
    ------
    InputError
        Where no channel gives conductance, or a constant that it needs is not stated; all missing settings are named.
    """
    found = _Finder(recording, settings)
    channel = recording.channel("conductance", "log_conductance")
    if channel is not None:
        return found.made(channel.role, channel, ())
    channel = recording.channel("current")
    if channel is not None:
        if not channel.unit:
            raise InputError(
                f"the unit of the current '{channel.name}' is not stated",
                recording.source.name,
                f'give intake.channels."{channel.name}" = {{role = "current", unit = "nA"}}',
            )
        return found.made("current", channel, ("bias_volt",))
    channel = recording.channel("amplifier", "amplifier_high_gain")
    if channel is not None and settings.amplifier != "none":
        return _amplified(found, recording, channel)
    channel = recording.channel("resistance")
    if channel is not None:
        return found.made("resistance", channel, ())
    raise no_signal(recording)


def _amplified(found: _Finder, recording: Recording, channel: RawChannel) -> Calibration:
    """Return the calibration of amplifier volts."""
    kind = found.amplifier_kind(channel)
    second = recording.channel("amplifier_high_gain") if channel.role == "amplifier" and kind == "linear" else None
    second = None if found.settings.range_gains else second
    needs = {"logarithmic": ("volt_per_decade", "reference_ampere"), "linear": ("gain_volt_per_ampere",)}
    wanted = [*needs.get(kind, ()), *(("high_gain_volt_per_ampere",) if second is not None else ())]
    if found.settings.range_gains:
        wanted.remove("gain_volt_per_ampere") if "gain_volt_per_ampere" in wanted else None
    made = found.made(kind, channel, (*wanted, "bias_volt"), second)
    if second is None:
        return made
    overlap = overlap_of(recording, made)
    is_scaled = found.settings.gain_ratio_from_overlap and (overlap is None or overlap.ratio > 0)
    made = replace(made, overlap=overlap, is_scaled_by_overlap=is_scaled)
    return replace(made, doubts=(*made.doubts, *overlap_doubts(made)))


class _Finder:
    """Looks constants up: in the recipe, then beside each piece, then in the file."""

    def __init__(self, recording: Recording, settings: CalibrationSettings) -> None:
        self._recording, self.settings = recording, settings

    def find(self, name: str) -> tuple[Value, str] | None:
        given = getattr(self.settings, name, None)
        if given is not None and not (name == "bias_offset_volt" and given == 0.0):
            return float(given), "recipe"
        return self._recorded(name)

    def _recorded(self, name: str) -> tuple[Value, str] | None:
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
        """Return what the amplifier is: as told by a curve, in words, or by the constants that are stated."""
        if self.settings.amplifier_curve:
            return "curve"
        if self.settings.amplifier in ("linear", "logarithmic"):
            return self.settings.amplifier
        stated = str(channel.attributes.get("amplifier", self._recording.metadata.get("amplifier", ""))).lower()
        for kind in ("linear", "logarithmic"):
            if stated and (kind.startswith(stated) or stated.startswith(kind[:3])):
                return kind
        logarithmic = self.find("volt_per_decade") is not None
        linear = self.gain() is not None or bool(self.settings.range_gains)
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

    def gain(self) -> tuple[Value, str] | None:
        """Return the gain in V/A: as stated, or of the reference resistor and the amplifier behind it.

        Raises
        ------
        InputError
            Where the recipe states both.
        """
        told, resistor = self.settings.gain_volt_per_ampere, self.settings.reference_resistance_ohm
        if told is not None and resistor is not None:
            raise InputError(
                "both a gain in V/A and a reference resistor are given",
                "calibration",
                "leave calibration.gain_volt_per_ampere unset, or give what stands in series with the junction as "
                "calibration.series_resistance_ohm",
            )
        if resistor is not None:
            return resistor * self.settings.voltage_gain, "reference resistor times voltage gain"
        return self.find("gain_volt_per_ampere")

    def made(
        self, kind: str, channel: RawChannel, needs: Sequence[str], second: RawChannel | None = None
    ) -> Calibration:
        """Return the calibration with all constants found, or raise for those that are missing."""
        for one in (channel, second):
            if one is not None and one.unit:
                parse_unit(one.unit, f"{self._recording.source.name}, '{one.name}'")
        bias_channel = None if self.settings.bias_volt is not None else self._recording.channel("bias")
        constants, lacking = {}, []
        for name in needs:
            if name == "bias_volt" and bias_channel is not None:
                continue
            value = self.gain() if name == "gain_volt_per_ampere" else self.find(name)
            if value is None or not np.all(np.asarray(value[0]) != 0):
                lacking.append(name)
            else:
                constants[name] = value
        if lacking:
            raise missing(self._recording, kind, channel, lacking)
        made = Calibration(
            kind,
            channel,
            second,
            bias_channel if "bias_volt" in needs else None,
            constants | self._optional(kind) | self._errors(),
            doubts_of(self._recording, self.settings, kind, channel),
        )
        return self._with_amplifier(made) if kind in AMPLIFIER_KINDS else self._cleaned(made)

    def _optional(self, kind: str) -> dict[str, tuple[Value, str]]:
        """Return the constants that are used where they are stated."""
        names = ["series_resistance_ohm", "source_resistance_ohm"]
        if kind not in DIRECT:
            names += ["bias_offset_volt", "bias_divided_by", "reference_resistance_ohm"]
        if kind in AMPLIFIER_KINDS:
            names += ["offset_volt", "full_scale_volt", "high_gain_offset_volt"]
        found = {name: value for name in names if (value := self.find(name)) is not None}
        from_recipe = {"reference_resistance_ohm"}
        from_recipe |= {"series_resistance_ohm", "source_resistance_ohm"} if kind in DIRECT else set()
        from_recipe |= {"offset_volt"} if kind == "curve" else set()
        return {name: value for name, value in found.items() if name not in from_recipe or value[1] == "recipe"}

    def _errors(self) -> dict[str, tuple[Value, str]]:
        """Return the errors that the recording states; those of the recipe change no trace and are not part of it."""
        return {name: value for name in self.settings.errors if (value := self._recorded(name)) is not None}

    def _with_amplifier(self, made: Calibration) -> Calibration:
        """Return the calibration with what the recipe says of curve, polarity, switches, slew limit and mains."""
        settings, doubts = self.settings, list(made.doubts)
        codes = self._recording.channel("range_code") if settings.range_gains and made.kind == "linear" else None
        if settings.range_gains and made.kind == "linear" and codes is None:
            raise InputError(
                "calibration.range_gains is given, but no channel has the role range_code",
                self._recording.source.name,
                'name it: --set intake.channels."..."=\'{role = "range_code"}\'',
            )
        interval = sample_interval(self._recording, settings)[0]
        timed = settings.dead_time_second > 0 or settings.slew_volt_per_second is not None
        if timed and not np.isfinite(interval):
            raise InputError(
                "a dead time or a slew limit is given, but no sampling rate",
                self._recording.source.name,
                "give calibration.sampling_hertz",
            )
        back = settings.crossover_back_share
        return self._cleaned(
            replace(
                made,
                doubts=tuple(doubts),
                curve=curve_of(settings.amplifier_curve) if made.kind == "curve" else None,
                both_polarities=settings.log_polarity == "both",
                switching=Switching(
                    settings.crossover_share,
                    settings.crossover_share if back is None else back,
                    int(np.ceil(settings.dead_time_second / interval - 1e-9)) if settings.dead_time_second else 0,
                    {int(code): gain for code, gain in settings.range_gains.items()},
                ),
                range_channel=codes,
                slew_volt=0.0 if settings.slew_volt_per_second is None else settings.slew_volt_per_second * interval,
            )
        )

    def _cleaned(self, made: Calibration) -> Calibration:
        """Return the calibration with the mains pickup of its channels, where that is to be removed."""
        if not self.settings.remove_mains:
            return made
        if made.kind not in ("linear", "current", "conductance") or made.range_channel is not None:
            text = "mains pickup is not removed: what was recorded is not in proportion to the current"
            return replace(made, doubts=(*made.doubts, text))
        interval, found, doubts = sample_interval(self._recording, self.settings)[0], {}, []
        for channel in made.channels():
            unit = channel.unit or ("V" if made.kind == "linear" else "G0")
            pickup = find_pickup(self._recording, partial(self._recording.values, channel), unit, interval)
            if pickup is None:
                doubts.append(f"mains pickup is not removed from '{channel.name}': no floor, or no rate, to see it by")
            elif not pickup.is_significant:
                doubts.append(f"no mains pickup is seen in '{channel.name}': nothing is removed")
            else:
                found[channel.name] = pickup
                doubts.append(f"mains pickup is removed from '{channel.name}': {pickup.text()}")
        return replace(made, pickup=found, doubts=(*made.doubts, *doubts))
