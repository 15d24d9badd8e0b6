"""Numbers as printed.  Bracket notation: JCGM 100:2008 (GUM), 7.2.2: "m_S = 100.021 47(35) g"."""

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from meseta import typeset

S = typeset.THIN_SPACE


def test_the_example_of_the_gum():
    # JCGM 100:2008, 7.2.2 gives u_c = 0.35 mg with two digits; one digit is kept here, so (4) in the last of 100.0215.
    assert typeset.value_with_uncertainty(100.02147, 100.02112, 100.02182, "g") == f"100.0215(4){S}g"


@pytest.mark.parametrize(
    ("value", "low", "high", "text"),
    [
        (4.0e-4, 3.8e-4, 4.2e-4, f"4.0(2){S}×{S}10⁻⁴{S}G₀"),
        (0.97, 0.96, 0.98, f"0.970(10){S}G₀"),
        (1.88, 1.85, 1.91, f"1.88(3){S}G₀"),
        (1.88, 1.86, 1.93, f"1.88(+5 −2){S}G₀"),
        (9.9999e-5, 9.98e-5, 1.002e-4, f"1.000(2){S}×{S}10⁻⁴{S}G₀"),
        (math.nan, 1.0, 2.0, "–"),
        (0.5, math.nan, math.nan, f"0.500{S}G₀"),
    ],
)
def test_value_with_uncertainty(value, low, high, text):
    assert typeset.value_with_uncertainty(value, low, high, "G0") == text


def test_numbers():
    assert typeset.number(0.974321) == "0.974"
    assert typeset.number(-0.0004) == f"−4.00{S}×{S}10⁻⁴"
    assert typeset.number(0.99999) == "1.00"
    assert typeset.integer(1388) == f"1{S}388"
    assert typeset.integer(-12345678) == f"−12{S}345{S}678"
    assert typeset.percent(524, 1388) == f"37.8{S}%"
    assert typeset.percent(1, 0) == "–"
    assert [typeset.power_of_ten(n) for n in (-12, 0, 1, 2)] == ["10⁻¹²", "1", "10", "10²"]


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (2.634e-8, "S", f"26.3{S}nS"),
        (3.796e7, "ohm", f"38.0{S}MΩ"),
        (999.96, "S", f"1.00{S}kS"),
        (-1.2e-12, "A", f"−1.20{S}pA"),
        (0.0, "A", f"0{S}A"),
        (math.inf, "ohm", f"∞{S}Ω"),
    ],
)
def test_prefixes(value, unit, text):
    assert typeset.prefixed(value, unit) == text


def _read(text: str) -> float:
    plain = text.translate(str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻−", "0123456789--")).replace(S, "")
    mantissa, _, power = plain.partition("×10")
    return float(re.sub(r"\(.*\)", "", mantissa)) * 10.0 ** int(power or 1 if "×" in plain else 0)


@given(st.floats(-1e12, 1e12).filter(lambda x: x == 0 or abs(x) > 1e-12))
def test_a_number_reads_back_within_its_rounding(value):
    text = typeset.number(value)
    assert _read(text) == pytest.approx(value, rel=5.1e-3)


@given(st.floats(1e-9, 1e9), st.floats(1e-6, 0.5))
def test_a_bracketed_value_reads_back_within_a_third_of_its_uncertainty(value, share):
    half = value * share
    text = typeset.value_with_uncertainty(value, value - half, value + half)
    assert abs(_read(text) - value) <= half / 2.9
