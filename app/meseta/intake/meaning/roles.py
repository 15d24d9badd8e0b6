"""What a channel is: its role and unit, from its name, its attributes, a unit row, or the recipe."""

from __future__ import annotations

import fnmatch
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Final

from meseta.intake.meaning.units import is_unit, parse_unit, unit_factor
from meseta.intake.recording import RawChannel
from meseta.recipe.intake import ROLES, ChannelRole

__all__ = [
    "DRIVE_ROLES",
    "MEASURED",
    "Guess",
    "guess_role",
    "settle_roles",
    "split_unit",
    "stem_of",
    "told_role",
    "unmatched",
]

SIGNAL_ROLES: Final = ("conductance", "log_conductance", "current", "amplifier", "amplifier_high_gain", "resistance")
DRIVE_ROLES: Final = ("displacement", "piezo", "time")
_DIMENSION: Final = {
    "conductance": "S", "log_conductance": "dec", "current": "A", "voltage": "V", "amplifier": "V",
    "amplifier_high_gain": "V", "resistance": "ohm", "displacement": "m", "piezo": "V", "time": "s", "bias": "V",
}  # fmt: skip
MEASURED: Final = frozenset(_DIMENSION)
"""Roles whose numbers have a unit."""
_REMARKS: Final = frozenset(
    {"raw", "smoothed", "filtered", "measured", "calculated", "abs", "mean", "corrected", "t", "x"}
)
_NUMBER_BEHIND: Final = re.compile(r"(?<=[\])}>])[\s_#.:-]*\d+$")
"""A number behind a unit in brackets: "Current (nA) 4"."""
_REMARK_BEHIND: Final = re.compile(rf"(?<=[\])}}>])\s+(?:{'|'.join(sorted(_REMARKS - {'t', 'x'}))})$", re.IGNORECASE)
"""A remark behind a unit in brackets: "Current (nA) raw"."""
_ANY_OUTPUT: Final = re.compile(r"[vu]_?out", re.IGNORECASE)
"""Volts that come out of something."""
_LOGARITHM: Final = re.compile(r"(.*?)[\s_]*\b((?:log10|log|lg)\s*\(.+\))", re.IGNORECASE)
_NUMBERS: Final = ("trace_number", "phase", "range_code")
_ROLE_OF_DIMENSION: Final = {
    "S": "conductance", "dec": "log_conductance", "A": "current", "V": "voltage", "ohm": "resistance",
    "m": "displacement", "s": "time",
}  # fmt: skip
_NAMES: Final = {
    "conductance": "leitwert conductancia conduttanza conductance cond g gg0 g_g0 conductances junction_conductance",
    "log_conductance": "logg log_g log10g log10_g lg_g lgg log_conductance log10_conductance logconductance "
    "log_cond log10_g_g0 log_g_g0 log10gg0",
    "current": "strom courant corriente corrente current i curr currents junction_current tunnel_current "
    "tunneling_current tunnelling_current isd ids",
    "amplifier": "amplifier amp amplifier_volts amp_volts amplifier_output amp_out amplifier_voltage amp_voltage "
    "preamp preamplifier preamp_out output iv_out iv_converter log_amp logamp log_amplifier amplifier_1 amp1 "
    "low_gain amplifier_low_gain amp_low vout v_out uout u_out",
    "amplifier_high_gain": "amplifier_high_gain amp_high amp_high_gain high_gain amplifier_2 amp2 amplifier_high",
    "resistance": "widerstand resistencia resistenza resistance r resistances",
    "displacement": "weg abstand auslenkung dehnung deplacement desplazamiento spostamento displacement distance z "
    "extension stretch elongation position gap dz displacements distances electrode_separation separation "
    "x_displacement dist",
    "piezo": "piezo piezo_volts piezo_voltage piezo_v pzt z_piezo piezo_z drive ramp piezo_drive piezo_monitor "
    "vpiezo v_piezo u_piezo",
    "time": "zeit temps tiempo tempo time t times timestamp_s elapsed",
    "bias": "bias vbias v_bias bias_voltage ubias u_bias bias_v applied_bias",
    "voltage": "spannung tension voltaje voltage v u volt volts",
    "range_code": "range range_code gain_code gain_range range_index",
    "trace_number": "trace trace_number trace_no trace_id tracenumber traceid trace_index curve curve_number "
    "curve_id cycle cycle_number trace_nr run_id run_number run_no run_nr sweep_number sweep_no pull_number pull_no",
    "trigger": "trigger trig ttl trigger_in trigger_out trigger_signal",
    "phase": "phase segment_kind motion",
}  # fmt: skip
_ROLE_OF_NAME: Final = {name: role for role, names in _NAMES.items() for name in names.split()}
_LOWER_UNITS: Final = {
    "v": "V", "mv": "mV", "a": "A", "na": "nA", "ua": "uA", "pa": "pA", "ma": "mA", "g0": "G0", "ohm": "ohm",
    "hz": "Hz", "khz": "kHz", "k": "K", "ns": "nS", "us": "uS",
}  # fmt: skip


