"""From recorded channels to conductance in G0: what one calibration does to a range of samples.

How its constants are found is said in :mod:`meseta.intake.calibration.constants`, what amplifiers do in
:mod:`meseta.intake.calibration.amplifiers`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.intake.calibration.amplifiers import current_of, power_of_ten
from meseta.intake.calibration.curve import Curve
from meseta.intake.calibration.mains import Pickup
from meseta.intake.calibration.spread import Spread, Value
from meseta.intake.calibration.switching import Overlap, Switching
from meseta.intake.meaning.units import parse_unit, unit_factor
from meseta.intake.recording import RawChannel, Recording
from meseta.quantities import G0_SIEMENS

__all__ = ["AMPLIFIER_KINDS", "IN_SERIES", "Calibrated", "Calibration", "without_series"]

Floats = npt.NDArray[np.float64]
Bits = npt.NDArray[np.uint8]
AMPLIFIER_KINDS: Final = ("linear", "logarithmic", "curve")
IN_SERIES: Final = ("series_resistance_ohm", "source_resistance_ohm", "reference_resistance_ohm")
"""Resistances that share the bias with the junction: three names, one current through all of them."""


@dataclass(frozen=True)
class Calibrated:
    """Conductance of a range of samples, and the quality bits where any sample is not trusted."""

    conductance: npt.NDArray[np.float32]
    quality: Bits | None


@dataclass(frozen=True)
class Calibration:
    """How one recording becomes conductance.

    Attributes
    ----------
    kind : str
        What was recorded: "conductance", "log_conductance", "current", "resistance", "linear", "logarithmic", "curve".
    channel : RawChannel
        The channel that conductance comes from; ``second`` is the high-gain one of a two-gain recording,
        ``range_channel`` the code of an amplifier that switches ranges.
    constants : mapping
        Constant -> (value or (pieces,) values, where it was taken from).
    both_polarities : bool
        Whether a logarithmic amplifier shows the sign of the current.
    slew_volt : float
        Fastest change of the output from sample to sample; 0 where none is stated.
    overlap : Overlap or None
        What two amplifiers read in their common range; the second is scaled by it where ``is_scaled_by_overlap``.
    pickup : mapping
        Name of a channel -> mains pickup that is subtracted from it.
    """

    kind: str
    channel: RawChannel
    second: RawChannel | None
    bias_channel: RawChannel | None
    constants: dict[str, tuple[Value, str]] = field(default_factory=dict)
    doubts: tuple[str, ...] = ()
    curve: Curve | None = None
    both_polarities: bool = False
    switching: Switching = field(default_factory=Switching)
    range_channel: RawChannel | None = None
    slew_volt: float = 0.0
    overlap: Overlap | None = None
    is_scaled_by_overlap: bool = False
    pickup: Mapping[str, Pickup] = field(default_factory=dict)

    def constant(self, name: str, unknown: float = 0.0) -> Value:
        """Return a constant: one number, or one a piece."""
        return self.constants[name][0] if name in self.constants else unknown

    @property
    def in_series_ohm(self) -> Value:
        """Everything in series with the junction, whose drop is taken off the bias: one number, or one a piece."""
        return sum((self.constant(name) for name in IN_SERIES[1:]), start=self.constant(IN_SERIES[0]))

    @property
    def bias_at_junction_volt(self) -> Value:
        """The stated bias behind its divider, less its offset: one number, or one a piece; 0 where it is recorded."""
        if "bias_volt" not in self.constants:
            return 0.0
        return self.constant("bias_volt") / self.constant("bias_divided_by", 1.0) - self.constant("bias_offset_volt")

    @property
    def has_quality(self) -> bool:
        """Whether any sample may be flagged."""
        switched = self.second is not None or self.range_channel is not None
        return switched or self.curve is not None or self.slew_volt > 0 or "full_scale_volt" in self.constants

    def channels(self) -> tuple[RawChannel, ...]:
        """Return the channels that conductance comes from."""
        return tuple(one for one in (self.channel, self.second, self.range_channel) if one is not None)

    def without_samples(self) -> Calibration:
        """Return the calibration with its channels emptied, for when all samples are loaded."""
        names = ("channel", "second", "bias_channel", "range_channel")
        channels = {name: one for name in names if (one := getattr(self, name)) is not None}
        emptied = object.__new__(Calibration)
        emptied.__dict__.update(self.__dict__, pickup={})
        emptied.__dict__.update({name: one.without_samples() for name, one in channels.items()})
        return emptied

    def recorded(self, recording: Recording, channel: RawChannel, start: int, stop: int) -> Floats:
        """(stop - start,) float64, a channel in its unit, less the mains pickup where that is removed."""
        values = recording.values(channel, start, stop)
        if channel.name in self.pickup:
            values = np.array(values)
            self.pickup[channel.name].subtract(values, start)
        return values

    def apply(self, recording: Recording, start: int, stop: int) -> Calibrated:
        """Return the conductance over flat samples ``start`` to ``stop``."""
        if self._is_plain:
            stored = recording.stored(self.channel, start, stop)
            return Calibrated(np.asarray(stored, np.float32), None)
        spread = Spread(recording, start, stop)
        measured, quality = self._measured(spread)
        resistance = spread.of(self.in_series_ohm)
        if np.any(resistance):
            measured = without_series(measured, resistance)
        with np.errstate(over="ignore"):  # what float32 cannot hold becomes infinite, as it is in the recording
            return Calibrated(measured.astype(np.float32), quality)

    def apply_into(self, recording: Recording, start: int, target: npt.NDArray[np.float32]) -> bool:
        """Fill ``target`` with conductance from flat sample ``start`` on, in one go, where no sample is flagged.

        Returns
        -------
        bool
            False where the calibration takes more than numbers that hold for all samples: nothing was done.
        """
        if self._is_plain and not self.channel.shared:
            read_into = getattr(self.channel.samples, "read_into", None)
            if read_into and read_into(start, target):
                return True
        steps = self._steps
        if steps is None:
            return False
        from meseta.intake.calibration.stored_kernels import SCALED_TYPES, scale_into

        stored = recording.stored(self.channel, start, start + len(target))
        if self._is_plain:
            np.copyto(target, stored, casting="unsafe")
            return True
        if stored.dtype.name not in SCALED_TYPES or not stored.dtype.isnative:
            return False
        scale_into(stored, self.channel.scale, self.channel.offset, *steps, target)
        return True

    @cached_property
    def _steps(self) -> tuple[float, float, float, float] | None:
        """Factor, shift and two divisors that turn a channel in its unit into G0; None where it takes more."""
        if self.has_quality or self.pickup or self.bias_channel is not None or np.any(self.in_series_ohm):
            return None
        if self.kind == "conductance":
            return conductance_factor(self.channel.unit), 0.0, 1.0, 1.0
        voltage = self.bias_at_junction_volt
        if self.kind not in ("current", "linear") or not isinstance(voltage, float | int) or voltage == 0:
            return None
        if self.kind == "current":
            return unit_factor(self.channel.unit, "A"), 0.0, 1.0, voltage * G0_SIEMENS
        shift, gain = self.constant("offset_volt"), self.constant("gain_volt_per_ampere")
        if not isinstance(shift, float | int) or not isinstance(gain, float | int):
            return None
        return unit_factor(self.channel.unit or "V", "V"), shift, gain, voltage * G0_SIEMENS

    @cached_property
    def _is_plain(self) -> bool:
        channel = self.channel
        return (
            self.kind == "conductance"
            and channel.scale == 1.0
            and channel.offset == 0.0
            and conductance_factor(channel.unit) == 1.0
            and not np.any(self.in_series_ohm)
            and not self.pickup
        )

    def _measured(self, spread: Spread) -> tuple[Floats, Bits | None]:
        """Return the conductance in G0 before anything in series is taken off."""
        recording, channel = spread.recording, self.channel
        if self.kind in AMPLIFIER_KINDS:
            current, quality = current_of(self, spread)
        else:
            values, quality = self.recorded(recording, channel, spread.start, spread.stop), None
            if self.kind == "conductance":
                return values * conductance_factor(channel.unit), None
            if self.kind == "log_conductance":
                return power_of_ten(values) * parse_unit(channel.unit or "dec").factor, None
            if self.kind == "resistance":
                ohm = values * unit_factor(channel.unit, "ohm")
                with np.errstate(divide="ignore", invalid="ignore"):
                    return np.where(ohm > 0, 1.0 / (ohm * G0_SIEMENS), np.nan), None
            current = values * unit_factor(channel.unit, "A")
        voltage = self._voltage(spread)
        if self.kind == "logarithmic" and not self.both_polarities:
            voltage = np.abs(voltage)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(voltage == 0, np.nan, current / (voltage * G0_SIEMENS)), quality

    def _voltage(self, spread: Spread) -> Value:
        """Return the bias at the junction and what is in series with it."""
        channel = self.bias_channel
        if channel is None:
            return spread.of(self.bias_at_junction_volt)
        bias = spread.recording.values(channel, spread.start, spread.stop) * unit_factor(channel.unit or "V", "V")
        divided = bias / spread.of(self.constant("bias_divided_by", 1.0))
        return divided - spread.of(self.constant("bias_offset_volt"))


def without_series(measured: Floats, resistance: Value) -> Floats:
    """Return g / (1 - rho g), rho = R G0; NaN at or above the ceiling 1/rho."""
    rest = 1.0 - np.asarray(resistance) * G0_SIEMENS * measured
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(rest > 0, measured / rest, np.nan)


def conductance_factor(unit: str) -> float:
    """Return the number that turns a conductance into G0; a bare number counts in G0."""
    if not unit or parse_unit(unit).dimension == "1":
        return parse_unit(unit).factor if unit else 1.0
    return unit_factor(unit, "G0")
