"""Section ``[calibration]``: what the laboratory knows of its amplifier, bias and piezo."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Literal

from pydantic import field_validator

from meseta.recipe.fields import Section, setting

__all__ = ["CalibrationSettings"]

_RECORDING = "taken from the recording where it states it"


class CalibrationSettings(Section):
    """Volts to conductance in G0 and to displacement in nm.  A setting given here wins over the recording's own."""

    ordered = (("crossover_back_share", "crossover_share"),)
    errors = (
        "gain_relative_error",
        "bias_relative_error",
        "offset_error_ampere",
        "series_resistance_error_ohm",
        "displacement_relative_error",
    )

    bias_volt: float | None = setting(
        None, "Bias", "Bias over the junction and what is in series with it.", unit="V", unset=_RECORDING
    )
    bias_offset_volt: float = setting(
        0.0, "Bias offset", "Voltage at the junction with the bias at zero; taken off the bias.", unit="V"
    )
    bias_divided_by: float | None = setting(
        None,
        "Bias divider",
        "What a voltage divider between source and junction divides the stated or recorded bias by; 1 without one.",
        unset="taken from the recording where it states it, else 1",
        gt=0,
    )
    amplifier: Literal["linear", "logarithmic", "none"] | None = setting(
        None,
        "Amplifier",
        "What the amplifier channel is; 'none' where no amplifier volts were recorded.",
        unset=_RECORDING,
    )
    gain_volt_per_ampere: float | None = setting(
        None,
        "Gain",
        "Gain of the linear amplifier; negative for an inverting one.",
        unit="V/A",
        unset=_RECORDING,
    )
    offset_volt: float | None = setting(
        None,
        "Amplifier offset",
        "Output of the amplifier at zero current.",
        unit="V",
        unset="taken from the recording, else zero",
    )
    volt_per_decade: float | None = setting(
        None,
        "Slope of the logarithmic amplifier",
        "Output volts per decade of current.",
        unit="V/decade",
        unset=_RECORDING,
    )
    reference_ampere: float | None = setting(
        None,
        "Reference current",
        "Current at which the logarithmic amplifier gives zero volts.",
        unit="A",
        unset=_RECORDING,
        gt=0,
    )
    log_polarity: Literal["size", "both"] = setting(
        "size",
        "Polarity of the logarithmic amplifier",
        "'size': it shows the size of the current, whose sign is that of the bias; 'both': volts below zero are "
        "currents below zero, I = I_ref (10^(U/s) - 10^(-U/s)).",
    )
    amplifier_curve: list[tuple[float, float]] = setting(
        None,
        "Measured amplifier curve",
        "Pairs of volts and ampere of an amplifier of any law, used instead of gain or volts per decade; readings "
        "beyond its ends are flagged, never extrapolated. A file name given in a recipe file or with --set is read "
        "once, and its numbers are kept.",
        unit="V, A",
        factory=list,
    )
    full_scale_volt: float | None = setting(
        None,
        "Full scale",
        "Samples beyond 99 % of this are marked saturated, left out and counted.",
        unit="V",
        unset=_RECORDING,
        gt=0,
    )
    series_resistance_ohm: float | None = setting(
        None,
        "Series resistance",
        "Known resistance in series with the junction, removed from every sample. A fitted "
        "one is never fed back by itself.",
        unit="ohm",
        unset="taken from the recording where it states it, else zero",
        ge=0,
    )
    source_resistance_ohm: float | None = setting(
        None,
        "Source resistance",
        "Output resistance of the bias source with its divider, R1 R2/(R1 + R2); its drop is taken off the bias.",
        unit="ohm",
        unset="taken from the recording where it states it, else zero",
        ge=0,
    )
    reference_resistance_ohm: float | None = setting(
        None,
        "Reference resistor",
        "Resistor in series with the junction over which the amplifier channel is measured: I = U/(voltage gain R), "
        "and its drop is taken off the bias. Used instead of a gain in V/A.",
        unit="ohm",
        unset="not used",
        gt=0,
    )
    voltage_gain: float = setting(
        1.0, "Voltage gain", "Of the amplifier behind the reference resistor; negative for an inverting one."
    )
    high_gain_volt_per_ampere: float | None = setting(
        None,
        "Gain of the second amplifier",
        "Gain of the channel with role 'amplifier_high_gain'.",
        unit="V/A",
        unset=_RECORDING,
    )
    high_gain_offset_volt: float | None = setting(
        None,
        "Offset of the second amplifier",
        "Output of the second amplifier at zero current.",
        unit="V",
        unset="taken from the recording, else zero",
    )
    crossover_share: float = setting(
        0.9,
        "Leave the high gain at",
        "Two gains: the first amplifier takes over where the second reaches this share of its full scale.",
        gt=0,
        le=1,
    )
    crossover_back_share: float | None = setting(
        None,
        "Return to the high gain at",
        "Two gains: the second amplifier takes over again where it has fallen below this share of its full scale.",
        unset="the share at which it is left: no hysteresis",
        gt=0,
        le=1,
    )
    dead_time_second: float = setting(
        0.0, "Dead time", "Samples within this time after a switch of gain or range are not trusted.", unit="s", ge=0
    )
    gain_ratio_from_overlap: bool = setting(
        False,
        "Gain ratio from the overlap",
        "Scale the second amplifier by the gain ratio and offset fitted where both are in range; the report states "
        "them either way.",
    )
    range_gains: dict[str, float] = setting(
        None,
        "Gains of the ranges",
        "Range code -> gain in V/A, for one amplifier that switches ranges and records which.",
        unit="V/A",
        factory=dict,
    )
    remove_mains: bool = setting(
        False,
        "Remove mains pickup",
        "Fit 50 or 60 Hz and harmonics to the stretches at the floor, over the continuous record, and subtract them. "
        "The recorded samples stay.",
    )
    slew_volt_per_second: float | None = setting(
        None,
        "Slew limit",
        "Fastest change of the amplifier's output; samples that move at 90 % of it or more are flagged.",
        unit="V/s",
        unset="no sample is flagged; the file check says whether it sees a limit",
        gt=0,
    )
    offset_from_floor: bool = setting(
        False,
        "Offset from the floor",
        "Estimate the offset, pooled and running over the record, from traces shown to "
        "reach the floor, and remove it; the report draws it.",
    )
    nm_per_volt: float | None = setting(
        None,
        "Displacement per piezo volt",
        "Change of the gap per volt on the piezo.",
        unit="nm/V",
        unset="taken from the recording, else the drive stays in its own unit",
        gt=0,
    )
    nm_polynomial: list[float] = setting(
        None,
        "Displacement polynomial",
        "nm for the powers 1, 2, 3 ... of the piezo volts, used instead of nm per volt where a piezo is not straight.",
        unit="nm/V, nm/V^2 ...",
        factory=list,
    )
    nm_per_second: float | None = setting(
        None,
        "Stretching speed",
        "Used where only time was recorded.",
        unit="nm/s",
        unset="taken from the recording, else the drive stays in its own unit",
        gt=0,
    )
    nm_per_sample: float | None = setting(
        None,
        "Displacement per sample",
        "Used where samples are equally spaced in displacement.",
        unit="nm",
        unset="not used",
        gt=0,
    )
    displacement_from: Literal["measured", "tunnelling"] = setting(
        "measured",
        "Displacement known from",
        "'tunnelling': the displacement was itself calibrated by the slope of the tunnelling decay, so that no "
        "apparent barrier can be taken from that slope; 'measured': by anything else.",
    )
    sampling_hertz: float | None = setting(
        None, "Sampling rate", "Samples per second and channel.", unit="Hz", unset=_RECORDING, gt=0
    )
    gain_relative_error: float | None = setting(
        None,
        "Error of the gain",
        "Relative standard error of the gain (of the current, for a logarithmic amplifier).",
        unset="that of the gain ratio where the overlap gives it, else not known",
        ge=0,
        lt=1,
    )
    bias_relative_error: float | None = setting(
        None, "Error of the bias", "Relative standard error of the bias.", unset="not known", ge=0, lt=1
    )
    offset_error_ampere: float | None = setting(
        None,
        "Error of the offset",
        "Standard error of the current at which the amplifier shows none.",
        unit="A",
        unset="that of the offset from the floor where it is estimated, else not known",
        ge=0,
    )
    series_resistance_error_ohm: float | None = setting(
        None,
        "Error of the series resistance",
        "Standard error of all that is in series with the junction.",
        unit="ohm",
        unset="not known",
        ge=0,
    )
    displacement_relative_error: float | None = setting(
        None, "Error of the displacement", "Relative standard error of nm.", unset="not known", ge=0, lt=1
    )

    @field_validator("amplifier_curve")
    @classmethod
    def _is_a_curve(cls, points: Sequence[tuple[float, float]]) -> list[tuple[float, float]]:
        ordered = sorted(points)
        if len(ordered) == 1:
            raise ValueError("a curve needs at least two points")
        if any(low[0] == high[0] for low, high in pairwise(ordered)):
            raise ValueError("a reading in volts stands there twice")
        rises = [high[1] - low[1] for low, high in pairwise(ordered)]
        if not (all(rise > 0 for rise in rises) or all(rise < 0 for rise in rises)):
            raise ValueError("the current must rise, or fall, from each point of the curve to the next")
        return ordered

    @field_validator("range_gains")
    @classmethod
    def _are_gains(cls, gains: dict[str, float]) -> dict[str, float]:
        for code, gain in gains.items():
            if not code.strip().lstrip("-").isdigit() or gain == 0.0:
                raise ValueError(f"'{code} = {gain:g}' is not a range code, a whole number, and its gain")
        return gains

    @field_validator("voltage_gain")
    @classmethod
    def _is_a_gain(cls, gain: float) -> float:
        if gain == 0.0:
            raise ValueError("a gain cannot be zero")
        return gain