@dataclass(frozen=True)
class Guess:
    """A proposal for one channel: role and unit, on what ground, how sure, and what is doubtful."""

    role: str
    unit: str
    ground: str
    confidence: float
    doubts: tuple[str, ...] = ()


def _tokens(name: str) -> list[str]:
    spaced = re.sub(r"([a-z0-9])([A-Z][a-z])", r"\1_\2", name.rsplit("/", 1)[-1])
    return [token for token in re.split(r"[^0-9A-Za-zµμΩΩÅ%²₀]+", spaced) if token]


@lru_cache(maxsize=4096)
def stem_of(name: str) -> str:
    """Return a name without its number: "trace_12" and "trace_12_G" are numbers 12 of "trace" and "trace_g".

    A unit in brackets stays as it is written: "R 4 (Mohm)" and "R (Mohm) 4" are "r (Mohm)".
    """
    plain = _NUMBER_BEHIND.sub("", name.strip())
    said, unit = split_unit(plain)
    stem = _without_number(said or plain)
    if unit and plain[-1] in ")]}>":
        return f"{stem} ({unit})" if said else unit
    return stem


def _without_number(name: str) -> str:
    tokens = _tokens(name)
    words = [token for token in tokens if not token.isdigit()] or tokens[:1]
    joined = "_".join(words).lower()
    if len(words) > 1 and is_unit(words[-1]):  # "G_G0": the nought is no number of a trace
        return joined
    return re.sub(r"(?<=[a-z_])\d+$", "", joined).rstrip("_") or joined


def split_unit(name: str, role_unit: str = "") -> tuple[str, str]:
    """Split a heading into name and unit: "Current (nA)", "current_nA", "I / nA", "z [Å]", "current, nA".

    Parameters
    ----------
    name : str
    role_unit : str
        Dimension that the unit should have, which settles the case of "s" and "S".

    Returns
    -------
    (str, str)
        Name and unit; the unit is empty where none stands there.
    """
    text = _REMARK_BEHIND.sub("", _NUMBER_BEHIND.sub("", name.strip()))
    if _whole_unit(text):
        return "", text
    logarithm = _LOGARITHM.fullmatch(text)
    if logarithm and is_unit(logarithm[2]):
        return logarithm[1], logarithm[2]
    match = re.fullmatch(r"(.*?)\s*[\[({<]\s*(.+?)\s*[\])}>]\s*", text) or re.fullmatch(r"(.+?)\s*[/,;:]\s*(\S+)", text)
    if match and is_unit(match[2]):
        return match[1].strip(), match[2]
    parts = [part for part in re.split(r"[_\s]+", text) if part]
    for count in (3, 2, 1):
        if len(parts) > count:
            unit = _unit_of_words(parts[-count:], role_unit)
            if unit:
                return "_".join(parts[:-count]), unit
    return text, ""


def _whole_unit(text: str) -> bool:
    """Return whether a whole heading is a unit that says what it heads ("nA", "G/G0", "log10(G/G0)")."""
    plain = text.strip()
    return is_unit(plain) and (len(plain) > 1 or plain in "Ω%") and not plain.isdigit()


