"""What a file says of itself: constants under canonical names, user columns, file-name templates, sidecars, tables.

A constant keeps the unit in which people wrote it until here: "bias_mV = 100", "Bias: 100 mV" and ``bias`` = 0.1 all
become ``bias_volt`` = 0.1; where no unit is stated the canonical one is taken, and a doubt says so.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Mapping
from typing import Any, Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.meaning.roles import split_unit
from meseta.intake.meaning.units import is_unit, parse_unit, unit_factor

__all__ = ["CONSTANTS", "as_written", "canonical", "canonical_entry", "is_number_of", "plain_value"]

Plain = str | int | float | bool

CONSTANTS: Final = {
    # canonical name: (unit of its value, names it goes by)
    "bias_volt": ("V", "bias bias_voltage v_bias vbias u_bias junction_bias applied_bias bias_potential"),
    "bias_offset_volt": ("V", "bias_offset"),
    "gain_volt_per_ampere": (
        "V/A",
        "gain amplifier_gain transimpedance transimpedance_gain current_gain preamp_gain preamplifier_gain iv_gain "
        "linear_gain low_gain",
    ),
    "high_gain_volt_per_ampere": ("V/A", "high_gain second_gain gain_2 gain2 gain_high high_amplifier_gain"),
    "offset_volt": ("V", "offset amplifier_offset output_offset zero_offset"),
    "high_gain_offset_volt": ("V", "high_gain_offset second_offset"),
    "volt_per_decade": ("V/dec", "log_slope decade_slope volts_per_decade"),
    "reference_ampere": ("A", "reference_current reference i_ref iref log_reference current_reference"),
    "full_scale_volt": ("V", "full_scale adc_range input_range amplifier_full_scale fullscale"),
    "series_resistance_ohm": ("ohm", "series_resistance series_resistor r_series rs protective_resistor"),
    "source_resistance_ohm": ("ohm", "source_resistance source_impedance bias_source_resistance"),
    "reference_resistance_ohm": ("ohm", "reference_resistance reference_resistor"),
    "bias_divided_by": ("1", ""),
    "nm_per_volt": ("nm/V", "piezo_constant piezo_calibration piezo_sensitivity displacement_per_volt piezo_factor"),
    "nm_per_second": (
        "nm/s",
        "speed stretching_speed pulling_speed stretch_speed stretching_rate pulling_rate velocity opening_speed",
    ),
    "nm_per_sample": ("nm", "displacement_step step_size displacement_per_sample dz"),
    "sampling_hertz": (
        "Hz",
        "sampling_rate sample_rate sampling_frequency samplerate fs sampling acquisition_rate samples_per_second",
    ),
    "sample_interval_second": (
        "s",
        "dt delta_t sample_interval sampling_interval time_step wf_increment sample_period time_increment",
    ),
    "temperature_kelvin": ("K", "temperature"),
}
"""Constants that calibration knows, the unit of their values, and other names for them."""

LARGEST_BIAS_VOLT: Final = 5.0
"""A bias without a unit that is larger than this was not meant in volts (common practice, no source)."""
SMALLEST_GAIN: Final = 1000.0
"""A gain without a unit that is smaller than this was not meant in V/A: currents of contacts are microamperes at most
(common practice, no source)."""
_BY_DIMENSION: Final = {
    # unit of the value: (constant, words of which the name must have one)
    "m/V": ("nm_per_volt", "piezo pzt displacement actuator scanner drive"),
    "V/A": ("gain_volt_per_ampere", "gain sensitivity amplifier preamp preamplifier transimpedance converter"),
    "A/V": ("gain_volt_per_ampere", "gain sensitivity amplifier preamp preamplifier transimpedance converter"),
    "m/s": ("nm_per_second", "speed velocity stretching pulling stretch pull piezo"),
}

_WORDS: Final = {
    "amplifier": "amplifier amplifier_type amplifier_kind amplifier_law",
    "pull_is": "pull_is pull_direction pulling_is opening_is",
    "direction": "direction trace_direction",
    "specimen": "specimen device chip tip junction_id device_id",
    "session": "session measuring_session run_id",
}
_TEXTS: Final = frozenset(
    {"molecule", "solvent", "electrode", "electrodes", "sample", "substrate", "operator", "date", "comment", "batch"}
)
"""Further entries that stay as they are written, also where they look like numbers."""
_CANONICAL: Final = {alias: name for name, (_, aliases) in CONSTANTS.items() for alias in (name, *aliases.split())} | {
    alias: name for name, aliases in _WORDS.items() for alias in aliases.split()
}
_NUMBER: Final = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?"
_THOUSANDS: Final = r"[-+]?[1-9]\d{0,2},\d{3}(?![\d.,eE])"
_GROUPED: Final = r"[-+]?[1-9]\d{0,2}(?:,\d{3}){2,}(?![\d,])"
"""A number whose comma may be a decimal one or stand between thousands: 10,000."""
_DIRECTIONS: Final = {
    "opening": "opening", "open": "opening", "pull": "opening", "break": "opening", "breaking": "opening",
    "retract": "opening", "stretching": "opening", "closing": "closing", "close": "closing", "push": "closing",
    "making": "closing", "make": "closing", "approach": "closing",
}  # fmt: skip
_AMPLIFIERS: Final = {
    "linear": "linear", "lin": "linear", "logarithmic": "logarithmic", "log": "logarithmic", "none": "none",
}  # fmt: skip


def plain_value(value: Any) -> Plain | None:
    """Return an attribute's value as a plain one; None where it is no single plain value."""
    array = np.asarray(value)
    if array.size != 1 or array.dtype.kind not in "biufSUO":
        return None
    item = array.reshape(-1)[0]
    if isinstance(item, bytes):
        return item.decode("utf-8", "replace")
    if isinstance(item, np.generic):
        item = item.item()
    return item if isinstance(item, str | int | float | bool) else None


