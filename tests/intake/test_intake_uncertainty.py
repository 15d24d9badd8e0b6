"""Errors of the calibration: as stated, as the recording shows, and propagated to a position."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
from intake_files import G0_SIEMENS, recipe, record, volts

from meseta import intake
from meseta.intake.calibration.running_floor import offset_error, running_offset
from meseta.peaks import calibration_shifts

STATED = {"gain_volt_per_ampere": 1e6, "bias_volt": 0.1}


def test_stated_errors_become_one_result_that_moves_a_position(tmp_path):
    """Worked: 1 % of gain and 0.5 % of bias at 2 G0 are 0.02236 G0, 5 ohm 0.00155 G0; 1 nA at 100 mV is 1.29e-4 G0."""
    path = record(tmp_path, amplifier=volts(np.ones(20)))
    errors = {
        "gain_relative_error": 0.01,
        "bias_relative_error": 0.005,
        "series_resistance_error_ohm": 5.0,
        "offset_error_ampere": 1e-9,
        "displacement_relative_error": 0.05,
    }
    made = recipe(**STATED, **errors)
    traces = intake.read(path, made)
    assert not set(errors) & set(traces.notes["calibration"])
    found = intake.calibration_errors(traces, made.calibration)
    assert (found.gain_relative, found.bias_relative, found.displacement_relative) == (0.01, 0.005, 0.05)
    assert found.offset_g0 == pytest.approx(1.290640e-4, rel=1e-6)
    assert found.unknown == ()
    shifts = calibration_shifts([2.0], **found.of_positions())
    assert np.hypot(shifts.gain_g0, shifts.bias_g0)[0] == pytest.approx(0.02236068, rel=1e-6)
    assert shifts.series_resistance_g0[0] == pytest.approx(4 * 5 * G0_SIEMENS, rel=1e-9)
    assert shifts.total_g0[0] == pytest.approx(np.sqrt(0.02236068**2 + 0.00154962**2 + 1.29064e-4**2), rel=1e-5)


def test_what_is_not_known_is_said_and_moves_nothing(tmp_path):
    path = record(tmp_path, amplifier=volts(np.ones(20)))
    made = recipe(**STATED, bias_relative_error=0.01)
    found = intake.calibration_errors(intake.read(path, made), made.calibration)
    assert found.unknown == ("gain_relative", "offset_g0", "series_resistance_ohm", "displacement_relative")
    assert found.of_positions() == {
        "gain_relative": 0.0, "bias_relative": 0.01, "offset_g0": 0.0, "series_resistance_ohm": 0.0
    }  # fmt: skip


def test_errors_that_a_recording_states_hold_where_the_recipe_says_nothing(tmp_path):
    """1 nA behind a divider by 10 of 1 V is the 1.290640e-4 G0 of 1 nA at 100 mV."""
    path = record(tmp_path, amplifier=volts(np.ones(20)))
    with h5py.File(path, "a") as file:
        file.attrs.update(gain_relative_error=0.02, bias_relative_error=0.03, offset_error_ampere=1e-9)
    made = recipe(gain_volt_per_ampere=1e6, bias_volt=1.0, bias_divided_by=10.0, bias_relative_error=0.005)
    found = intake.calibration_errors(intake.read(path, made), made.calibration)
    assert (found.gain_relative, found.bias_relative) == (0.02, 0.005)
    assert found.offset_g0 == pytest.approx(1.290640e-4, rel=1e-6)
    assert found.grounds == {"gain_relative": "recording", "bias_relative": "recipe", "offset_g0": "recording"}


@pytest.mark.parametrize("used", [False, True])
def test_two_gains_that_disagree_are_an_error_of_the_gain(tmp_path, used):
    """6 % apart: even chances between the two have a standard deviation of 0.06 / sqrt 12 (JCGM 100:2008, 4.3.7)."""
    rng = np.random.default_rng(1)
    ampere = np.tile(10 ** np.linspace(-5, -9.5, 600), 20)
    low = ampere * 1e5 + 1e-4 * rng.normal(size=len(ampere))
    high = (np.clip(ampere * 1.06e8, -10, 10), {"unit": "V", "role": "amplifier_high_gain"})
    path = record(tmp_path, amplifier=volts(low), amplifier_high_gain=high)
    made = recipe(
        gain_volt_per_ampere=1e5, high_gain_volt_per_ampere=1e8, bias_volt=0.1, full_scale_volt=10.0,
        gain_ratio_from_overlap=used,
    )  # fmt: skip
    traces = intake.read(path, made)
    error = traces.notes["calibration"]["overlap_ratio_error"]["value"]
    found = intake.calibration_errors(traces, made.calibration)
    expected = error / 1.06 if used else np.hypot(0.06 / np.sqrt(12), error)
    assert found.gain_relative == pytest.approx(expected, rel=0.05)
    assert found.grounds["gain_relative"] == "overlap of the two gains"


@pytest.mark.parametrize("bend", [0.0, 20.0])
def test_the_offset_from_the_floor_knows_its_error(bend):
    """Over 100 simulated records of 300 traces the offset misses the truth by its standard error, on average.

    That is what a standard error is (JCGM 100:2008, 2.3.1); the whole record counts, its ends are known less well.
    """
    rng = np.random.default_rng(2)
    misses = []
    for _ in range(100):
        place = np.linspace(0, 1, 300)
        drift = rng.uniform(-20, 20) * place + bend * np.sin(3 * place)
        tails = drift + rng.normal(size=300)
        offset, reaches = running_offset(tails, np.full(300, 1.0))
        misses.append(np.mean((offset - drift) ** 2) / offset_error(tails, reaches, offset) ** 2)
    assert np.sqrt(np.median(misses)) == pytest.approx(1.0, abs=0.25)


@pytest.mark.parametrize("share_of_plateaus", [0.0, 0.3])
@pytest.mark.parametrize("moves", ["walk", "waves"])
def test_the_stated_error_holds_where_the_offset_moves_faster_than_its_median(moves, share_of_plateaus):
    """Known answer: the miss of the offset against the offset that was planted."""
    rng = np.random.default_rng(4)
    misses = []
    for _ in range(40):
        walk = np.cumsum(rng.normal(size=300))
        waves = 10.0 * np.sin(2 * np.pi * 20 * np.arange(300) / 300 + rng.uniform(0, 6))
        floor = {"walk": walk, "waves": waves}[moves]
        tails = floor + rng.normal(size=300)
        plateaus = rng.random(300) < share_of_plateaus
        tails[plateaus] += rng.uniform(20, 300, plateaus.sum())
        offset, reaches = running_offset(tails, np.full(300, 1.0))
        misses.append(np.mean((offset - floor) ** 2) / offset_error(tails, reaches, offset) ** 2)
    assert 0.8 < np.sqrt(np.median(misses)) < 1.6  # without what the median does not follow: 2.8 and 4.5


def test_the_error_of_the_offset_is_a_conductance(tmp_path):
    rng = np.random.default_rng(3)
    rows = np.tile(np.concatenate([np.full(100, 0.5), np.zeros(300)]), (60, 1)) + 1e-3 * rng.normal(size=(60, 400))
    path = record(tmp_path, amplifier=volts(rows))
    made = recipe(**STATED, offset_from_floor=True).with_values("intake", layout="rows")
    found = intake.calibration_errors(intake.read(path, made), made.calibration)
    # tails of 40 samples of 1 mV at 1e6 V/A: medians scatter by 1.25/sqrt(40) nA, their median by 1.25/sqrt(60) of that
    expected = 1e-9 * (np.pi / 2) / np.sqrt(40 * 60) / (0.1 * G0_SIEMENS)
    assert found.offset_g0 == pytest.approx(expected, rel=0.35)
    assert found.grounds["offset_g0"] == "offset from the floor"
