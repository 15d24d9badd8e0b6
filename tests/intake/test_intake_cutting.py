"""Cutting a continuous recording against ramps whose corners are known."""

from __future__ import annotations

import itertools

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

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


# -- ramps as set-ups really make them -------------------------------------------------------------------------------


def restless_drive(rng, cycles=30, swing=(0.8, 1.2), speed=1 / 900, push=3.0, hold=(0, 0), inner=0, drift=0.0, kink=1):
    """Return (drive, (first, last) of each pull and each push): each cycle chooses its own turning points.

    The pull stops at a random height and the push at a random depth, as where the contact itself decides (a
    self-regulating ramp); the whole wanders and drifts; the pull may rest ``inner`` times on its way, and run ``kink``
    times as fast in its last part as in its first.
    """
    parts, at, level, pulls, pushes, rests = [], 0, 0.0, [], [], []
    for _ in range(cycles):
        top = level + rng.uniform(*swing)
        n = max(round((top - level) / speed), 40)
        marks = np.unique([0, *np.sort(rng.uniform(0.25, 0.75, inner) * n).astype(int), n])
        share = np.interp(np.arange(n) / n, [0, 0.5, 1], [0, 1 / (1 + kink), 1])
        climb, begin = level + (top - level) * share, at
        for place, (a, b) in enumerate(itertools.pairwise(marks)):
            parts.append(climb[a:b])
            at += b - a
            if place + 2 < len(marks):
                rest = int(rng.integers(100, 400))
                parts.append(np.full(rest, climb[b]))
                rests.append((at, at + rest))
                at += rest
        pulls.append((begin, at))
        bottom = top - rng.uniform(*swing) + drift
        count = max(round((top - bottom) / speed / push), 10)
        wait, after = (int(rng.integers(hold[0], hold[1] + 1)) for _ in range(2))
        parts += [np.full(wait, top), np.linspace(top, bottom, count, endpoint=False), np.full(after, bottom)]
        pushes.append((at + wait, at + wait + count))
        at, level = at + wait + count + after, bottom
    return np.concatenate(parts), np.array(pulls), np.array(pushes), np.array(rests)


RESTLESS = {
    "turning points of its own": {"swing": (0.5, 1.5)},
    "drifts far beyond a ramp": {"drift": 0.5, "cycles": 80},
    "wanders": {"swing": (0.6, 1.4), "cycles": 200},
    "holds of any length": {"hold": (30, 600)},
    "rests on the way": {"inner": 2, "hold": (50, 200)},
    "rests without holds": {"inner": 1},
    "two speeds": {"kink": 4, "hold": (40, 40)},
    "long holds": {"hold": (4000, 6000), "cycles": 8},
    "few samples": {"speed": 1 / 80, "cycles": 150, "push": 1.0},
}


@pytest.mark.parametrize("shape", RESTLESS)
@pytest.mark.parametrize("noise", [0.0, 5e-4])
@pytest.mark.parametrize("sign", [1, -1])
def test_restless_ramps_are_cut_within_two_samples(shape, noise, sign):
    from meseta.intake.cutting.ramps import find_ramps

    rng = np.random.default_rng(17)
    drive, pulls, pushes, _ = restless_drive(rng, **RESTLESS[shape])
    noise = min(noise, 0.5 * RESTLESS[shape].get("speed", 1 / 900))
    drive = sign * drive + noise * rng.normal(size=len(drive))
    ramps = find_ramps(lambda a, b: drive[a:b], len(drive), 0.3)
    up = ramps.swing * sign > 0
    for found, truth in ((up, pulls), (~up, pushes)):
        assert found.sum() == len(truth)
        assert np.abs(ramps.begin[found] - truth[:, 0]).max() <= 2
        assert np.abs(ramps.end[found] - truth[:, 1]).max() <= 2


def test_a_staircase_from_a_slow_converter_is_cut_within_its_steps():
    from meseta.intake.cutting.ramps import find_ramps

    drive, pulls, *_ = restless_drive(np.random.default_rng(18), hold=(60, 90))
    stairs = np.repeat(drive[::5], 5)[: len(drive)]
    ramps = find_ramps(lambda a, b: stairs[a:b], len(stairs), 0.3)
    up = ramps.swing > 0
    assert up.sum() == len(pulls)
    assert np.abs(ramps.begin[up] - pulls[:, 0]).max() <= 2 * 5
    assert np.abs(ramps.end[up] - pulls[:, 1]).max() <= 2 * 5


