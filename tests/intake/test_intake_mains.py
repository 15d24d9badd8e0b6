"""Mains pickup: planted amplitudes and frequencies come back, and leave the record when asked to."""

from __future__ import annotations

import numpy as np
import pytest
from intake_files import G0_SIEMENS, recipe, record, volts

from meseta import intake
from meseta.intake.calibration.kernels import pickup_sums, subtract_pickup
from meseta.intake.calibration.mains import find_pickup
from meseta.traces import Quality

GAIN, BIAS, RATE = 1e6, 0.1, 1e4


def clean(rng, cycles=40, samples=2500, noise=1e-3):
    """Return a continuous record in volts: steps, a decay, then more than half of each cycle at the floor."""
    row = np.concatenate(
        [
            np.full(400, 9.0),
            np.full(300, 5.0),
            np.full(400, 7.7e-3),
            7e-3 * np.exp(-np.arange(200) / 40),
            np.zeros(1200),
        ]
    )
    return np.tile(row[:samples], cycles) + noise * rng.normal(size=samples * cycles)


def mains(size, hertz, amplitudes, wander=0.0):
    """Return a Fourier series whose frequency wanders by ``wander`` (relative) over the record."""
    time = np.arange(size) / RATE
    turns = hertz * (time + wander * np.sin(2 * np.pi * time / time[-1]) * time[-1] / (2 * np.pi))
    return sum(a * np.cos(2 * np.pi * (k + 1) * turns + 0.7 * k + 1) for k, a in enumerate(amplitudes))


def found(values):
    from pathlib import Path
    from tempfile import TemporaryDirectory

    with TemporaryDirectory() as folder:
        path = record(Path(folder), amplifier=volts(values))
        with intake.open_recording(path) as recording:
            channel = recording.channels[0]
            return find_pickup(recording, lambda a, b: recording.values(channel, a, b), "V", 1 / RATE)


@pytest.mark.parametrize("hertz", [50.0, 49.93, 60.0, 60.11])
@pytest.mark.parametrize("scale", [1.0, 1e-6])
def test_planted_pickup_is_found(hertz, scale):
    amplitudes = np.array([4e-3, 5e-4, 2e-3])
    values = clean(np.random.default_rng(1))
    values = (values + mains(len(values), hertz, amplitudes)) * scale
    pickup = found(values)
    assert pickup.is_significant
    assert pickup.frequency_hertz == pytest.approx(hertz, abs=0.01)
    np.testing.assert_allclose(pickup.amplitude, amplitudes * scale, atol=1e-4 * scale)


@pytest.mark.parametrize("amplitude", [0.0, 2e-5, 2e-2])
def test_amplitude_from_nothing_to_far_above_the_noise(amplitude):
    values = clean(np.random.default_rng(2))
    pickup = found(values + mains(len(values), 50.0, [amplitude]))
    assert pickup.is_significant == (amplitude > 1e-3)
    assert pickup.amplitude[0] == pytest.approx(amplitude, abs=6e-5)


@pytest.mark.parametrize("wander", [0.0, 4e-4])
def test_removal_leaves_the_record_as_if_there_were_none(tmp_path, wander):
    """At the floor 98 % of the pickup's power goes, also where the frequency wanders by 20 mHz; steps stay sharp."""
    values = clean(np.random.default_rng(3))
    planted = mains(len(values), 50.0, [5e-3, 1e-3, 1e-3], wander)
    path = record(tmp_path, amplifier=volts(values + planted))
    stated = {"gain_volt_per_ampere": GAIN, "bias_volt": BIAS, "sampling_hertz": RATE}
    raw, cleaned = intake.read(path, recipe(**stated)), intake.read(path, recipe(**stated, remove_mains=True))
    volt = GAIN * BIAS * G0_SIEMENS
    np.testing.assert_allclose(raw.conductance * volt, values + planted, rtol=1e-6, atol=1e-9)
    left = cleaned.conductance * volt - values
    assert np.mean(left**2) < 0.02 * np.mean(planted**2)
    said = next(text for text in cleaned.notes["assumptions"] if "mains pickup is removed from 'amplifier'" in text)
    assert float(said.split(": ")[2].split()[0]) == pytest.approx(50.0, abs=0.02)
    assert not any("mains" in text for text in raw.notes["assumptions"])


def test_nothing_is_removed_where_nothing_is_seen(tmp_path):
    values = clean(np.random.default_rng(4))
    path = record(tmp_path, amplifier=volts(values))
    stated = {"gain_volt_per_ampere": GAIN, "bias_volt": BIAS, "sampling_hertz": RATE}
    cleaned = intake.read(path, recipe(**stated, remove_mains=True))
    np.testing.assert_allclose(cleaned.conductance * GAIN * BIAS * G0_SIEMENS, values, rtol=1e-6, atol=1e-9)
    assert any("no mains pickup is seen" in text for text in cleaned.notes["assumptions"])


