"""Settings of a simulation: the set-up, the junctions, the noise, and how the record changes while it runs."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, fields, replace
from typing import Any, Final, Literal, get_args

from meseta.errors import CallError, nearest
from meseta.quantities import G0_SIEMENS

__all__ = ["NOISE_PRESETS", "NoiseLevels", "SettingInfo", "SimulationSettings"]


@dataclass(frozen=True)
class NoiseLevels:
    """Every noise of one preset (our own levels, within the ranges that are common practice).

    Attributes
    ----------
    floor_sigma_g0 : float
        Standard deviation of a sample with the contact open.
    relative_noise, molecule_noise, tunnelling_noise : float
        Relative 1/f noise of a metallic contact, a molecular junction and a tunnelling gap (standard deviation).
    bandwidth_hertz : float
        -3 dB frequency of the amplifier.
    pickup_g0 : float
        Amplitude of the mains pickup; its third harmonic is 0.3 of it.
    telegraph_share : float
        Share of traces whose contact switches between two close values.
    spikes_per_million : float
        Expected spikes in a million samples.
    """

    floor_sigma_g0: float
    relative_noise: float
    molecule_noise: float
    tunnelling_noise: float
    bandwidth_hertz: float
    pickup_g0: float
    telegraph_share: float
    spikes_per_million: float


NOISE_PRESETS: Final[dict[str, NoiseLevels]] = {
    "clean": NoiseLevels(5e-7, 0.002, 0.02, 0.02, 8000.0, 0.0, 0.0, 0.0),
    "typical": NoiseLevels(1.5e-6, 0.006, 0.06, 0.05, 5000.0, 3e-7, 0.05, 2.0),
    "hard": NoiseLevels(6e-6, 0.02, 0.15, 0.1, 2500.0, 3e-6, 0.2, 20.0),
}


def _setting(
    default: Any,
    title: str,
    unit: str = "",
    help: str = "",
    *,
    low: float | None = None,
    high: float | None = None,
    above: float | None = None,
) -> Any:
    """Declare a setting with its title, unit and range (``above`` is an open lower end)."""
    return field(
        default=default,
        metadata={"title": title, "unit": unit, "help": help, "low": low, "high": high, "above": above},
    )


@dataclass(frozen=True)
class SettingInfo:
    """What a command line or a form needs to know of one setting.

    Attributes
    ----------
    kind : str
        "integer", "number" or "choice".
    optional : bool
        True where None is allowed; the help then says what is used instead.
    """

    name: str
    title: str
    unit: str
    help: str
    kind: str
    choices: tuple[str, ...]
    optional: bool
    default: Any


_PRESET = "Taken from the noise preset where it is not given."


@dataclass(frozen=True)
class SimulationSettings:
    """Every number of a simulation; frozen, checked on creation.

    Raises
    ------
    CallError
        Where a value is out of its range.
    """

    samples: int = _setting(5000, "Samples a trace", "samples", "Samples of each opening.", low=50)
    sampling_hertz: float = _setting(20_000.0, "Sampling rate", "Hz", above=0)
    nm_per_second: float = _setting(20.0, "Stretching speed", "nm/s", above=0)
    bias_volt: float = _setting(0.1, "Bias", "V", "Bias over junction and series resistor.", above=0)
    temperature_kelvin: float = _setting(300.0, "Temperature", "K", "Sets the thermal noise.", above=0)
    series_resistance_ohm: float = _setting(
        0.0, "Series resistor", "ohm", "In series with the junction and not corrected in what is recorded.", low=0
    )

    staircase: int = _setting(8, "Highest contact", "G0", "Openings begin at about this conductance.", low=1, high=40)
    scattering_ohm: float = _setting(
        200.0,
        "Scattering near the contact",
        "ohm",
        "Shifts the peaks below multiples of G0, as a resistor would.",
        low=0,
    )
    atom_nm: float = _setting(
        0.25, "Distance of atoms", "nm", "Last plateaus favour multiples of this length.", above=0
    )
    tunnelling_decades_per_nm: float = _setting(10.0, "Tunnelling slope", "decades/nm", above=0)
    tunnelling_spread: float = _setting(
        0.08, "Spread of the tunnelling slope", "", "Relative standard deviation between traces.", low=0, high=0.3
    )
    snap_back_nm: float = _setting(0.45, "Snap-back", "nm", "Mean gap right after the contact has broken.", low=0)
    snap_back_spread_nm: float = _setting(0.08, "Spread of the snap-back", "nm", low=0)
    bridge_gap_nm: float = _setting(
        0.15, "Wider gap of a bridge", "nm", "Added to the gap where a molecule fits in.", low=0
    )

    yield_share: float = _setting(0.4, "Yield", "", "Share of traces with a molecule.", low=0, high=1)
    molecule_log10_g0: float = _setting(
        math.log10(2e-4), "Molecular conductance", "log10 G0", "Centre of the log-normal population.", high=0
    )
    molecule_width_decades: float = _setting(
        0.18, "Spread of the molecular conductance", "decades", "Standard deviation.", low=0
    )
    molecule_length_nm: float = _setting(0.6, "Molecular plateau length", "nm", "Mean.", above=0)
    molecule_length_spread_nm: float = _setting(0.2, "Spread of that length", "nm", low=0)
    molecule_slope_decades_per_nm: float = _setting(-0.35, "Molecular slope", "decades/nm", "Mean.")
    molecule_slope_spread: float = _setting(0.3, "Spread of that slope", "decades/nm", low=0)
    second_share: float = _setting(
        0.5,
        "Share of the second kind",
        "",
        "Mixture: share of molecular traces that are of the second kind.",
        low=0,
        high=1,
    )
    second_log10_g0: float = _setting(-4.7, "Conductance of the second kind", "log10 G0", high=0)
    second_length_nm: float = _setting(0.9, "Plateau length of the second kind", "nm", above=0)

    noise: Literal["clean", "typical", "hard"] = _setting("typical", "Noise preset")
    floor_sigma_g0: float | None = _setting(None, "Noise at the floor", "G0", _PRESET, above=0)
    relative_noise: float | None = _setting(None, "Relative 1/f noise", "", _PRESET, low=0, high=0.5)
    molecule_noise: float | None = _setting(None, "Relative noise of a molecule", "", _PRESET, low=0, high=0.5)
    tunnelling_noise: float | None = _setting(None, "Relative noise of tunnelling", "", _PRESET, low=0, high=0.5)
    bandwidth_hertz: float | None = _setting(None, "Amplifier bandwidth", "Hz", _PRESET, above=0)
    filter_poles: int = _setting(2, "Poles of the amplifier's filter", "", low=1, high=2)
    pickup_g0: float | None = _setting(None, "Mains pickup", "G0", _PRESET, low=0)
    mains_hertz: float = _setting(50.0, "Mains frequency", "Hz", above=0)
    telegraph_share: float | None = _setting(None, "Traces with telegraph noise", "", _PRESET, low=0, high=1)
    spikes_per_million: float | None = _setting(None, "Spikes", "a million samples", _PRESET, low=0)

    drift_decades: float = _setting(0.0, "Drift", "decades", "Change of conductance from the first to the last trace.")
    memory_traces: float = _setting(0.0, "Memory", "traces", "How long a junction remembers its shape.", low=0)
    memory_share: float = _setting(
        0.5, "Share with memory", "", "Share of the variance between traces that is remembered.", low=0, high=1
    )
    specimens: int = _setting(1, "Specimens", "", "The traces are divided among them in order.", low=1)
    specimen_decades: float = _setting(0.05, "Spread between specimens", "decades", low=0)

    amplifier: Literal["linear", "logarithmic"] = _setting("linear", "Amplifier")
    gain_volt_per_ampere: float = _setting(1e5, "Gain of the linear amplifier", "V/A", above=0)
    high_gain_volt_per_ampere: float | None = _setting(
        None, "Gain of the second amplifier", "V/A", "Raw recordings: a second channel where it is given.", above=0
    )
    volt_per_decade: float = _setting(1.0, "Slope of the logarithmic amplifier", "V/decade", above=0)
    reference_ampere: float = _setting(1e-9, "Reference of the logarithmic amplifier", "A", above=0)
    offset_volt: float = _setting(0.0, "Amplifier offset", "V", "Raw recordings: output at zero current.")
    full_scale_volt: float = _setting(10.0, "Full scale of amplifier and converter", "V", above=0)
    converter_bits: int = _setting(16, "Converter", "bits", low=8, high=32)
    converter_step_g0: float | None = _setting(
        None, "Converter step near the floor", "G0", "0.4 of the noise at the floor where it is not given.", low=0
    )

    rupture_nm: float = _setting(
        1.8, "Place of the rupture", "nm", "Raw recordings: mean displacement of the pull at the rupture.", above=0
    )
    nm_per_volt: float = _setting(2.0, "Displacement per piezo volt", "nm/V", "Raw recordings.", above=0)
    pull_is: Literal["rising", "falling"] = _setting("rising", "Pulling is", "", "Raw recordings.")
    push_speedup: float = _setting(4.0, "Pushing is faster by", "", "Raw recordings.", low=1, high=50)
    hold_samples: int = _setting(200, "Hold between pull and push", "samples", "Raw recordings.", low=0)

    def __post_init__(self) -> None:
        for item in fields(self):
            _check(item.name, getattr(self, item.name), item.metadata)
        choices = {info.name: info.choices for info in self.describe() if info.choices}
        for name, allowed in choices.items():
            if getattr(self, name) not in allowed:
                raise CallError(
                    f"'{getattr(self, name)}' is not allowed", name, nearest(str(getattr(self, name)), allowed)
                )

    @classmethod
    def describe(cls) -> Iterator[SettingInfo]:
        """Yield every setting with title, unit and kind, in order."""
        import typing

        hints = typing.get_type_hints(cls)
        for item in fields(cls):
            annotation = hints[item.name]
            arguments = get_args(annotation)
            optional = type(None) in arguments
            choices = tuple(str(word) for word in arguments) if typing.get_origin(annotation) is Literal else ()
            kind = "choice" if choices else ("integer" if annotation is int else "number")
            meta = item.metadata
            yield SettingInfo(
                item.name, meta["title"], meta["unit"], meta["help"], kind, choices, optional, item.default
            )

    def with_values(self, **values: Any) -> SimulationSettings:
        """Return the settings with some values changed.

        Raises
        ------
        CallError
            Where a name is unknown or a value out of range.
        """
        known = [item.name for item in fields(self)]
        for name in values:
            if name not in known:
                raise CallError(f"there is no simulation setting '{name}'", "simulate", nearest(name, known))
        return replace(self, **values)

    def with_words(self, words: Sequence[str]) -> SimulationSettings:
        """Return the settings with ``name=value`` words applied, as a command line gives them.

        Raises
        ------
        CallError
            Where a word has no "=", a name is unknown, or a value is no number or out of range.
        """
        described = {info.name: info for info in self.describe()}
        values: dict[str, Any] = {}
        for word in words:
            name, equals, text = (part.strip() for part in word.partition("="))
            if not equals:
                raise CallError(f"'{word}' is not a setting", "simulate", "write name=value")
            if name not in described:
                raise CallError(f"there is no simulation setting '{name}'", "simulate", nearest(name, described))
            values[name] = _parsed(text, described[name])
        return self.with_values(**values)

    @property
    def levels(self) -> NoiseLevels:
        """The noise preset with what was given instead of it."""
        preset = NOISE_PRESETS[self.noise]
        given = {item.name: getattr(self, item.name) for item in fields(NoiseLevels)}
        return replace(preset, **{name: value for name, value in given.items() if value is not None})

    @property
    def nm_per_sample(self) -> float:
        """Displacement from one sample to the next."""
        return self.nm_per_second / self.sampling_hertz

    @property
    def ampere_per_g0(self) -> float:
        """Current at one conductance quantum."""
        return self.bias_volt * G0_SIEMENS

    @property
    def full_scale_g0(self) -> float:
        """Conductance at which amplifier or converter saturates."""
        if self.amplifier == "logarithmic":
            return self.reference_ampere * 10 ** (self.full_scale_volt / self.volt_per_decade) / self.ampere_per_g0
        return self.full_scale_volt / self.gain_volt_per_ampere / self.ampere_per_g0


def _parsed(text: str, info: SettingInfo) -> Any:
    """Return the value that a word stands for."""
    if info.kind == "choice":
        return text
    if info.optional and text.lower() in ("none", ""):
        return None
    try:
        return int(text) if info.kind == "integer" else float(text)
    except ValueError:
        wanted = "a whole number" if info.kind == "integer" else "a number"
        raise CallError(f"'{text}' is not {wanted}", info.name, f"give {wanted}") from None


def _check(name: str, value: Any, limits: Any) -> None:
    """Raise where a number is out of its range."""
    if value is None or isinstance(value, str):
        return
    low, high, above = limits["low"], limits["high"], limits["above"]
    unit = f" {limits['unit']}" if limits["unit"] else ""
    if not math.isfinite(value):
        raise CallError(f"{value} is not a number to simulate with", name, "give a finite number")
    if low is not None and value < low:
        raise CallError(f"{value} is too small", name, f"give at least {low:g}{unit}")
    if above is not None and value <= above:
        raise CallError(f"{value} is too small", name, f"give more than {above:g}{unit}")
    if high is not None and value > high:
        raise CallError(f"{value} is too large", name, f"give at most {high:g}{unit}")