@pytest.mark.parametrize("noise", [0.0, 5e-4])
def test_a_rest_within_a_pull_is_a_hold_and_the_pull_stays_whole(tmp_path, noise):
    rng = np.random.default_rng(19)
    drive, pulls, _, rests = restless_drive(rng, cycles=10, inner=1, hold=(50, 80))
    noisy = drive + noise * rng.normal(size=len(drive))
    traces = read(tmp_path, noisy, np.where(drive % 1.0 < 0.4, 2.0, 1e-4), pull_is="rising")
    opening = np.flatnonzero(traces.table["direction"] == "opening")
    assert len(opening) == 10
    _, stop = traces.phase_range(("pull",))
    base = traces.table["record_start"]
    assert np.abs(base[opening] + stop[opening] - pulls[:, 1]).max() <= 2
    hold, phases = PHASE_KINDS.index("hold"), traces.phases
    for row, (first, last), (_, end) in zip(opening, rests, pulls, strict=True):
        own = (phases.trace == row) & (phases.kind == hold) & (base[row] + phases.start < end - 5)
        assert own.sum() == 1
        assert abs(base[row] + phases.start[own][0] - first) <= 2
        assert abs(base[row] + phases.stop[own][0] - last) <= 2


def test_one_range_kept_apart_is_said_in_the_singular(tmp_path):
    piezo, conductance, pulls = ramp_record(np.random.default_rng(5), hold=40)
    begin = pulls[0, 0] + 500
    with h5py.File(tmp_path / "record.h5", "w") as file:
        file.create_dataset("piezo", data=piezo[begin:]).attrs["unit"] = "V"
        file.create_dataset("conductance", data=conductance[begin:]).attrs["unit"] = "G0"
    described, _ = intake.describe(tmp_path / "record.h5", Recipe())
    assert any("1 range kept apart" in line for line in described[0].lines())


def test_a_sawtooth_is_cut_at_its_flybacks():
    from meseta.intake.cutting.ramps import find_ramps

    drive = (np.arange(20000) % 2000) / 2000.0
    ramps = find_ramps(lambda a, b: drive[a:b], len(drive), 0.3)
    pulls = ramps.end - ramps.begin > 100
    assert pulls.sum() == 10
    assert np.abs(ramps.begin[pulls] - np.arange(0, 20000, 2000)).max() <= 2
    assert np.abs(ramps.end[pulls] - np.arange(2000, 20001, 2000)).max() <= 2


@pytest.mark.parametrize("wild", [500.0, -1e9, np.inf, np.nan])
def test_a_wild_sample_of_the_drive_costs_at_most_its_own_ramp(wild):
    from meseta.intake.cutting.ramps import find_ramps

    drive = np.abs((np.arange(40000) / 2000) % 2 - 1) * 5
    drive[7777] = wild
    ramps = find_ramps(lambda a, b: drive[a:b], len(drive), 0.3)
    corners = np.arange(0, 40000, 2000)
    missed = [at for at in corners if np.abs(ramps.begin - at).min() > 2]
    assert len(missed) <= 1
    assert len(ramps.begin) <= 24


@settings(deadline=None, max_examples=60)
@given(st.lists(st.tuples(st.integers(1, 80), st.floats(-3, 3)), min_size=2, max_size=30), st.booleans())
def test_ramps_never_overlap(steps, is_noisy):
    from meseta.intake.cutting.ramps import find_ramps

    places = np.cumsum([0] + [count for count, _ in steps])
    drive = np.interp(np.arange(places[-1] + 1), places, [0.0] + [height for _, height in steps])
    drive = drive + (1e-3 * np.random.default_rng(0).normal(size=len(drive)) if is_noisy else 0.0)
    ramps = find_ramps(lambda a, b: drive[a:b], len(drive), 0.3)
    if ramps is not None:
        assert ramps.begin[0] >= 0
        assert (ramps.end >= ramps.begin).all()
        assert (ramps.begin[1:] >= ramps.end[:-1]).all()
        assert ramps.end[-1] <= len(drive)


# -- marks -----------------------------------------------------------------------------------------------------------


def marked(folder, conductance, recipe_settings, **channels):
    with h5py.File(folder / "marked.h5", "w") as file:
        file.create_dataset("conductance", data=conductance).attrs["unit"] = "G0"
        for name, values in channels.items():
            file.create_dataset(name, data=values)
            if name == "time":
                file[name].attrs["unit"] = "s"
    return intake.read(folder / "marked.h5", Recipe.build({"cutting": recipe_settings}))


def pulses(size, places, width, rng):
    trigger = np.zeros(size)
    for at in places:
        trigger[at : at + width] = 5.0
    return trigger + 0.05 * rng.normal(size=size)


@pytest.mark.parametrize("width", [1, 200])
@pytest.mark.parametrize("level", [None, 1.0])
def test_a_trace_begins_at_every_edge_of_the_trigger(tmp_path, width, level):
    rng = np.random.default_rng(20)
    places = 130 + np.cumsum(rng.integers(500, 700, 9))
    size = int(places[-1]) + 600
    conductance = np.ones(size)
    for at in places:
        conductance[at : at + 400] = 10 ** np.linspace(0.5, -5, 400)
    settings = {"method": "trigger"} | ({} if level is None else {"trigger_level": level})
    traces = marked(tmp_path, conductance, settings, trigger=pulses(size, places, width, rng))
    np.testing.assert_array_equal(traces.table["record_start"], places)
    assert [one["why"] for one in traces.notes["incomplete"]] == ["before the first trigger"]
    assert "trigger" in traces.channels