def as_written(name: str, text: str, *, comma: bool = False) -> Plain:
    """Return what stands as text in a name, a sidecar or a table: a number where it is one, else the text itself.

    Specimens, sessions, molecules and the like stay as they are written ("1.10" is not "1.1"), as do numbers with zeros
    before them.

    Parameters
    ----------
    name : str
        What the entry is called.
    text : str
    comma : bool
        Whether a single comma in a number is a decimal one.
    """
    word = _key(name)
    if word in _TEXTS or _CANONICAL.get(word) in _WORDS:
        return text
    plain = re.sub(r"(?<=\d)p(?=\d)", ".", text)
    plain = plain.replace(",", ".") if comma and plain.count(",") == 1 else plain
    if not re.fullmatch(r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?", plain, re.ASCII) or re.match(r"[-+]?0\d", plain):
        return text
    if re.fullmatch(r"[-+]?\d{1,18}", plain):
        return int(plain)
    return float(plain) if math.isfinite(float(plain)) else text


def is_number_of(name: str) -> bool:
    """Return whether an entry of this name is a number that calibration knows."""
    return _constant_of(name)[0] in CONSTANTS


def _key(name: str) -> str:
    spaced = re.sub(r"(?<=[a-z])(?=[A-Z])", "_", name.strip())
    return re.sub(r"[^0-9a-z]+", "_", spaced.lower()).strip("_")


def _constant_of(name: str) -> tuple[str, str]:
    """Return (canonical name, unit stated in the name) of a constant; ("", "") where it is none."""
    if _key(name) in _CANONICAL:
        return _CANONICAL[_key(name)], ""
    stem, unit = split_unit(name)
    warm = re.fullmatch(r"\s*(temperature)[\s_\[(]+(?:°\s*C|℃|deg\s*C|C|celsius)[\])]?\s*", name, re.IGNORECASE)
    if warm:
        return "temperature_kelvin", ""
    if stem and _key(stem) in _CANONICAL:
        return _CANONICAL[_key(stem)], unit
    words = [word for word in re.split(r"[_\s]+", name.strip()) if word]
    for count in range(1, len(words)):
        head, tail = _key("_".join(words[:-count])), "_".join(words[-count:])
        unit = tail.replace("_per_", "/")
        if head in _CANONICAL and is_unit(unit):
            return _CANONICAL[head], unit
    unit = name.strip().replace("_per_", "/").replace("volt", "V").replace("decade", "dec")
    if is_unit(unit):
        dimension = parse_unit(unit).dimension
        for canonical_name in ("volt_per_decade", "nm_per_volt", "nm_per_second"):
            if dimension == parse_unit(CONSTANTS[canonical_name][0]).dimension:
                return canonical_name, unit
    return "", ""


def _constant_by_value(name: str, value: Plain) -> str:
    """Return the constant that the unit of a value and a word of its name say together ("Piezo: 2.5 nm/V"); or ""."""
    unit = _number_and_unit(value)[1] if isinstance(value, str) else ""
    constant, words = _BY_DIMENSION.get(parse_unit(unit).dimension, ("", "")) if unit else ("", "")
    return constant if set(words.split()) & set(_key(name).split("_")) else ""


def canonical_entry(name: str, value: Plain, where: str = "") -> tuple[str, Plain, str]:
    """Return (canonical name, value in its unit, doubt) of one entry; what is unknown keeps name and value.

    Raises
    ------
    InputError
        Where a constant has a value or unit that cannot be understood.
    """
    constant, unit = _constant_of(name)
    constant = constant or _constant_by_value(name, value)
    if not constant:
        _refuse_unknown_unit(name, value, where)
        return name, value, ""
    if constant not in CONSTANTS:
        return constant, _word(constant, value), ""
    at = f"{where}, '{name}'" if where else name
    number, stated = _number_and_unit(value)
    if constant == "temperature_kelvin" and (celsius := _celsius(name, value)) is not None:
        return constant, celsius, ""
    if number is None:
        fault = _no_number(value, at)
        if constant in _MAY_BE_WORDS:
            begins = re.match(r"\s*[-+.]?\d", str(value))
            return name, value, f"'{name}' is '{value}': not used, as {fault.what}; {fault.remedy}" if begins else ""
        raise fault
    unit = stated or unit
    wanted = CONSTANTS[constant][0]
    if constant == "gain_volt_per_ampere" and unit and parse_unit(unit, where).dimension in ("A/V", "ohm"):
        factor = parse_unit(unit, where).factor
        gain = 1.0 / (number * factor) if "A/V" in parse_unit(unit).dimension else number * factor
        return constant, _exact(gain), ""
    if unit:
        return constant, _exact(number * unit_factor(unit, wanted, at)), ""
    if _key(name) == constant or not math.isfinite(number):
        return constant, float(number), ""
    if constant in ("bias_volt", "bias_offset_volt") and abs(number) > LARGEST_BIAS_VOLT:
        return name, value, f"'{name}' is {number:g} without a unit: not used, as it cannot be volts"
    if constant in ("gain_volt_per_ampere", "high_gain_volt_per_ampere") and abs(number) < SMALLEST_GAIN:
        text = f"'{name}' is {number:g} without a unit: not used, as it cannot be V/A"
        meant = f", for example 1e{number:g} if it is the power of ten" if number in range(2, 16) else ""
        return name, value, f"{text}; give calibration.{constant}{meant}"
    return constant, float(number), f"the unit of '{name}' is not stated: {number:g} is taken as {wanted}"


_MAY_BE_WORDS: Final = ("gain_volt_per_ampere", "offset_volt", "nm_per_second", "temperature_kelvin")
"""Constants in whose place people also write words ("gain: high", "temperature: room")."""


def _refuse_unknown_unit(name: str, value: Plain, where: str) -> None:
    """Raise where a name is a constant but for its unit in brackets, which is not known: "bias (mVV)"."""
    match = re.fullmatch(r"\s*(.+?)\s*[\[(]\s*([^\[\]()]+?)\s*[\])]\s*", name)
    if match is None or _CANONICAL.get(_key(match[1])) not in CONSTANTS or _number_and_unit(value)[0] is None:
        return
    parse_unit(match[2], f"{where}, '{name}'" if where else name)


def _celsius(name: str, value: Plain) -> float | None:
    """Return a temperature in kelvin that is stated in degrees Celsius; None where it is not."""
    degree = r"(?:°\s*C|℃|deg\s*C|C|[Cc]elsius)"
    match = re.fullmatch(rf"\s*({_NUMBER})\s*({degree})?\s*", str(value).replace(",", "."))
    in_name = re.search(rf"[\s_\[(]{degree}[\])]?\s*$", name)
    return _exact(float(match[1]) + 273.15) if match and (match[2] or in_name) else None


def _no_number(value: Plain, where: str) -> InputError:
    """Return the error for a constant whose value cannot be understood."""
    text = str(value)
    match = re.fullmatch(rf"\s*{_NUMBER}\s*(\S.*?)\s*", text)
    if re.match(rf"\s*{_THOUSANDS}", text):
        plain = text.replace(",", "")
        remedy = f"write {plain.strip()}, or a point where a decimal comma is meant"
        return InputError(f"'{text}' may have a decimal comma or one between thousands", where, remedy)
    if match and not is_unit(match[1]):
        try:
            parse_unit(match[1], where)
        except InputError as error:
            return error
    return InputError(f"'{text}' is not a number with a known unit", where, "correct it where it is written")


def _exact(number: float) -> float:
    """Return a converted constant without the last-digit noise of the conversion (100 mV is 0.1 V)."""
    return float(f"{number:.15g}")


def _word(name: str, value: Plain) -> Plain:
    text = str(value).strip()
    if name == "direction":
        return _DIRECTIONS.get(text.lower(), text)
    if name == "amplifier":
        return _AMPLIFIERS.get(text.lower(), text)
    return text.lower() if name == "pull_is" else text


def _number_and_unit(value: Plain) -> tuple[float | None, str]:
    if isinstance(value, bool):
        return None, ""
    if isinstance(value, int | float):
        return float(value), ""
    if re.match(rf"\s*{_THOUSANDS}", value):
        return None, ""
    value = value.replace(",", "") if re.match(rf"\s*{_GROUPED}", value) else value
    text = re.sub(r"^\s*10\s*(?:\^|\*\*)\s*([-+]?\d{1,2})\b", r"1e\1", value.replace(",", "."))
    match = re.fullmatch(rf"\s*({_NUMBER})\s*(\S.*)?", text)
    if match is None or (match[2] and not is_unit(match[2].strip())):
        return None, ""
    return float(match[1]), (match[2] or "").strip()


def _with_units(pairs: list[tuple[str, Any]]) -> list[tuple[str, Any]]:
    """Return entries with the units that stand in entries of their own: "gain" and "gain_unit"."""
    units = {}
    for name, raw in pairs:
        beside = re.fullmatch(r"(.+?)[\s_.]*units?", str(name), re.IGNORECASE)
        value = plain_value(raw)
        if beside and isinstance(value, str) and is_unit(value):
            units[_key(beside[1])] = value.strip()
    joined = []
    for name, raw in pairs:
        value, unit = plain_value(raw), units.get(_key(str(name)))
        constant, unit_in_name = _constant_of(str(name)) if unit else ("", "")
        number, stated = _number_and_unit(value) if constant and isinstance(value, str | int | float) else (None, "")
        if number is not None and not stated and not unit_in_name:
            joined.append((name, f"{number!r} {unit}"))
        else:
            joined.append((name, raw))
    return joined


def canonical(
    entries: Mapping[str, Any] | Iterable[tuple[str, Any]], where: str = ""
) -> tuple[dict[str, Plain], list[str]]:
    """Return entries under canonical names, as plain values, with the doubts about them.

    Entries that are no single plain value are left out; a value stated under its canonical name wins over others.
    """
    found: dict[str, Plain] = {}
    doubts = []
    pairs = _with_units(list(entries.items() if isinstance(entries, Mapping) else entries))
    for name, raw in sorted(pairs, key=lambda pair: _key(str(pair[0])) in CONSTANTS):
        value = plain_value(raw)
        if value is None or value == "":
            continue
        key, converted, doubt = canonical_entry(str(name), value, where)
        if key in CONSTANTS and found.get(key, converted) != converted:
            doubts.append(f"{key} is stated as {found[key]:g} and as {converted:g}: the latter is used")
        found[key] = converted
        if doubt:
            doubts.append(doubt)
    interval = found.get("sample_interval_second")
    if isinstance(interval, float) and interval > 0 and "sampling_hertz" not in found:
        found["sampling_hertz"] = _exact(1.0 / interval)
    return found, doubts
