"""Divider, source resistance, reference resistor and series resistance against circuits solved by hand or by scipy."""

from __future__ import annotations

import numpy as np
import pytest
from intake_files import G0_SIEMENS, recipe, record, volts

from meseta import intake
from meseta.errors import InputError

GAIN = 1e5
TRUE_G0 = np.array([0.01, 0.1, 1.0, 3.0])


def divided(source_volt: float, upper_ohm: float, lower_ohm: float, series_ohm: float, conductance_g0: np.ndarray):
    """Return the current through a junction behind a loaded divider and a resistor, from Kirchhoff's two equations.

    Unknowns are the voltage of the tap and the current: (source - tap)/upper = tap/lower + I and
    tap = I (series + 1/G).
    """
    currents = []
    for siemens in conductance_g0 * G0_SIEMENS:
        matrix = [[1 / upper_ohm + 1 / lower_ohm, 1.0], [1.0, -(series_ohm + 1 / siemens)]]
        currents.append(np.linalg.solve(matrix, [source_volt / upper_ohm, 0.0])[1])
    return np.array(currents)


def test_divider_source_and_series_resistance_undo_a_circuit(tmp_path):
    """10 V through 99 kohm and 1 kohm: divided by 100, source resistance 990 ohm; 500 ohm in series."""
    current = divided(10.0, 99e3, 1e3, 500.0, TRUE_G0)
    path = record(tmp_path, amplifier=volts(current * GAIN))
    stated = {"gain_volt_per_ampere": GAIN, "bias_volt": 10.0}
    made = recipe(**stated, bias_divided_by=100.0, source_resistance_ohm=990.0, series_resistance_ohm=500.0)
    np.testing.assert_allclose(intake.read(path, made).conductance, TRUE_G0, rtol=1e-6)
    # each is a correction of its own: without the source resistance what is left is a contact behind 990 ohm
    without = intake.read(path, recipe(**stated, bias_divided_by=100.0, series_resistance_ohm=500.0)).conductance
    np.testing.assert_allclose(without, TRUE_G0 / (1 + 990.0 * G0_SIEMENS * TRUE_G0), rtol=1e-6)


@pytest.mark.parametrize("voltage_gain", [1.0, -20.0])
def test_a_reference_resistor_measures_the_current_and_shares_the_bias(tmp_path, voltage_gain):
    """Worked: 1/G0 = 12906.4037 ohm and 10 kohm share 100 mV: 43.655 mV over the resistor are one G0."""
    resistor, bias = 1e4, 0.1
    share = bias * resistor / (resistor + 12906.403729652257 / TRUE_G0)
    assert share[2] == pytest.approx(0.0436558, rel=1e-5)
    path = record(tmp_path, amplifier=volts(share * voltage_gain))
    made = recipe(reference_resistance_ohm=resistor, voltage_gain=voltage_gain, bias_volt=bias)
    np.testing.assert_allclose(intake.read(path, made).conductance, TRUE_G0, rtol=1e-6)


def test_a_gain_and_a_reference_resistor_contradict_each_other(tmp_path):
    path = record(tmp_path, amplifier=volts(np.ones(20)))
    with pytest.raises(InputError, match="both a gain") as raised:
        intake.read(path, recipe(gain_volt_per_ampere=1e6, reference_resistance_ohm=1e4, bias_volt=0.1))
    assert "series_resistance_ohm" in raised.value.remedy


def test_a_recorded_bias_is_divided_and_an_offset_of_the_junction_is_not(tmp_path):
    current = (0.1 - 0.002) * TRUE_G0 * G0_SIEMENS
    bias = (np.full(4, 1.0), {"unit": "V"})
    path = record(tmp_path, amplifier=volts(current * GAIN), bias=bias)
    made = recipe(gain_volt_per_ampere=GAIN, bias_divided_by=10.0, bias_offset_volt=0.002)
    np.testing.assert_allclose(intake.read(path, made).conductance, TRUE_G0, rtol=1e-6)


@pytest.mark.parametrize("name", ["series_resistance_ohm", "source_resistance_ohm"])
def test_readings_beyond_the_ceiling_of_all_that_is_in_series_are_counted(tmp_path, name):
    """Behind 100 kohm no reading may reach 0.129064 G0 = 1/(100 kohm G0)."""
    measured = np.array([0.05, 0.129, 0.1291, 5.0])
    path = record(tmp_path, amplifier=volts(measured * G0_SIEMENS * 0.1 * GAIN))
    traces = intake.read(path, recipe(gain_volt_per_ampere=GAIN, bias_volt=0.1, **{name: 1e5}))
    assert np.isnan(traces.conductance).tolist() == [False, False, True, True]
    assert traces.notes["samples_without_conductance"] == 2


def test_corrections_that_cannot_apply_are_said(tmp_path):
    """A recorded conductance was divided by somebody's bias: a divider given here changes nothing, and it is said."""
    path = record(tmp_path, conductance=(TRUE_G0, {"unit": "G0"}))
    traces = intake.read(path, recipe(bias_divided_by=10.0))
    np.testing.assert_allclose(traces.conductance, TRUE_G0, rtol=1e-6)
    assert any("bias_divided_by has no effect" in text for text in traces.notes["assumptions"])


def test_the_recording_may_state_its_divider_and_source(tmp_path):
    current = divided(10.0, 99e3, 1e3, 0.0, TRUE_G0)
    attributes = {
        "unit": "V",
        "gain": "1e5 V/A",
        "bias": "10 V",
        "bias_divided_by": 100,
        "source_resistance": "990 ohm",
    }
    path = record(tmp_path, amplifier=(current * GAIN, attributes))
    traces = intake.read(path, recipe())
    np.testing.assert_allclose(traces.conductance, TRUE_G0, rtol=1e-6)
    assert traces.notes["calibration"]["source_resistance_ohm"] == {"value": 990.0, "from": "recording"}
