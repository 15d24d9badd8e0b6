"""Units as people write them, checked against a table: "nA", "µA", "V/nA", "2e²/h", "Å", "dec".

A unit is one quantity word with an optional SI prefix, or a quotient of two.  An unknown unit is an error that names
the nearest known ones; no unit is ever guessed.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

from meseta.errors import InputError, nearest
from meseta.quantities import G0_SIEMENS

__all__ = ["Unit", "is_unit", "parse_unit", "unit_factor"]


@dataclass(frozen=True)
class Unit:
    """A unit: what it measures, in base units (V, A, S, ohm, s, m, Hz, N, K ...), and its size in them.

    ``dimension`` is a base unit or a quotient of two, such as "A" or "V/A"; "1" is a bare number, "dec" a logarithm to
    base 10, whose ``factor`` is the conductance that it is taken of, in G0 ("log10(G/S)" is one of siemens).
    """

    text: str
    dimension: str
    factor: float


_PREFIXES: Final = {
    "": 1.0, "f": 1e-15, "p": 1e-12, "n": 1e-9, "u": 1e-6, "m": 1e-3, "c": 1e-2, "k": 1e3, "M": 1e6, "G": 1e9,
    "T": 1e12,
}  # fmt: skip
_BASES: Final = {
    # written: (base unit, size, takes prefixes)
    "V": ("V", 1.0, True),
    "A": ("A", 1.0, True),
    "S": ("S", 1.0, True),
    "ohm": ("ohm", 1.0, True),
    "s": ("s", 1.0, True),
    "Hz": ("Hz", 1.0, True),
    "N": ("N", 1.0, True),
    "K": ("K", 1.0, True),
    "W": ("W", 1.0, True),
    "m": ("m", 1.0, True),
    "angstrom": ("m", 1e-10, False),
    "min": ("s", 60.0, False),
    "h": ("s", 3600.0, False),
    "G0": ("S", G0_SIEMENS, True),
    "e2/h": ("S", G0_SIEMENS / 2, False),
    "dec": ("dec", 1.0, False),
    "%": ("1", 1e-2, False),
    "1": ("1", 1.0, False),
}
_WORDS: Final = {
    "volt": "V", "volts": "V", "ampere": "A", "amperes": "A", "amp": "A", "amps": "A", "siemens": "S", "mho": "S",
    "Ω": "ohm", "Ohm": "ohm", "ohms": "ohm", "Ohms": "ohm", "OHM": "ohm", "second": "s", "seconds": "s", "sec": "s",
    "hertz": "Hz", "hz": "Hz", "meter": "m", "metre": "m", "meters": "m", "metres": "m", "Å": "angstrom",
    "A.": "angstrom", "Angstrom": "angstrom", "angstroms": "angstrom", "Angstroms": "angstrom", "ang": "angstrom",
    "g0": "G0", "G_0": "G0", "G₀": "G0", "2e2/h": "G0", "2e^2/h": "G0", "2e²/h": "G0", "(2e2/h)": "G0",
    "(2e^2/h)": "G0", "(2e²/h)": "G0", "2e**2/h": "G0", "G/G0": "G0", "G/G_0": "G0", "g/g0": "G0",
    "e^2/h": "e2/h", "e²/h": "e2/h", "e**2/h": "e2/h",
    "decade": "dec", "decades": "dec", "dex": "dec", "log10(G/G0)": "dec", "log(G/G0)": "dec", "log10 G/G0": "dec",
    "log10(G0)": "dec", "log10 G0": "dec", "lg(G/G0)": "dec", "logG0": "dec", "micron": "um", "minutes": "min",
    "hours": "h", "hour": "h", "sps": "Hz", "S/s": "Hz", "Sa/s": "Hz", "samples/s": "Hz", "kelvin": "K", "Kelvin": "K",
    "newton": "N", "percent": "%", "nanometer": "nm", "nanometre": "nm", "nanometers": "nm", "nanometres": "nm",
    "nanoampere": "nA", "nanoamp": "nA", "microampere": "uA", "picoampere": "pA", "millivolt": "mV", "millivolts": "mV",
    "milliseconds": "ms", "microseconds": "us", "microsiemens": "uS", "nanosiemens": "nS",
    # as they are written in Cyrillic letters (GOST 8.417)
    "В": "V", "мВ": "mV", "мкВ": "uV", "А": "A", "мА": "mA", "мкА": "uA", "нА": "nA", "пА": "pA", "См": "S",
    "мСм": "mS", "мкСм": "uS", "нСм": "nS", "Ом": "ohm", "кОм": "kohm", "МОм": "Mohm", "ГОм": "Gohm", "с": "s",
    "мс": "ms", "мкс": "us", "Гц": "Hz", "кГц": "kHz", "м": "m", "мкм": "um", "нм": "nm", "пм": "pm",
}  # fmt: skip
_LOGARITHM: Final = re.compile(r"(?:log10|log|lg)\s*\(\s*(?:[Gg]\s*/\s*)?\(?(\S+?)\)?\s*\)", re.IGNORECASE)
_SAME_SIGNS: Final = str.maketrans({"µ": "u", "μ": "u", "Å": "Å", "Ω": "Ω", "−": "-", "–": "-"})


def _plain(text: str) -> str:
    """Return the unit without decoration: one micro sign, no brackets round it, no spaces at the ends."""
    text = text.strip().translate(_SAME_SIGNS)
    while len(text) > 2 and text[0] + text[-1] in ("[]", "()", "{}") and text not in _WORDS:
        text = text[1:-1].strip()
    return text


def _simple(text: str) -> Unit | None:
    """Return the unit written without a quotient; None where it is not known."""
    text = _WORDS.get(text, text)
    if text in _BASES:
        base, size, _ = _BASES[text]
        return Unit(text, base, size)
    for prefix, power in _PREFIXES.items():
        rest = text[len(prefix) :]
        word = _WORDS.get(rest, rest) if len(rest) > 1 or rest in ("Ω",) else rest
        if prefix and text.startswith(prefix) and word in _BASES and _BASES[word][2]:
            base, size, _ = _BASES[word]
            return Unit(text, base, size * power)
    return None


def _quotient(text: str) -> Unit | None:
    match = re.fullmatch(r"(.+?)\s*(?:/|\bper\b|_per_)\s*(.+)", text)
    if match is None:
        product = re.fullmatch(r"(\S+?)[\s·*]+(\S+?)\^?(?:-1|⁻¹)", text)
        if product is None:
            return None
        match = product
    above, below = _simple(match[1].strip()), _simple(match[2].strip())
    if above is None or below is None:
        return None
    if above.dimension == below.dimension:
        return Unit(text, "1", above.factor / below.factor)
    return Unit(text, f"{above.dimension}/{below.dimension}", above.factor / below.factor)


def _logarithm(text: str) -> Unit | None:
    """Return the unit of a logarithm of conductance ("log10(G/S)", "lg(G/nS)"); None where it is none."""
    match = _LOGARITHM.fullmatch(text)
    taken_of = _simple(match[1]) if match else None
    if taken_of is None or taken_of.dimension != "S":
        return None
    return Unit(text, "dec", float(f"{taken_of.factor / G0_SIEMENS:.15g}"))


@lru_cache(maxsize=4096)
def _parsed(text: str) -> Unit | None:
    plain = _plain(text)
    return _simple(plain) or _logarithm(plain) or _quotient(plain)


def is_unit(text: str) -> bool:
    """Return whether a text is a known unit."""
    return bool(text.strip()) and _parsed(text) is not None


def parse_unit(text: str, where: str = "") -> Unit:
    """Return the unit that a text names.

    Raises
    ------
    InputError
        Where it is not known, with the nearest known ones.
    """
    found = _parsed(text)
    if found is None:
        raise InputError(f"'{text}' is not a known unit", where, nearest(_plain(text), list(_known())))
    return found


def unit_factor(text: str, base: str, where: str = "") -> float:
    """Return the number that turns values in unit ``text`` into ``base`` (also a unit, such as "nm" or "V/A").

    Raises
    ------
    InputError
        Where the unit is not known or measures something else.
    """
    given, wanted = parse_unit(text, where), parse_unit(base)
    if given.dimension != wanted.dimension:
        raise InputError(f"unit '{text}' does not fit here", where, f"give a unit such as {base}")
    return given.factor / wanted.factor


def _known() -> Iterator[str]:
    common = (
        "nA",
        "uA",
        "pA",
        "mA",
        "mV",
        "uV",
        "nS",
        "uS",
        "nm",
        "um",
        "pm",
        "ms",
        "us",
        "kohm",
        "Mohm",
        "Gohm",
        "kHz",
    )
    yield from (*_BASES, *common, "V/A", "V/nA", "nm/V", "nm/s", "V/dec", "Å", "2e2/h")
