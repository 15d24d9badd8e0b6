"""Cutting a continuous recording against ramps whose corners are known."""

from __future__ import annotations

import h5py
import numpy as np
import pytest

from meseta import intake
from meseta.recipe import Recipe
from meseta.simulate import SimulationSettings, simulate_raw, write_simulation
from meseta.traces import PHASE_KINDS


def ramp_record(rng, cycles=7, pull=900, push=300, hold=0, noise=0.0, step=0.0, jitter=0, lead=0):
    """Return (piezo, conductance, first and last sample of every pull) of a triangular drive."""
    piezo, pulls, level = [np.full(lead, 0.0)] if lead else [], [], 0.0
    at = lead
    for _ in range(cycles):
        n = pull + int(rng.integers(-jitter, jitter + 1)) if jitter else pull
        top = 5.0 * n / pull
        piezo += [np.linspace(level, top, n, endpoint=False), np.full(hold, top)]
        piezo += [np.linspace(top, 0.0, push, endpoint=False), np.full(hold, 0.0)]
        pulls.append((at, at + n))
        at += n + push + 2 * hold
    drive = np.concatenate(piezo)
    conductance = np.where(drive < 2.0, 10.0 - 4 * drive, 10 ** (-(drive - 2.0) * 1.5))
    drive = drive + noise * rng.normal(size=len(drive))
    return (np.round(drive / step) * step if step else drive), conductance, np.array(pulls)


def read(folder, piezo, conductance, **settings):
    with h5py.File(folder / "record.h5", "w") as file:
        file.create_dataset("piezo", data=piezo).attrs["unit"] = "V"
        file.create_dataset("conductance", data=conductance).attrs["unit"] = "G0"
    return intake.read(folder / "record.h5", Recipe.build({"calibration": {"nm_per_volt": 1.0}, "cutting": settings}))


@pytest.mark.parametrize(
    "shape",
    [
        {},
        {"hold": 120},
        {"hold": 6},
        {"hold": 120, "noise": 2e-3},
        {"noise": 1e-3},
        {"jitter": 200, "hold": 50},
        {"step": 20 / 2**16, "hold": 50},
        {"lead": 137, "hold": 40},
        {"pull": 4000, "push": 4000},
    ],
    ids=str,
)
@pytest.mark.parametrize("sign", [1, -1])
def test_cut_points_lie_within_two_samples(tmp_path, shape, sign):
    piezo, conductance, pulls = ramp_record(np.random.default_rng(3), **shape)
    traces = read(tmp_path, sign * piezo, conductance)
    opening = traces.table["direction"] == "opening"
    assert opening.sum() == len(pulls)
    begin = traces.table["record_start"][opening]
    _, stop = traces.phase_range(("pull",))
    allowed = 2 if shape.get("noise", 0) < 2e-3 else 4
    assert np.abs(begin - pulls[:, 0]).max() <= allowed
    assert np.abs(begin + stop[opening] - pulls[:, 1]).max() <= allowed
    for trace in np.flatnonzero(opening):
        drive = traces.trace_drive(trace)[: stop[trace]]
        assert drive[-1] > drive[0]  # displacement grows while pulling, whatever the sign of the piezo


def test_phases_cover_every_trace_and_partners_know_each_other(tmp_path):
    piezo, conductance, _ = ramp_record(np.random.default_rng(4), hold=80)
    traces = read(tmp_path, piezo, conductance)
    kinds = {PHASE_KINDS[code] for code in traces.phases.kind}
    assert kinds == {"pull", "hold", "push"}
    covered = np.zeros(traces.traces, int)
    np.add.at(covered, traces.phases.trace, traces.phases.stop - traces.phases.start)
    np.testing.assert_array_equal(covered, traces.lengths)
    partner = traces.table["partner"]
    for row in np.flatnonzero(partner >= 0):
        assert partner[partner[row]] == row
        assert traces.table["direction"][row] != traces.table["direction"][partner[row]]


def test_incomplete_cycles_are_kept_apart_and_reported(tmp_path):
    piezo, conductance, pulls = ramp_record(np.random.default_rng(5), hold=40)
    begin, end = pulls[0, 0] + 500, pulls[-1, 0] + 300
    traces = read(tmp_path, piezo[begin:end], conductance[begin:end])
    whys = [one["why"] for one in traces.notes["incomplete"]]
    assert "the record begins within the ramp" in whys
    assert "the record ends within the ramp" in whys
    assert (traces.table["direction"] == "opening").sum() == len(pulls) - 2


def test_pull_direction_may_be_told(tmp_path):
    piezo, conductance, pulls = ramp_record(np.random.default_rng(6))
    told = read(tmp_path, piezo, conductance, pull_is="falling")
    assert (told.table["direction"] == "closing").sum() == len(pulls)
    assert any("cutting.pull_is" in text for text in read(tmp_path, piezo, conductance).notes["assumptions"])


def test_threshold_cutting_without_a_drive(tmp_path):
    _, conductance, pulls = ramp_record(np.random.default_rng(7), hold=30)
    with h5py.File(tmp_path / "bare.h5", "w") as file:
        file.create_dataset("conductance", data=conductance).attrs["unit"] = "G0"
    made = Recipe.build({"cutting": {"method": "threshold"}})
    traces = intake.read(tmp_path / "bare.h5", made)
    assert (traces.table["direction"] == "opening").sum() == len(pulls)
    assert traces.samples == len(conductance)


@pytest.mark.parametrize("amplifier", ["linear", "logarithmic"])
def test_raw_simulation_is_cut_and_calibrated_as_its_truth_says(tmp_path, amplifier):
    chosen = SimulationSettings(samples=4000, amplifier=amplifier, push_speedup=3.0)
    truth = simulate_raw("metal", 6, 11, chosen)
    write_simulation("metal", 6, 11, tmp_path / "raw.h5", raw=True, settings=chosen)
    traces = intake.read(tmp_path / "raw.h5")
    opening = traces.table["direction"] == "opening"
    assert np.abs(traces.table["record_start"][opening] - truth.opening_start).max() <= 2
    volts = truth.channel("amplifier").volts()
    start = int(truth.opening_start[2])
    if amplifier == "linear":
        current = volts[start : start + 200] / chosen.gain_volt_per_ampere
    else:
        current = chosen.reference_ampere * 10 ** (volts[start : start + 200] / chosen.volt_per_decade)
    expected = current / (chosen.bias_volt * 7.748091729863649e-05)
    row = int(np.flatnonzero(opening)[2])
    shift = start - int(traces.table["record_start"][row])
    np.testing.assert_allclose(traces.trace_conductance(row)[shift : shift + 200], expected, rtol=1e-6)
