"""Numbers set as in print: the one rounding that plots, tables, figures and exported text share.

Pure text with Unicode superscripts; no markup, so that a label, a table cell and a line of CSV notes show the same
characters.  Uncertainties stand in brackets in units of the last digits (GUM 7.2.2, JCGM 100:2008); what interval they
stand for is said beside them by whoever prints them (Meseta: half width of the 95 % interval).
"""

from __future__ import annotations

import math
from typing import Final

__all__ = [
    "G0",
    "MINUS",
    "THIN_SPACE",
    "TIMES",
    "conductance",
    "integer",
    "interval",
    "number",
    "percent",
    "power_of_ten",
    "prefixed",
    "quantity",
    "subscript",
    "superscript",
    "unit_text",
    "value_with_uncertainty",
]

MINUS: Final = "\N{MINUS SIGN}"
TIMES: Final = "\N{MULTIPLICATION SIGN}"
THIN_SPACE: Final = "\N{NARROW NO-BREAK SPACE}"
G0: Final = "G\N{SUBSCRIPT ZERO}"
MISSING: Final = "\N{EN DASH}"
"""What stands in place of a number that is not there."""

_SUPERSCRIPTS: Final = str.maketrans("0123456789+-" + MINUS, "⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻⁻")
_SUBSCRIPTS: Final = str.maketrans("0123456789+-" + MINUS, "₀₁₂₃₄₅₆₇₈₉₊₋₋")
_PREFIXES: Final = {
    -18: "a", -15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T", 15: "P",
}  # fmt: skip
_UNITS: Final = {"G0": G0, "ohm": "Ω", "Ohm": "Ω"}


def superscript(value: int) -> str:
    """Return an integer in superscript characters (``-4`` -> ``⁻⁴``)."""
    return str(value).translate(_SUPERSCRIPTS)


def subscript(value: int) -> str:
    """Return an integer in subscript characters (``0`` -> ``₀``)."""
    return str(value).translate(_SUBSCRIPTS)


def power_of_ten(exponent: int) -> str:
    """Return a tick label of a logarithmic axis: ``1``, ``10``, ``10⁻³``."""
    if exponent in (0, 1):
        return "1" if exponent == 0 else "10"
    return f"10{superscript(exponent)}"


def unit_text(unit: str) -> str:
    """Return a unit as printed: ``G0`` -> ``G₀``, ``ohm`` -> ``Ω``."""
    return _UNITS.get(unit, unit)


def integer(value: int) -> str:
    """Return a whole number with its thousands set apart: ``1 388``."""
    return f"{int(value):,}".replace(",", THIN_SPACE).replace("-", MINUS)


def percent(part: float, whole: float, decimals: int = 1) -> str:
    """Return a share in percent (``37.8 %``); an en dash where there is no whole."""
    if not whole or not math.isfinite(part) or not math.isfinite(whole):
        return MISSING
    return f"{100 * part / whole:.{decimals}f}{THIN_SPACE}%"


def _exponent(value: float) -> int:
    """Return the decimal exponent of a finite number that is not zero."""
    return int(f"{abs(value):.16e}".partition("e")[2])


def _fixed(value: float, decimals: int) -> str:
    """Return a number with ``decimals`` decimals (negative: rounded left of the point), thousands set apart."""
    rounded = round(value, decimals) if decimals < 0 else value
    whole, point, rest = f"{rounded:.{max(decimals, 0)}f}".partition(".")
    sign = MINUS if whole.startswith("-") and float(f"{rounded:.{max(decimals, 0)}f}") != 0 else ""
    digits = whole.lstrip("-")
    grouped = f"{int(digits):,}".replace(",", THIN_SPACE) if len(digits) > 4 else digits
    return sign + grouped + point + rest


def _scaled(exponent: int) -> bool:
    """Return whether a number of this exponent is written with a power of ten."""
    return exponent < -2 or exponent > 4


def number(value: float, digits: int = 3) -> str:
    """Return a number with ``digits`` significant digits: ``0.974``, ``4.00 × 10⁻⁴``.

    Parameters
    ----------
    value : float
        NaN gives an en dash, infinity ``∞``.
    digits : int
        Significant digits, at least 1.
    """
    if math.isnan(value):
        return MISSING
    if math.isinf(value):
        return "∞" if value > 0 else f"{MINUS}∞"
    if value == 0:
        return "0"
    mantissa, _, power = f"{value:.{digits - 1}e}".partition("e")
    exponent = int(power)
    if _scaled(exponent):
        return f"{mantissa.replace('-', MINUS)}{THIN_SPACE}{TIMES}{THIN_SPACE}{power_of_ten(exponent)}"
    return _fixed(value, digits - 1 - exponent)