def test_traces_of_unknown_phase_are_cleaned_one_by_one(tmp_path):
    rng = np.random.default_rng(5)
    rows = clean(rng).reshape(40, 2500)
    phases = rng.uniform(0, 2 * np.pi, (40, 1))
    planted = 5e-3 * np.cos(2 * np.pi * 50 * np.arange(2500) / RATE + phases)
    path = record(tmp_path, amplifier=volts(rows + planted))
    stated = {"gain_volt_per_ampere": GAIN, "bias_volt": BIAS, "sampling_hertz": RATE}
    cleaned = intake.read(path, recipe(**stated, remove_mains=True))
    assert cleaned.traces == 40
    left = cleaned.conductance * GAIN * BIAS * G0_SIEMENS - rows.ravel()
    assert np.mean(left**2) < 0.02 * np.mean(planted**2)


def test_a_logarithmic_amplifier_is_left_alone_and_it_is_said(tmp_path):
    path = record(tmp_path, amplifier=volts(np.zeros(5000)))
    made = recipe(volt_per_decade=1.0, reference_ampere=1e-9, bias_volt=BIAS, sampling_hertz=RATE, remove_mains=True)
    assert any("not in proportion to the current" in text for text in intake.read(path, made).notes["assumptions"])


def test_kernels_equal_numpy():
    rng = np.random.default_rng(6)
    values, angle = 3.0 + rng.normal(size=500), 2 * np.pi * (41 + np.arange(500)) * 0.0123
    runs = np.array([[3, 90], [120, 121], [200, 460]], np.int64)
    columns = np.stack([f(k * angle) for k in (1, 2, 3) for f in (np.cos, np.sin)], axis=1)
    matrix, vector, total = np.zeros((3, 6, 6)), np.zeros((3, 6)), np.zeros(3)
    pickup_sums(values, 41, 0.0123, runs, 3, matrix, vector, total)
    for place, (begin, end) in enumerate(runs):
        row = columns[begin:end] - columns[begin:end].mean(axis=0)
        less = values[begin:end] - values[begin:end].mean()
        np.testing.assert_allclose(matrix[place], row.T @ row, atol=1e-10)
        np.testing.assert_allclose(vector[place], row.T @ less, atol=1e-10)
        assert total[place] == pytest.approx(float(less @ less), abs=1e-12)

    at, parts = np.array([10, 50, 51, 300]), rng.normal(size=(4, 4))
    flat = np.arange(7, 400)
    sizes = np.stack([np.interp(flat, at, column) for column in parts.T], axis=1)
    turns = 2 * np.pi * flat * 0.0123
    series = np.stack([np.cos(turns), np.sin(turns), np.cos(2 * turns), np.sin(2 * turns)], axis=1)
    changed = rng.normal(size=len(flat))
    expected = changed - np.sum(sizes * series, axis=1)
    subtract_pickup(changed, 7, 0.0123, at, parts)
    np.testing.assert_allclose(changed, expected, atol=1e-10)


def test_saturation_hides_no_floor_and_is_flagged_as_the_amplifier_gave_it(tmp_path):
    """A record whose densest readings are at full scale: the pickup is that of the floor, the flags those of the volts.

    Flags are compared with the recorded volts, the floor with the record before the pickup was added (worked here).
    """
    rng = np.random.default_rng(7)
    clear = np.tile(np.concatenate([np.full(1500, 20.0), np.full(100, 5.0), np.zeros(900)]), 40)
    clear = clear + 1e-3 * rng.normal(size=len(clear))
    planted = mains(len(clear), 50.0, [0.15])
    given = np.clip(clear + planted, -10, 10)
    given[1510] = 9.95  # above 99 % of full scale only with the pickup
    path = record(tmp_path, amplifier=volts(given))
    stated = {"gain_volt_per_ampere": GAIN, "bias_volt": BIAS, "sampling_hertz": RATE, "full_scale_volt": 10.0}
    cleaned = intake.read(path, recipe(**stated, remove_mains=True))
    flagged = cleaned.quality.read(0, len(given)) & Quality.SATURATED > 0
    np.testing.assert_array_equal(flagged, np.abs(given) >= 9.9)
    left = (cleaned.conductance * GAIN * BIAS * G0_SIEMENS - clear)[clear < 1.0]
    assert np.mean(left**2) < 0.01 * np.mean(planted**2)
