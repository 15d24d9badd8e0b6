"""Volts to conductance against published and worked values (tests/reference/reference_values.json)."""

from __future__ import annotations

import json
from pathlib import Path

import h5py
import numpy as np
import pytest

from meseta import intake
from meseta.errors import InputError
from meseta.recipe import Recipe
from meseta.traces import Quality

REFERENCE = {
    entry["name"]: entry["value"]
    for entry in json.loads((Path(__file__).parents[1] / "reference" / "reference_values.json").read_text())["values"]
}
G0_SIEMENS = 7.748091729863649e-05  # CODATA 2022, 2e²/h


def record(folder: Path, **channels: tuple[np.ndarray, dict[str, object]]) -> Path:
    path = folder / "record.h5"
    with h5py.File(path, "w") as file:
        for name, (values, attributes) in channels.items():
            file.create_dataset(name, data=values).attrs.update(attributes)
    return path


def recipe(**calibration: object) -> Recipe:
    return Recipe.build({"calibration": calibration, "cutting": {"method": "none"}})


def test_one_nanoampere_at_100_millivolt(tmp_path):
    """1 nA at 100 mV is 1.290640373e-4 G0, through amplifier volts and through a recorded current."""
    expected = 1e-9 / (0.1 * G0_SIEMENS)
    assert expected == pytest.approx(1.290640373e-4, rel=1e-9)
    volts = record(tmp_path, amplifier=(np.array([1e-3, 2e-3]), {"unit": "V"}))
    read = intake.read(volts, recipe(gain_volt_per_ampere=1e6, bias_volt=0.1)).conductance
    np.testing.assert_allclose(read, [expected, 2 * expected], rtol=1e-7)
    current = record(tmp_path, current=(np.array([1.0, 2.0]), {"unit": "nA"}))
    np.testing.assert_allclose(intake.read(current, recipe(bias_volt=0.1)).conductance, read, rtol=1e-7)


def test_inverting_amplifier_offset_and_bias_offset_enter_before_the_division(tmp_path):
    path = record(tmp_path, amplifier=(np.array([-0.5 + 0.002, 0.002]), {"unit": "V"}))
    made = recipe(gain_volt_per_ampere=-1e6, offset_volt=0.002, bias_volt=0.101, bias_offset_volt=0.001)
    np.testing.assert_allclose(intake.read(path, made).conductance, [0.5e-6 / (0.1 * G0_SIEMENS), 0.0], rtol=1e-6)


def test_converter_counts_become_volts(tmp_path):
    """16 bit, +-10 V, 1e6 V/A, 100 mV: one step is 3.938722e-5 G0 (worked value)."""
    step = 20.0 / 2**16
    counts = np.array([0, 1, 2], np.int16)
    path = record(tmp_path, amplifier=(counts, {"unit": "V", "scale": step, "offset": 0.0}))
    read = intake.read(path, recipe(gain_volt_per_ampere=1e6, bias_volt=0.1)).conductance
    np.testing.assert_allclose(np.diff(read), 3.938722e-5, rtol=1e-6)


def test_logarithmic_amplifier(tmp_path):
    """One volt a decade with a reference of 1 nA: 0 V is 1 nA, 3 V is 1 uA."""
    path = record(tmp_path, amplifier=(np.array([0.0, 3.0, -2.0]), {"unit": "V"}))
    made = recipe(volt_per_decade=1.0, reference_ampere=1e-9, bias_volt=0.1)
    expected = np.array([1e-9, 1e-6, 1e-11]) / (0.1 * G0_SIEMENS)
    np.testing.assert_allclose(intake.read(path, made).conductance, expected, rtol=1e-6)


@pytest.mark.parametrize("scale", [1.0, 1e-3])
def test_series_resistance_against_worked_values(tmp_path, scale):
    """What 500 ohm leave of 1 to 5 G0 is corrected back to 1 to 5 G0; at the ceiling there is no number."""
    measured = np.array([*REFERENCE["series.measured_of_1to5_true_500ohm"], 2.0])
    path = record(tmp_path, conductance=(measured, {"unit": "G0"}))
    read = intake.read(path, recipe(series_resistance_ohm=500.0)).conductance
    expected = [1, 2, 3, 4, 5, REFERENCE["series.true_of_2_measured_500ohm"]]
    np.testing.assert_allclose(read, expected, rtol=1e-6)
    ceiling = REFERENCE["series.ceiling_100kohm"]
    path = record(tmp_path, conductance=(np.array([0.1, ceiling * (1 + scale), 0.2]), {"unit": "G0"}))
    traces = intake.read(path, recipe(series_resistance_ohm=1e5))
    assert traces.conductance[0] == pytest.approx(REFERENCE["series.true_of_0.1_measured_100kohm"], rel=1e-6)
    assert np.isnan(traces.conductance[1:]).all()
    assert traces.notes["samples_without_conductance"] == 2