def test_falling_and_both_edges_and_a_last_trace_cut_off(tmp_path):
    rng = np.random.default_rng(21)
    places = np.arange(100, 5000, 600)
    trigger = pulses(4950, places, 250, rng)
    for edge, expected in (
        ("falling", places[:8] + 250),
        ("both", np.sort(np.concatenate([places, places + 250]))[:17]),
    ):
        settings = {"method": "trigger", "trigger_edge": edge}
        traces = marked(tmp_path, np.ones(4950), settings, trigger=trigger)
        starts = traces.table["record_start"]
        np.testing.assert_array_equal(starts, expected[: len(starts)])
        whys = [one["why"] for one in traces.notes["incomplete"]]
        assert whys[0] == "before the first trigger"
        assert len(starts) + (len(whys) - 1) == np.sum(expected < 4950)


def test_edges_do_not_depend_on_blocks(monkeypatch, tmp_path):
    from meseta.intake.cutting import marks

    rng = np.random.default_rng(22)
    places = 50 + np.cumsum(rng.integers(60, 90, 40))
    size = int(places[-1]) + 80
    trigger = pulses(size, places, 7, rng)
    whole = marked(tmp_path, np.ones(size), {"method": "trigger"}, trigger=trigger).table["record_start"]
    monkeypatch.setattr(marks, "BLOCK", 37)
    np.testing.assert_array_equal(
        marked(tmp_path, np.ones(size), {"method": "trigger"}, trigger=trigger).table["record_start"], whole
    )
    np.testing.assert_array_equal(whole, places)


def test_trigger_number_and_time_agree_on_the_same_record(tmp_path):
    rng = np.random.default_rng(23)
    lengths = rng.integers(300, 500, 12)
    starts = np.concatenate([[0], np.cumsum(lengths)[:-1]])
    size = int(lengths.sum())
    number = np.repeat(np.arange(12, dtype=np.int32), lengths)
    time = np.concatenate([np.arange(n) * 1e-4 for n in lengths])
    trigger = pulses(size, starts[1:], 20, rng)
    by_number = marked(tmp_path, np.ones(size), {"method": "number"}, trace_number=number)
    by_time = marked(tmp_path, np.ones(size), {"method": "time"}, time=time)
    by_trigger = marked(tmp_path, np.ones(size), {"method": "trigger"}, trigger=trigger)
    np.testing.assert_array_equal(by_number.table["record_start"], starts)
    np.testing.assert_array_equal(by_time.table["record_start"], starts)
    np.testing.assert_array_equal(by_trigger.table["record_start"], starts[1:][: by_trigger.traces])


@pytest.mark.parametrize("method", ["trigger", "number", "time"])
def test_a_missing_mark_is_one_clear_message(tmp_path, method):
    from meseta.errors import InputError

    with pytest.raises(InputError, match="no channel has that role") as raised:
        marked(tmp_path, np.ones(200), {"method": method})
    assert "role = " in raised.value.remedy


def test_ramps_within_triggered_cycles(tmp_path):
    """A trigger at every pull, and a drive: each cycle is cut by its ramps, and partners stay together."""
    piezo, conductance, pulls = ramp_record(np.random.default_rng(24), hold=60, lead=137)
    trigger = pulses(len(piezo), pulls[:, 0], 30, np.random.default_rng(25))
    with h5py.File(tmp_path / "record.h5", "w") as file:
        file.create_dataset("piezo", data=piezo).attrs["unit"] = "V"
        file.create_dataset("conductance", data=conductance).attrs["unit"] = "G0"
        file.create_dataset("trigger", data=trigger)
    traces = intake.read(tmp_path / "record.h5", Recipe.build({"cutting": {"method": "trigger"}}))
    opening = traces.table["direction"] == "opening"
    assert opening.sum() == len(pulls)
    assert (~opening).sum() == len(pulls)
    assert np.abs(traces.table["record_start"][opening] - pulls[:, 0]).max() <= 2
    assert (traces.table["partner"][opening] >= 0).all()


@pytest.mark.parametrize(("edge", "begins_high"), [("rising", True), ("rising", False), ("falling", False)])
def test_a_record_that_begins_with_its_trigger_keeps_its_first_trace(tmp_path, edge, begins_high):
    """An acquisition that the trigger starts shows no edge at its first sample; what stands before is no such trace."""
    rng = np.random.default_rng(26)
    conductance = np.tile(10.0 ** -np.linspace(-0.5, 5, 800), 6)
    places = np.arange(0 if begins_high or edge == "falling" else 400, len(conductance), 800)
    trigger = pulses(len(conductance), places, 40, rng)
    trigger = 5.0 - trigger if edge == "falling" else trigger
    traces = marked(tmp_path, conductance, {"method": "trigger", "trigger_edge": edge}, trigger=trigger)
    first = 0 if begins_high or edge == "falling" else 400
    assert traces.table["record_start"].tolist()[0] == first
    assert any("before the first trigger" in one["why"] for one in traces.notes["incomplete"]) == (first > 0)
