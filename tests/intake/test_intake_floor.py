"""Offset from the floor: a planted, drifting offset is found; plateaus that end a trace are left alone."""

from __future__ import annotations

import h5py
import numpy as np
import pytest

from meseta import intake
from meseta.intake.calibration.running_floor import running_offset
from meseta.recipe import Recipe

G0_SIEMENS = 7.748091729863649e-05  # CODATA 2022, 2e²/h


@pytest.mark.parametrize("scale", [1.0, 1e-6])
def test_running_offset_follows_drift_and_passes_over_plateaus(scale):
    rng = np.random.default_rng(1)
    drift = np.linspace(1e-6, 3e-6, 400)
    tails = (drift + 2e-7 * rng.normal(size=400)) * scale
    plateaus = rng.random(400) < 0.3
    tails[plateaus] += 10 ** rng.uniform(-4.5, -3, plateaus.sum()) * scale
    offset, reaches = running_offset(tails, np.full(400, 2e-7 * scale))
    assert not reaches[plateaus].any()
    assert reaches[~plateaus].mean() > 0.95
    np.testing.assert_allclose(offset[50:350], drift[50:350] * scale, atol=1.5e-7 * scale)


@pytest.mark.parametrize("side", [1.0, -1.0])
def test_a_floor_that_drifts_by_more_than_plateaus_conduct_is_followed(side):
    """Half of the traces end 90 sigma above (or, with negative bias, below) a floor that drifts by 250 sigma and more.

    Taken for one level for all, the drift would hide the plateaus in the floor: their ends would become the offset.
    """
    rng = np.random.default_rng(5)
    drift = 0.5 * np.arange(600.0) + 30 * np.sin(np.arange(600) / 200)
    plateaus = rng.random(600) < 0.45
    tails = drift + rng.normal(size=600) + side * np.where(plateaus, 90 * 10 ** rng.normal(0, 0.15, 600), 0.0)
    offset, reaches = running_offset(tails, np.full(600, 1.0))
    assert (reaches & plateaus).sum() <= 6
    assert reaches[~plateaus].mean() > 0.95
    assert np.sqrt(np.mean((offset - drift)[20:-20] ** 2)) < 2.0


def test_too_few_traces_at_the_floor_change_nothing():
    offset, reaches = running_offset(np.array([1e-6, 2e-6, np.nan]), np.full(3, 1e-8))
    assert np.isnan(offset).all()
    assert not reaches.any()


@pytest.mark.parametrize("resistance", [0.0, 500.0])
def test_offset_is_removed_before_the_series_resistance(tmp_path, resistance):
    rng = np.random.default_rng(2)
    contact = np.concatenate([np.full(100, 3.0), np.full(100, 1.0), np.zeros(200)])
    true = np.tile(contact, (40, 1))
    measured = true / (1 + resistance * G0_SIEMENS * true)
    volts = measured * 0.1 * G0_SIEMENS * 1e5 + 0.004 + 1e-4 * rng.normal(size=true.shape)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("amplifier", data=volts).attrs["unit"] = "V"
    calibration = {
        "gain_volt_per_ampere": 1e5,
        "bias_volt": 0.1,
        "series_resistance_ohm": resistance,
        "offset_from_floor": True,
    }
    traces = intake.read(tmp_path / "a.h5", Recipe.build({"calibration": calibration, "intake": {"layout": "rows"}}))
    note = traces.notes["floor_offset"]
    assert note["removed"]
    assert note["offset_ampere_median"] == pytest.approx(0.004 / 1e5, rel=2e-3)
    read = traces.conductance.reshape(true.shape)
    for columns, level in ((slice(0, 100), 3.0), (slice(100, 200), 1.0), (slice(200, 400), 0.0)):
        assert np.mean(read[:, columns]) == pytest.approx(level, abs=1e-4)


@pytest.mark.parametrize("resistance", [0.0, 500.0])
def test_traces_that_stay_in_their_recording_have_the_same_offset_removed(tmp_path, resistance):
    """A recording too large for memory is worked out as it is read; the numbers are those of one that is not."""
    rng = np.random.default_rng(4)
    rows = np.tile(np.concatenate([np.full(100, 0.4), np.zeros(200)]), (40, 1)) + 1e-3 * rng.normal(size=(40, 300))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("amplifier", data=rows + 0.004).attrs["unit"] = "V"
    calibration = {
        "gain_volt_per_ampere": 1e5,
        "bias_volt": 0.1,
        "series_resistance_ohm": resistance,
        "offset_from_floor": True,
    }
    recipe = Recipe.build({"calibration": calibration, "intake": {"layout": "rows"}})
    with intake.open_recording(tmp_path / "a.h5", recipe) as recording:
        streamed = intake.traces_from([recording], recipe, stream=True)
        loaded = intake.traces_from([recording], recipe)
        assert streamed.notes["floor_offset"] == loaded.notes["floor_offset"]
        values = streamed.channels["conductance"].samples
        np.testing.assert_array_equal(values.read(0, streamed.samples), loaded.conductance)
        np.testing.assert_array_equal(values.read(299, 1203), loaded.conductance[299:1203])
    assert abs(np.mean(loaded.conductance.reshape(40, 300)[:, 150:])) < 1e-4