def quantity(value: float, unit: str, digits: int = 3) -> str:
    """Return a number and its unit: ``0.42 nm``; an en dash without a unit where there is no number."""
    text = number(value, digits)
    return text if text == MISSING or not unit else f"{text}{THIN_SPACE}{unit_text(unit)}"


def conductance(value_g0: float, digits: int = 3) -> str:
    """Return a conductance in G0: ``3.40 × 10⁻⁴ G₀``."""
    return quantity(value_g0, "G0", digits)


def prefixed(value: float, unit: str, digits: int = 3) -> str:
    """Return a quantity with an SI prefix: ``26.3 nS``, ``38.0 MΩ``.

    Parameters
    ----------
    value : float
        In the unit without a prefix; NaN gives an en dash, infinity ``∞``.
    unit : str
        "S", "ohm", "A", "V", "Hz" ...
    digits : int
        Significant digits.
    """
    if not math.isfinite(value):
        text = number(value)
        return text if text == MISSING else f"{text}{THIN_SPACE}{unit_text(unit)}"
    if value == 0:
        return f"0{THIN_SPACE}{unit_text(unit)}"
    rounded = float(f"{value:.{digits - 1}e}")
    exponent = _exponent(rounded)
    thousand = min(max(3 * math.floor(exponent / 3), min(_PREFIXES)), max(_PREFIXES))
    decimals = digits - 1 - (exponent - thousand)
    return f"{_fixed(rounded / 10.0**thousand, decimals)}{THIN_SPACE}{_PREFIXES[thousand]}{unit_text(unit)}"


def _uncertainty_decimals(uncertainty: float) -> int:
    """Return the decimals to which a value with this uncertainty is written.

    One digit of the uncertainty is kept, two where the first would be a 1 (rounding 0.14 to 0.1 loses 30 %).
    """
    rounded = float(f"{uncertainty:.1e}")
    exponent = _exponent(rounded)
    first = f"{rounded:.1e}"[0]
    return -exponent + (1 if first == "1" else 0)


def _in_last_digits(uncertainty: float, decimals: int, whole_units: bool) -> str:
    """Return an uncertainty in units of the last digit, or as a number where the value has none after the point."""
    if whole_units:
        return _fixed(uncertainty, min(decimals, 0))
    return str(round(uncertainty * 10**decimals))


def value_with_uncertainty(value: float, low: float, high: float, unit: str = "") -> str:
    """Return a value with its interval in brackets: ``4.0(2) × 10⁻⁴ G₀``, ``0.970(+12 −8) G₀``.

    Parameters
    ----------
    value : float
    low, high : float
        Ends of the interval.  Where they are NaN, or do not enclose the value within its rounding, the value stands
        with three digits and without brackets.
    unit : str
        "G0", "S", "nm" ...

    Returns
    -------
    str
        The half width in units of the last digits; both sides where they differ by more than a third.
    """
    down, up = value - low, high - value
    if not all(map(math.isfinite, (value, down, up))) or min(down, up) < 0 or max(down, up) == 0:
        return quantity(value, unit)
    both = (down + up) / 2
    uneven = abs(up - down) > both / 3
    smallest = min(part for part in (down, up, both) if part > 0) if uneven else both
    size = max(abs(value), both)
    power = _exponent(float(f"{size:.2e}"))
    shift = power if _scaled(power) else 0
    unit_part = f"{THIN_SPACE}{unit_text(unit)}" if unit else ""
    power_part = f"{THIN_SPACE}{TIMES}{THIN_SPACE}{power_of_ten(shift)}" if shift else ""
    factor = 10.0**-shift
    decimals = min(_uncertainty_decimals(smallest * factor), 12)
    whole = decimals <= 0
    brackets = _in_last_digits(both * factor, decimals, whole)
    if uneven:
        upper, lower = (_in_last_digits(part * factor, decimals, whole) for part in (up, down))
        if upper != lower:
            brackets = f"+{upper} {MINUS}{lower}"
    return f"{_fixed(value * factor, decimals)}({brackets}){power_part}{unit_part}"


def interval(low: float, high: float, unit: str = "", digits: int = 3) -> str:
    """Return a range: ``1.3 × 10⁻⁴ to 1.3 × 10⁻³ G₀``."""
    unit_part = f"{THIN_SPACE}{unit_text(unit)}" if unit else ""
    return f"{number(low, digits)} to {number(high, digits)}{unit_part}"