def test_resistance_and_its_unit(tmp_path):
    """1/G0 is 12906.4037 ohm (CODATA 2022)."""
    path = record(tmp_path, resistance=(np.array([12.906403729652257, 0.0, -1.0]), {"unit": "kohm"}))
    read = intake.read(path, recipe()).conductance
    assert read[0] == pytest.approx(1.0, rel=1e-7)
    assert np.isnan(read[1:]).all()


def test_saturated_samples_are_marked_not_dropped(tmp_path):
    path = record(tmp_path, amplifier=(np.array([9.95, 9.8, -9.91, 1.0]), {"unit": "V"}))
    traces = intake.read(path, recipe(gain_volt_per_ampere=1e6, bias_volt=0.1, full_scale_volt=10.0))
    assert traces.quality is not None
    assert traces.quality.read(0, 4).tolist() == [Quality.SATURATED, 0, Quality.SATURATED, 0]
    assert np.isfinite(traces.conductance).all()


def test_two_gains_are_stitched_and_the_seam_is_flagged(tmp_path):
    current = np.array([1e-4, 1e-5, 1e-6, 5e-8, 1e-8, 1e-9])
    low = np.clip(current * 1e5, -10, 10)
    high = np.clip(current * 1e8, -10, 10)
    path = record(
        tmp_path,
        amplifier=(low, {"unit": "V"}),
        amplifier_high_gain=(high, {"unit": "V", "role": "amplifier_high_gain"}),
    )
    made = recipe(gain_volt_per_ampere=1e5, high_gain_volt_per_ampere=1e8, bias_volt=0.1, full_scale_volt=10.0)
    traces = intake.read(path, made)
    np.testing.assert_allclose(traces.conductance, current / (0.1 * G0_SIEMENS), rtol=1e-6)
    assert traces.quality is not None
    bits = traces.quality.read(0, 6)
    assert bits[0] & Quality.SATURATED
    assert [bool(bit & Quality.SEAM) for bit in bits] == [False, False, True, True, False, False]


def test_bias_of_each_trace(tmp_path):
    path = tmp_path / "biases.h5"
    with h5py.File(path, "w") as file:
        file.create_dataset("current", data=np.full((3, 50), 1.0)).attrs["unit"] = "nA"
        file["bias_mV"] = np.array([100.0, 200.0, 50.0])
    traces = intake.read(path)
    np.testing.assert_allclose(traces.table["bias_volt"], [0.1, 0.2, 0.05])
    expected = 1e-9 / (np.array([0.1, 0.2, 0.05]) * G0_SIEMENS)
    np.testing.assert_allclose([traces.trace_conductance(t)[0] for t in range(3)], expected, rtol=1e-6)


def test_recorded_bias_is_divided_sample_by_sample_and_stated_in_volt(tmp_path):
    path = record(
        tmp_path,
        current=(np.array([1.0, 1.0, 1.0]), {"unit": "nA"}),
        bias=(np.array([100.0, 200.0, 50.0]), {"unit": "mV"}),
    )
    traces = intake.read(path, recipe())
    expected = 1e-9 / (np.array([0.1, 0.2, 0.05]) * G0_SIEMENS)
    np.testing.assert_allclose(traces.conductance, expected, rtol=1e-6)
    np.testing.assert_allclose(traces.table["bias_volt"], [0.1])


@pytest.mark.parametrize(
    ("channels", "given", "named"),
    [
        ({"amplifier": "V"}, {}, ["gain_volt_per_ampere", "bias_volt"]),
        ({"amplifier": "V"}, {"gain_volt_per_ampere": 1e6}, ["bias_volt"]),
        ({"amplifier": "V"}, {"amplifier": "logarithmic"}, ["volt_per_decade", "reference_ampere", "bias_volt"]),
        ({"current": "nA"}, {}, ["bias_volt"]),
    ],
)
def test_nothing_that_changes_a_number_is_assumed(tmp_path, channels, given, named):
    path = record(tmp_path, **{name: (np.ones(20), {"unit": unit}) for name, unit in channels.items()})
    with pytest.raises(InputError) as raised:
        intake.read(path, recipe(**given))
    assert raised.value.exit_code == 2
    for name in named:
        assert f"calibration.{name}" in raised.value.remedy


def test_the_recipe_wins_over_the_recording(tmp_path):
    path = record(tmp_path, amplifier=(np.ones(20), {"unit": "V", "gain": "1e6 V/A", "bias": "100 mV"}))
    as_stated = intake.read(path, recipe()).conductance[0]
    assert as_stated == pytest.approx(1e-6 / (0.1 * G0_SIEMENS), rel=1e-6)
    assert intake.read(path, recipe(gain_volt_per_ampere=1e7)).conductance[0] == pytest.approx(as_stated / 10, rel=1e-6)