def _unit_of_words(words: Sequence[str], dimension: str) -> str:
    if words[-1].isdigit():
        return ""
    joined = "/".join(words) if len(words) == 2 and "per" not in words else "_".join(words)
    if len(words) == 3 and words[1] != "per":
        return ""
    joined = joined.replace("_per_", "/")
    if joined.isdigit():
        return ""
    candidates = [joined, _LOWER_UNITS.get(joined.lower(), ""), joined.upper() if len(joined) == 1 else ""]
    found = [text for text in candidates if text and is_unit(text)]
    fitting = [text for text in found if dimension and parse_unit(text).dimension == dimension]
    return (fitting or found or [""])[0]


def _named_role(name: str) -> str:
    joined = "_".join(_tokens(name)).lower()
    for candidate in (joined, stem_of(name)):
        if candidate in _ROLE_OF_NAME:
            return _ROLE_OF_NAME[candidate]
    words = joined.split("_")
    for size in (3, 2, 1):
        for at in range(len(words) - size + 1):
            part = "_".join(words[at : at + size])
            if len(part) > 2 and part in _ROLE_OF_NAME:
                return _ROLE_OF_NAME[part]
    return ""


@lru_cache(maxsize=4096)
def guess_role(name: str, unit: str = "", role: str = "", unit_ground: str = "attribute") -> Guess:
    """Propose role and unit of a channel.

    Parameters
    ----------
    name : str
        Name or heading, possibly with a unit in it.
    unit : str
        Unit stated beside it (an attribute, a unit row); empty where none is.
    role : str
        Role stated beside it; empty where none is.
    unit_ground : str
        Where the unit is stated.
    """
    whole = _named_role(name) if not _whole_unit(name.strip()) else ""
    stem, in_name = split_unit(name, _DIMENSION.get(whole, ""))
    found = role if role in ROLES else (_named_role(stem) if stem else "") or whole
    if found in _DIMENSION and in_name:
        in_name = split_unit(name, _DIMENSION[found])[1]
    stated, ground = (unit, unit_ground) if unit.strip() else (in_name, "name")
    if not stated and found in _DIMENSION:
        stated, ground = _unknown_unit(name), "name"
    if stated and not is_unit(stated):
        return Guess(found or "other", stated, ground, 0.5, (f"'{stated}' is not a known unit",))
    if not stated:
        return Guess(found or "other", "", "name" if found else "", 0.6 if found else 0.0)
    dimension = parse_unit(stated).dimension
    by_unit = _ROLE_OF_DIMENSION.get(dimension, "other")
    if not found:
        return Guess("other" if dimension == "V" and stem else by_unit, stated, ground, 0.7)
    if found in _NUMBERS and by_unit != "other":
        return Guess(by_unit, stated, ground, 0.8)
    if found == "amplifier" and dimension == "V" and not role and _ANY_OUTPUT.fullmatch(stem):
        return Guess(found, stated, ground, 0.7, (f"volts called '{stem}': taken as amplifier volts",))
    return _fitted(found, stated, dimension, by_unit, "attribute" if role else ground)


def _unknown_unit(name: str) -> str:
    """Return what stands in brackets where a unit should: one word that is no remark."""
    match = re.fullmatch(r".*?[\[(]\s*([^\s\])]{1,12})\s*[\])]\s*", name)
    return match[1] if match and match[1].lower() not in _REMARKS and not match[1].isdigit() else ""


