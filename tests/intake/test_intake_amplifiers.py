"""Laws of amplifiers: both polarities of a logarithmic one, and a measured curve."""

from __future__ import annotations

import numpy as np
import pytest
from intake_files import G0_SIEMENS, recipe, record, volts
from scipy import constants
from scipy.interpolate import PchipInterpolator

from meseta import intake
from meseta.errors import RecipeError
from meseta.intake.calibration.curve import curve_of
from meseta.intake.calibration.kernels import follow_curve
from meseta.recipe import Recipe
from meseta.traces import Quality

BIAS = 0.1


@pytest.mark.parametrize("bias", [BIAS, -BIAS])
def test_a_logarithmic_amplifier_that_shows_sizes_takes_the_sign_of_the_bias(tmp_path, bias):
    """One volt a decade from 1 nA: 3 V is 1 uA, and at a bias of -100 mV that is -1 uA, the same conductance."""
    path = record(tmp_path, amplifier=volts([0.0, 3.0, -2.0]))
    made = recipe(volt_per_decade=1.0, reference_ampere=1e-9, bias_volt=bias)
    expected = np.array([1e-9, 1e-6, 1e-11]) / (BIAS * G0_SIEMENS)
    np.testing.assert_allclose(intake.read(path, made).conductance, expected, rtol=1e-6)


@pytest.mark.parametrize("slope", [1.0, -1.0, 1e-3])
def test_both_polarities_follow_two_junctions_back_to_back(tmp_path, slope):
    """I = 2 I_s sinh(qU/kT): the sum of two diode currents (Shockley, Bell Syst. Tech. J. 28, 435).

    With kT/q ln 10 as the volts per decade; odd in the volts, zero at zero, decades apart far from there.
    """
    kelvin = slope * constants.e / (constants.k * np.log(10))  # the temperature at which a decade takes that voltage
    reading = np.array([-3.0, -1.0, -0.01, 0.0, 0.01, 1.0, 3.0]) * abs(slope)
    exponent = constants.e * reading / (constants.k * kelvin)
    leakage = 1e-10
    diodes = leakage * (np.exp(exponent) - 1) - leakage * (np.exp(-exponent) - 1)
    path = record(tmp_path, amplifier=volts(reading))
    made = recipe(volt_per_decade=slope, reference_ampere=leakage, bias_volt=BIAS, log_polarity="both")
    read = intake.read(path, made).conductance
    np.testing.assert_allclose(read, diodes / (BIAS * G0_SIEMENS), rtol=1e-6)
    np.testing.assert_array_equal(read, -read[::-1])
    assert abs(read[6] / read[5]) == pytest.approx(100, rel=0.011)  # 1000.001 / 9.9 less one is 1 %


def log_curve(points: int) -> list[tuple[float, float]]:
    return [(float(u), 1e-9 * 10 ** float(u)) for u in np.linspace(-3, 3, points)]


@pytest.mark.parametrize("points", [2, 3, 7, 61])
def test_a_curve_measured_on_a_logarithmic_amplifier_gives_its_law(tmp_path, points):
    """A straight line in log I comes back exactly, however few points were measured."""
    reading = np.linspace(-3, 3, 1001)
    path = record(tmp_path, amplifier=volts(reading))
    read = intake.read(path, recipe(amplifier_curve=log_curve(points), bias_volt=BIAS)).conductance
    np.testing.assert_allclose(read, 1e-9 * 10**reading / (BIAS * G0_SIEMENS), rtol=3e-7)


def test_a_curve_of_both_signs_is_odd_and_close_to_what_it_was_measured_on(tmp_path):
    """21 points of a sinh over 6 decades: between points the current is within 2 %; it passes through every point."""
    at = np.linspace(-3, 3, 21)
    law = lambda u: 1e-9 * (10**u - 10**-u)  # noqa: E731
    points = [(float(u), float(law(u))) for u in at]
    reading = np.linspace(-3, 3, 241)
    path = record(tmp_path, amplifier=volts(reading))
    read = intake.read(path, recipe(amplifier_curve=points, bias_volt=BIAS)).conductance * BIAS * G0_SIEMENS
    far = np.abs(reading) > 0.3
    np.testing.assert_allclose(read[far], law(reading[far]), rtol=0.02)
    np.testing.assert_allclose(read[::12], law(at), rtol=1e-6, atol=1e-18)
    assert (np.diff(read) > 0).all()


