"""Section ``[calibration]``: what the laboratory knows of its amplifier, bias and piezo."""

from __future__ import annotations

from typing import Literal

from meseta.recipe.fields import Section, setting

__all__ = ["CalibrationSettings"]

_RECORDING = "taken from the recording where it states it"


class CalibrationSettings(Section):
    """Volts to conductance in G0 and to displacement in nm.  A setting given here wins over the recording's own."""

    bias_volt: float | None = setting(
        None, "Bias", "Bias over the junction and what is in series with it.", unit="V", unset=_RECORDING
    )
    bias_offset_volt: float = setting(0.0, "Bias offset", "Subtracted from the bias before the division.", unit="V")
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
