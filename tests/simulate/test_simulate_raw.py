"""Continuous recordings calibrated by hand, and what is written to disk."""

from __future__ import annotations

import json

import h5py
import numpy as np
import pytest
from pyarrow import csv

from meseta.errors import CallError, MesetaError, OutputError
from meseta.simulate import SimulationSettings, simulate_raw, write_simulation
from meseta.work import Work

G0 = 7.748091729863649e-05  # 2e^2/h in siemens, CODATA 2022
BASE = SimulationSettings(samples=1800, sampling_hertz=10_000.0, hold_samples=40, noise="clean", yield_share=0.8)


def calibrated(made, settings: SimulationSettings) -> np.ndarray:
    """G/G0 by hand, from the formulas of the trade."""
    volts = made.channel("amplifier").volts() - settings.offset_volt
    if settings.amplifier == "logarithmic":
        ampere = settings.reference_ampere * 10 ** (volts / settings.volt_per_decade)
    else:
        ampere = volts / settings.gain_volt_per_ampere
    measured = ampere / settings.bias_volt / G0
    return measured / (1 - settings.series_resistance_ohm * G0 * measured)


@pytest.mark.parametrize(
    "changes",
    [
        {"amplifier": "logarithmic", "offset_volt": 0.05},
        {"amplifier": "linear", "offset_volt": -0.02, "series_resistance_ohm": 500.0},
        {"amplifier": "linear", "pull_is": "falling", "bias_volt": 0.05},
        {"amplifier": "logarithmic", "volt_per_decade": 0.5, "reference_ampere": 1e-8, "series_resistance_ohm": 300.0},
    ],
)
def test_hand_calibration_gives_the_true_levels(changes: dict) -> None:
    settings = BASE.with_values(**changes)
    made = simulate_raw("molecule", 40, 3, settings)
    contact, truth = calibrated(made, settings), made.truth
    smallest = 0.02 if settings.amplifier == "linear" else 1e-5
    checked = 0
    for row in np.flatnonzero((truth.stop - truth.start > 15) & (truth.level_g0 > smallest)):
        inside = contact[truth.raw_start[row] : truth.raw_stop[row]]
        assert abs(np.log10(np.mean(inside) / truth.level_g0[row])) < 0.03
        checked += 1
    assert checked > 200


def test_the_second_amplifier_shows_what_the_first_cannot() -> None:
    settings = BASE.with_values(high_gain_volt_per_ampere=1e8, offset_volt=0.01)
    made = simulate_raw("molecule", 40, 3, settings)
    fine = made.channel("amplifier_high_gain").volts()
    assert fine.max() == pytest.approx(10.0, abs=1e-3)
    contact = (fine - 0.01) / 1e8 / 0.1 / G0
    truth = made.truth
    rows = np.flatnonzero((truth.kind == "molecule") & (truth.stop - truth.start > 15))
    assert len(rows) > 10
    for row in rows:
        inside = contact[truth.raw_start[row] : truth.raw_stop[row]]
        assert abs(np.log10(np.mean(inside) / truth.level_g0[row])) < 0.03


@pytest.mark.parametrize("direction", ["rising", "falling"])
def test_piezo_pulls_where_it_says(direction: str) -> None:
    settings = BASE.with_values(pull_is=direction)
    made = simulate_raw("blank", 5, 3, settings)
    nanometres = made.channel("piezo").volts() * settings.nm_per_volt * (1 if direction == "rising" else -1)
    for begin, end in zip(made.opening_start, made.opening_stop, strict=True):
        slope = np.polyfit(np.arange(end - begin), nanometres[begin:end], 1)[0]
        assert slope == pytest.approx(settings.nm_per_sample, rel=1e-3)
        assert np.abs(np.diff(nanometres[end + 1 : end + 39])).max() < 5 * settings.nm_per_volt * 3e-4
        assert nanometres[end + 60] < nanometres[end - 1]
    contact = calibrated(made, settings)
    assert (contact[made.opening_start] > 5).all()
    assert (contact[made.opening_stop - 1] < 1e-3).all()


def test_openings_of_the_truth_are_raw_samples() -> None:
    made = simulate_raw("molecule", 30, 3, BASE)
    truth = made.truth
    assert np.array_equal(truth.record_start, made.opening_start[truth.trace])
    assert np.array_equal(truth.raw_start, truth.record_start + truth.start)
    assert np.array_equal(truth.raw_stop, truth.record_start + truth.stop)
    assert (truth.raw_stop <= made.opening_stop[truth.trace] + 5).all()


def test_raw_is_the_same_whatever_the_threads() -> None:
    one = simulate_raw("molecule", 90, 3, BASE, Work(threads=1))
    other = simulate_raw("molecule", 90, 3, BASE, Work(threads=3))
    for a, b in zip(one.channels, other.channels, strict=True):
        assert np.array_equal(a.values, b.values)