def test_displacement_from_volts_time_and_rate_or_left_in_its_own_unit(tmp_path):
    g = (np.linspace(2, 1, 50), {"unit": "G0"})
    piezo = record(tmp_path, conductance=g, piezo=(np.linspace(0, 4.9, 50), {"unit": "V"}))
    traces = intake.read(piezo, recipe(nm_per_volt=2.0))
    assert traces.drive.unit == "nm"
    np.testing.assert_allclose(np.diff(traces.trace_drive(0)), 0.2, rtol=1e-5)
    assert intake.read(piezo, recipe()).drive.unit == "V"
    time = record(tmp_path, conductance=g, time=(np.arange(50) * 0.1, {"unit": "ms"}))
    traces = intake.read(time, recipe(nm_per_second=20.0))
    np.testing.assert_allclose(traces.trace_drive(0), np.arange(50) * 0.002, atol=1e-8)
    np.testing.assert_allclose(traces.table["sample_interval_second"], 1e-4, rtol=1e-9)
    bare = record(tmp_path, conductance=g)
    assert intake.read(bare, recipe()).drive.unit == "step"
    traces = intake.read(bare, recipe(nm_per_second=20.0, sampling_hertz=1e4))
    np.testing.assert_allclose(traces.trace_drive(0), np.arange(50) * 0.002, atol=1e-12)


def test_planted_mistakes_are_named_by_the_check_up(tmp_path):
    """Single-atom contacts at 0.1, 2 or -1 G0 betray a factor and a sign; at 1 G0 nothing is said."""
    rng = np.random.default_rng(8)
    stairs = np.repeat([5.0, 4.0, 3.0, 2.0, 1.0], [20, 30, 40, 60, 150])
    # Disordered larger contacts blur all peaks but the single-atom one.
    rows = [
        np.concatenate([stairs * rng.normal(1, np.where(stairs > 1, 0.25, 0.02)), 10.0 ** -rng.uniform(2, 5, 300)])
        for _ in range(60)
    ]

    def findings(factor: float) -> dict[str, object]:
        path = record(tmp_path, conductance=(np.array(rows) * factor, {"unit": "G0"}))
        described, _ = intake.describe(path, Recipe.build({"intake": {"layout": "rows"}}))
        return {one.check: one for one in described[0].findings}

    assert findings(1.0)["single-atom peak"].fine
    assert findings(1.0)["sign"].fine
    assert not findings(-1.0)["sign"].fine
    for factor, word in ((0.1, "factor 10 too low"), (2.0, "factor 2 too high"), (100.0, "factor 100 too high")):
        found = findings(factor)["single-atom peak"]
        assert not found.fine
        assert word in found.text


@pytest.mark.parametrize("unit", ["V", "mV"])
def test_a_bent_piezo_by_a_polynomial(tmp_path, unit):
    """Worked: 2 U + 0.1 U^2 - 0.005 U^3 at 5 V is 10 + 2.5 - 0.625 = 11.875 nm."""
    conductance = (np.linspace(2, 1, 51), {"unit": "G0"})
    reading = np.linspace(0, 5, 51) * (1 if unit == "V" else 1e3)
    path = record(tmp_path, conductance=conductance, piezo=(reading, {"unit": unit}))
    traces = intake.read(path, recipe(nm_polynomial=[2.0, 0.1, -0.005], nm_per_volt=7.0))
    assert traces.drive.unit == "nm"
    drive = traces.trace_drive(0)
    assert drive[-1] - drive[0] == pytest.approx(11.875, rel=1e-6)
    assert drive[20] - drive[0] == pytest.approx(4 + 0.4 - 0.04, rel=1e-6)
    assert not any("turns" in text for text in traces.notes["assumptions"])
    bent = intake.read(path, recipe(nm_polynomial=[2.0, -0.5])).notes["assumptions"]
    assert any("turns within the range of the piezo" in text for text in bent)


@pytest.mark.parametrize(("told", "doubted"), [(0.1, False), (1.0, True), (None, False)])
def test_a_bias_that_contradicts_the_recorded_one_is_said(tmp_path, told, doubted):
    """A recipe's bias wins over a recorded one, but not in silence: a divider may lie between them."""
    current = np.full(50, 1.0)
    path = record(tmp_path, current=(current, {"unit": "nA"}), bias=(np.full(50, 100.0), {"unit": "mV"}))
    traces = intake.read(path, recipe(**({} if told is None else {"bias_volt": told})))
    np.testing.assert_allclose(traces.conductance, 1e-9 / ((told or 0.1) * G0_SIEMENS), rtol=1e-6)
    said = [text for text in traces.notes["assumptions"] if "shows a bias of 0.1 V, the recipe 1 V" in text]
    assert bool(said) == doubted


@pytest.mark.parametrize(("told", "doubted"), [(1e4, False), (1e5, True), (None, False)])
def test_a_rate_that_contradicts_the_recorded_time_is_said(tmp_path, told, doubted):
    values, time = np.linspace(1, 0.1, 500), np.arange(500) * 1e-4
    path = record(tmp_path, conductance=(values, {"unit": "G0"}), time=(time, {"unit": "s"}))
    stated = {"nm_per_second": 10.0} | ({} if told is None else {"sampling_hertz": told})
    traces = intake.read(path, recipe(**stated))
    assert traces.drive.step[0] == pytest.approx(10.0 / (told or 1e4), rel=1e-6)
    assert any("a factor 10 apart" in text for text in traces.notes["assumptions"]) == doubted