def _fitted(role: str, unit: str, dimension: str, by_unit: str, ground: str) -> Guess:
    """Return the guess where name and unit both say something; the unit wins, as it changes numbers."""
    wanted = _DIMENSION.get(role)
    if wanted is None or dimension == wanted or (role == "conductance" and dimension == "1"):
        return Guess(role, unit, ground, 0.95)
    if role == "log_conductance" and dimension == "S" and abs(unit_factor(unit, "G0") - 1.0) < 1e-9:
        return Guess(role, "dec", ground, 0.8, (f"called a logarithm and in {unit}: taken as log10(G/G0)",))
    if role == "displacement" and unit.strip() == "A":
        return Guess(role, "angstrom", ground, 0.7, (f"called a displacement and in {unit}: taken as angstrom",))
    if role == "piezo" and dimension == "m":
        return Guess("displacement", unit, ground, 0.9)
    if role == "current" and dimension == "V":
        return Guess("amplifier", unit, ground, 0.8, (f"called a current but in {unit}: taken as amplifier volts",))
    if role == "displacement" and dimension == "V":
        return Guess("piezo", unit, ground, 0.8, (f"called a displacement but in {unit}: taken as piezo volts",))
    return Guess(by_unit, unit, ground, 0.6, (f"named like {role}, but its unit {unit} says {by_unit}",))


def settle_roles(channels: Sequence[RawChannel], named: Mapping[str, ChannelRole]) -> tuple[RawChannel, ...]:
    """Return the channels with what the recipe says of them, and with the ambiguous ones settled by the company.

    Parameters
    ----------
    channels : sequence of RawChannel
    named : mapping
        ``intake.channels`` of the recipe: name, last part of a path, heading without its number, or a pattern with
        ``*`` -> role and unit.
    """
    return _settled_voltage([_as_told(channel, named) for channel in channels])


def unmatched(channels: Sequence[RawChannel], named: Mapping[str, ChannelRole]) -> list[str]:
    """Return the names of ``intake.channels`` that no channel answers to (patterns and "ignore" may match nothing)."""
    missing = []
    for name, role in named.items():
        if role.role == "ignore" or any(sign in name for sign in "*?"):
            continue
        if not any(told_role(channel.name, {name: role}) for channel in channels):
            missing.append(name)
    return missing


def _as_told(channel: RawChannel, named: Mapping[str, ChannelRole]) -> RawChannel:
    told = told_role(channel.name, named)
    if told is None:
        return channel
    unit = told.unit or channel.unit
    if unit and told.role in _DIMENSION:
        parse_unit(unit, f"intake.channels, '{channel.name}'")
    scale, offset = channel.scale, channel.offset
    if told.scale != 1.0 or told.offset != 0.0:
        scale, offset = told.scale, told.offset
    return replace(
        channel, role=told.role, unit=unit, scale=scale, offset=offset, ground="recipe", confidence=1.0, doubts=()
    )


def told_role(name: str, named: Mapping[str, ChannelRole]) -> ChannelRole | None:
    """Return what ``intake.channels`` of the recipe says of the channel of a name; None where it says nothing."""
    if not named:
        return None
    last = name.rsplit("/", 1)[-1]
    lowered = {key.lower(): value for key, value in named.items()}
    bare = [last.removeprefix("column ")] if last.startswith("column ") else []
    for candidate in (name, name.strip("/"), last, *bare, split_unit(last)[0], stem_of(name)):
        if candidate.lower() in lowered:
            return lowered[candidate.lower()]
    for pattern, value in named.items():
        if any(sign in pattern for sign in "*?") and (fnmatch.fnmatch(name, pattern) or fnmatch.fnmatch(last, pattern)):
            return value
    return None


def _is_stated(channel: RawChannel) -> bool:
    """Return whether the user said what a channel is, in the recipe or in a kept layout."""
    return channel.ground == "recipe" or channel.ground.startswith("layout ")


def _settled_voltage(channels: list[RawChannel]) -> tuple[RawChannel, ...]:
    """Settle what plain volts are: the bias beside a current, amplifier volts where nothing else was measured."""
    roles = {channel.role for channel in channels}
    settled = []
    for channel in channels:
        if channel.role == "voltage" and not _is_stated(channel):
            if "current" in roles and "bias" not in roles:
                channel = replace(
                    channel, role="bias", doubts=(*channel.doubts, "volts beside a current: taken as the bias")
                )
            elif not roles & set(SIGNAL_ROLES):
                channel = replace(
                    channel, role="amplifier", doubts=(*channel.doubts, "the only volts: taken as amplifier volts")
                )
            roles.add(channel.role)
        settled.append(channel)
    return tuple(settled)