def test_readings_beyond_the_curve_are_flagged_and_have_no_number(tmp_path):
    path = record(tmp_path, amplifier=volts([-3.01, -3.0, 0.0, 3.0, 3.01, 50.0, np.nan]))
    traces = intake.read(path, recipe(amplifier_curve=log_curve(7), bias_volt=BIAS))
    assert np.isnan(traces.conductance).tolist() == [True, False, False, False, True, True, True]
    bits = traces.quality.read(0, 7).tolist()
    assert bits == [Quality.UNTRUSTED, 0, 0, 0, Quality.SATURATED, Quality.SATURATED, 0]
    assert traces.notes["samples_without_conductance"] == 4
    assert traces.notes["calibration"]["amplifier_curve"]["value"] == "7 points from -3 to 3 V"
    falling = [(-u, i) for u, i in log_curve(7)]
    bits = intake.read(path, recipe(amplifier_curve=falling, bias_volt=BIAS)).quality.read(0, 7).tolist()
    assert bits == [Quality.SATURATED, 0, 0, 0, Quality.UNTRUSTED, Quality.UNTRUSTED, 0]


@pytest.mark.parametrize("scale", [1.0, 1e-6])
@pytest.mark.parametrize("sign", [1, -1, 0])
def test_the_compiled_curve_equals_scipy(scale, sign):
    """Reference: scipy.interpolate.PchipInterpolator in the same variable."""
    rng = np.random.default_rng(12)
    volt = np.sort(rng.uniform(-5, 5, 30))
    steps = np.cumsum(rng.exponential(0.4, 30))
    ampere = scale * (np.exp(steps) * sign if sign else np.sinh(steps - steps[11]))
    curve = curve_of(list(zip(volt.tolist(), ampere.tolist(), strict=True)))
    asked = rng.uniform(volt[0], volt[-1], 500)
    if sign:
        expected = sign * np.exp(PchipInterpolator(volt, np.log(np.abs(ampere)))(asked))
    else:
        smallest = np.abs(ampere[ampere != 0]).min()
        expected = smallest * np.sinh(PchipInterpolator(volt, np.arcsinh(ampere / smallest))(asked))
    found, bits = np.empty(500), np.zeros(500, np.uint8)
    follow_curve(asked, volt, curve.coefficients, curve.scale_ampere, curve.sign, 8, 1, found, bits)
    np.testing.assert_allclose(found, expected, rtol=1e-11, atol=1e-13 * scale)
    assert not bits.any()


def test_a_curve_file_is_read_once_and_its_numbers_are_kept(tmp_path):
    (tmp_path / "curve.txt").write_text("# measured with a resistor\nU (V); I (A)\n-3; 1e-12\n0; 1e-9\n3; 1e-6\n")
    (tmp_path / "lab.toml").write_text('[calibration]\namplifier_curve = "curve.txt"\nbias_volt = 0.1\n')
    loaded = Recipe.load(tmp_path / "lab.toml")
    assert loaded.calibration.amplifier_curve == [(-3.0, 1e-12), (0.0, 1e-9), (3.0, 1e-6)]
    told = Recipe().with_settings([f"calibration.amplifier_curve={tmp_path / 'curve.txt'}"])
    assert told.calibration.amplifier_curve == loaded.calibration.amplifier_curve
    (tmp_path / "curve.txt").unlink()
    assert Recipe.parse(loaded.text()) == loaded
    path = record(tmp_path, amplifier=volts([1.0, 1.0]))
    expected = 1e-8 / (BIAS * G0_SIEMENS)
    assert intake.read(path, Recipe.parse(loaded.text())).conductance[0] == pytest.approx(expected, rel=1e-6)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("0 1e-9\n", "at least two points"),
        ("0 1e-9\n1 2e-9\n2 1e-9\n", "must rise, or fall"),
        ("0 1e-9\n0 2e-9\n", "twice"),
        ("0 1e-9\n1\n", "line 2 is not two numbers"),
        ("U (mV), I (A)\n0, 1e-9\n1, 2e-9\n", "'mV' is neither V nor A"),
        ("", "no points"),
        ("0 nan\n1 2e-9\n", "cannot be"),
    ],
)
def test_a_bad_curve_file_is_one_clear_message(tmp_path, text, said):
    (tmp_path / "curve.txt").write_text(text)
    with pytest.raises(RecipeError, match=said):
        Recipe().with_settings([f"calibration.amplifier_curve={tmp_path / 'curve.txt'}"])


def test_a_recipe_that_was_not_handed_over_opens_no_file(tmp_path):
    (tmp_path / "curve.txt").write_text("0 1e-9\n1 1e-8\n")
    with pytest.raises(RecipeError, match="cannot be"):
        Recipe.parse(f'[calibration]\namplifier_curve = "{tmp_path / "curve.txt"}"\n')
