"""Constants and elementary formulas against tests/reference/reference_values.json (CODATA 2022, computed)."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meseta import quantities as q

REFERENCE = {
    entry["name"]: entry
    for entry in json.loads((Path(__file__).parents[1] / "reference" / "reference_values.json").read_text())["values"]
}


def test_constants_are_codata_2022():
    # CODATA 2022 (exact in the SI): G0 = 2e^2/h = 7.748091729863649e-5 S, h/2e^2 = 12906.403729652257 ohm.
    assert pytest.approx(7.748091729863649e-05, rel=1e-12) == q.G0_SIEMENS
    assert pytest.approx(12906.403729652257, rel=1e-12) == q.R0_OHM
    assert pytest.approx(1.602176634e-19, rel=0) == q.ELEMENTARY_CHARGE_COULOMB


def test_current_to_conductance():
    # 1 nA at 100 mV is 1.290640373e-4 G0 (computed from CODATA 2022 values).
    assert q.conductance_from_current(1e-9, 0.1) == pytest.approx(1.290640373e-4, rel=1e-9)
    assert q.conductance_from_current(7.748091730e-6, 0.1) == pytest.approx(1.0, rel=1e-9)
    assert np.isnan(q.conductance_from_current(1e-9, 0.0))
    assert q.conductance_from_current(2e-9, 0.11, 1e-9, 0.01) == pytest.approx(1.290640373e-4, rel=1e-9)


@pytest.mark.parametrize(
    ("ohm", "true", "measured"),
    [
        # Computed from g_m = g_c / (1 + R_s G0 g_c) with CODATA 2022 values.
        (500, [1, 2, 3, 4, 5], [0.9627043904, 1.856181365, 2.687638908, 3.463317904, 4.188649070]),
        (400, [1, 2, 3], [0.9699392858, 1.883266243, 2.744796756]),
        (100e3, [1e-4], [9.992257907e-5]),
    ],
)
def test_series_resistance_worked_values(ohm, true, measured):
    assert q.with_series_resistance(true, ohm) == pytest.approx(measured, rel=1e-9)
    assert q.remove_series_resistance(measured, ohm) == pytest.approx(true, rel=1e-8)


def test_series_resistance_ceiling_and_error():
    # 100 kohm: ceiling 0.1290640373 G0; 0.1 measured is 0.4440678216 true; sigma 0.02 at 2 G0 behind 500 ohm.
    assert q.remove_series_resistance(0.1, 100e3) == pytest.approx(0.4440678216, rel=1e-9)
    assert np.isnan(q.remove_series_resistance([0.12906404, 0.2], 100e3)).all()
    assert q.series_resistance_error(2.0, 0.02, 500) == pytest.approx(0.02350061776, rel=1e-9)


@given(st.floats(1e-9, 50), st.floats(0, 250))
def test_series_resistance_round_trip(contact, ohm):
    assert q.remove_series_resistance(q.with_series_resistance(contact, ohm), ohm) == pytest.approx(contact, rel=1e-9)


def test_tunnelling_slope_of_a_square_barrier():
    # 4 eV: 0.8899853020, 5 eV: 0.9950338171 decades per angstrom (computed from CODATA 2022).
    assert q.decades_per_nm([4.0, 5.0]) == pytest.approx([8.899853020, 9.950338171], rel=1e-9)
    assert q.barrier_from_decay(-9.950338171) == pytest.approx(5.0, rel=1e-9)


def test_johnson_noise():
    # 1 G0, 300 K, 10 kHz: 1.132999299e-10 A (computed from the Johnson-Nyquist formula).
    assert q.johnson_current_rms(1.0, 300, 1e4) == pytest.approx(1.132999299e-10, rel=1e-9)
    assert q.johnson_current_rms(1.0, 4.2, 1e4) == pytest.approx(1.340582850e-11, rel=1e-9)


def test_reference_file_agrees_with_our_constants():
    assert REFERENCE["e"]["value"] == q.ELEMENTARY_CHARGE_COULOMB
    assert REFERENCE["k_B"]["value"] == q.BOLTZMANN_JOULE_PER_KELVIN