def test_a_pull_that_cannot_break_the_contact_is_refused() -> None:
    with pytest.raises(CallError, match="too short to break"):
        simulate_raw("metal", 3, 1, SimulationSettings(samples=500))


# -- files ------------------------------------------------------------------------------------------------------------


def test_raw_file_describes_itself(tmp_path) -> None:
    settings = BASE.with_values(amplifier="logarithmic")
    written = write_simulation(
        "molecule", 12, 3, tmp_path / "r.h5", tmp_path / "r.truth.csv", raw=True, settings=settings
    )
    made = simulate_raw("molecule", 12, 3, settings)
    with h5py.File(tmp_path / "r.h5") as file:
        assert file.attrs["amplifier"] == "logarithmic"
        for name in ("bias_volt", "volt_per_decade", "reference_ampere", "nm_per_volt", "sampling_hertz"):
            assert file.attrs[name] == getattr(settings, name)
        assert file.attrs["pull_is"] == "rising"
        for channel in made.channels:
            stored = file[channel.name]
            assert stored.attrs["unit"] == "V"
            volts = stored[:].astype(float) * stored.attrs["scale"] + stored.attrs["offset"]
            np.testing.assert_array_equal(volts, channel.volts())
    table = csv.read_csv(tmp_path / "r.truth.csv").to_pydict()
    assert table["raw_start"] == made.truth.raw_start.tolist()
    np.testing.assert_array_equal(table["level_g0"], made.truth.level_g0)
    stated = json.loads((tmp_path / "r.truth.json").read_text())
    assert stated["seed"] == 3
    assert stated["labels"] == made.labels.tolist()
    assert {peak["name"] for peak in stated["peaks"]} >= {"1 atom", "molecule"}
    assert (written.layout, written.traces, written.plateaus) == ("continuous", 12, len(made.truth))


@pytest.mark.parametrize(
    ("name", "layout"),
    [("a.h5", "rows"), ("a.h5", "groups"), ("a.h5", "flat"), ("a.csv", "long"), ("a.tsv", "wide"), ("a", "files")],
)
def test_every_layout_holds_the_same_numbers(tmp_path, name: str, layout: str) -> None:
    from meseta.simulate import simulate

    settings = SimulationSettings(samples=60, specimens=2)
    write_simulation("metal", 5, 3, tmp_path / name, layout=layout, settings=settings)
    values = simulate("metal", 5, 3, settings).traces.conductance.reshape(5, 60)
    np.testing.assert_allclose(stored_traces(tmp_path / name, layout), values, rtol=1e-6)
    assert [path.name for path in tmp_path.iterdir()] == [name]


def stored_traces(path, layout: str) -> np.ndarray:
    if path.suffix == ".h5":
        with h5py.File(path) as file:
            if layout == "groups":
                return np.stack([file[key]["conductance"][:] for key in sorted(file)])
            return file["conductance"][:].reshape(5, 60)

    def table(file):
        lines = file.read_text().splitlines()
        skip = sum(line.startswith("#") for line in lines)
        options = csv.ParseOptions(delimiter="\t" if file.suffix == ".tsv" else ",")
        return csv.read_csv(file, csv.ReadOptions(skip_rows=skip), options).to_pydict()

    if layout == "files":
        return np.stack([table(file)["conductance_G0"] for file in sorted(path.iterdir())])
    if layout == "long":
        return np.reshape(table(path)["conductance_G0"], (5, 60))
    return np.stack([column for name, column in table(path).items() if name.startswith("trace")])


def test_bad_places_are_refused_and_leave_nothing(tmp_path) -> None:
    full = tmp_path / "full"
    full.mkdir()
    (full / "mine.txt").write_text("mine")
    settings = SimulationSettings(samples=60)
    for place, keywords in (
        (tmp_path / "missing" / "a.h5", {}),
        (full, {}),
        (tmp_path / "a.docx", {}),
        (tmp_path / "a.h5", {"layout": "wide"}),
        (tmp_path / "folder", {"raw": True}),
        (tmp_path / "a.csv", {"truth_path": tmp_path / "a.csv"}),
        (tmp_path / "a.h5", {"truth_path": tmp_path / "t.xlsx"}),
    ):
        with pytest.raises(MesetaError) as caught:
            write_simulation("metal", 2, 1, place, settings=settings, **keywords)
        assert caught.value.exit_code == 2
    assert [path.name for path in tmp_path.rglob("*")] == ["full", "mine.txt"]


def test_a_failed_write_leaves_nothing(tmp_path, monkeypatch) -> None:
    from meseta.simulate import write

    def full_disk(*_: object) -> None:
        raise OSError(28, "No space left on device", "a.h5")

    monkeypatch.setattr(write, "write_traces_hdf5", full_disk)
    with pytest.raises(OutputError, match="No space left"):
        write_simulation("metal", 2, 1, tmp_path / "a.h5", settings=SimulationSettings(samples=60))
    assert not list(tmp_path.iterdir())
