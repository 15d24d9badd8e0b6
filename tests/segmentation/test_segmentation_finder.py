"""The noise model and the plateau finder on small recordings whose truth is written down here."""

import numpy as np
import pytest

from meseta.analysis import Analysis
from meseta.recipe import Recipe
from meseta.traces import TraceSet

STEP_NM = 0.002
SIGMA = 1e-6
RELATIVE = 0.01


def ideal(molecule=None, samples=1500):
    """Return a staircase 3, 2, 1 G0, a jump, tunnelling at 10 decades/nm, perhaps a molecule, and the floor."""
    parts = [np.full(80, 2.9), np.full(120, 1.95), np.full(150, 0.98)]
    decay = 1e-2 * 10 ** (-10 * STEP_NM * np.arange(400))
    if molecule is None:
        parts.append(decay)
    else:
        parts += [decay[decay > molecule], np.full(200, molecule)]
    g = np.concatenate(parts)
    return np.concatenate([g, np.zeros(samples - len(g))])


def recording(traces=30, seed=0, molecule=None, scale=1.0, **keywords):
    rng = np.random.default_rng(seed)
    clean = ideal(molecule, **keywords)
    rows = [
        scale * (clean * (1 + RELATIVE * rng.standard_normal(len(clean))) + SIGMA * rng.standard_normal(len(clean)))
        for _ in range(traces)
    ]
    return TraceSet.from_arrays(rows, step_nm=STEP_NM)


def test_noise_model_learns_what_was_put_in():
    noise = Analysis(recording(60)).noise()
    assert noise.floor_traces == 60
    assert abs(noise.floor_g0) < 0.2 * SIGMA
    assert noise.floor_sigma_g0 == pytest.approx(SIGMA, rel=0.08)
    assert noise.sigma(1.0) == pytest.approx(RELATIVE, rel=0.25)
    assert noise.tunnelling_slope == pytest.approx(-10.0, rel=0.1)
    assert noise.saturation_g0 == np.inf
    assert noise.rise_samples < 2


def test_stated_noise_wins():
    recipe = Recipe().with_settings(["noise.floor_sigma_g0=3e-6", "noise.rise_samples=4.0", "noise.saturation_g0=2.5"])
    noise = Analysis(recording(10), recipe).noise()
    assert (noise.floor_sigma_g0, noise.rise_samples, noise.saturation_g0) == (3e-6, 4.0, 2.5)
    assert set(noise.stated) == {"floor_sigma_g0", "rise_samples", "saturation_g0"}


def test_no_floor_is_said():
    rng = np.random.default_rng(1)
    rows = [np.full(400, level) * (1 + 0.01 * rng.standard_normal(400)) for level in rng.uniform(0.5, 3, 20)]
    noise = Analysis(TraceSet.from_arrays(rows)).noise()
    assert noise.floor_traces == 0
    assert noise.floor_g0 == 0
    assert noise.floor_sigma_g0 > 0


def test_saturation_is_seen():
    rng = np.random.default_rng(2)
    rows = [np.minimum(ideal() * (1 + 0.02 * rng.standard_normal(1500)), 2.5) for _ in range(20)]
    analysis = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM))
    assert analysis.noise().saturation_g0 == pytest.approx(2.5, rel=1e-3)
    table = analysis.plateaus()
    assert not np.any(table.level_g0 > 2.4)
    first = table.take(np.isclose(table.level_g0, 1.95, rtol=0.02))
    assert len(first) == 20
    assert set(first.censored) == {"saturation"}


def test_rise_time_of_a_slow_amplifier():
    from scipy.signal import lfilter

    keep = np.exp(-2.2 / 6)  # one pole: 10 to 90 % in ln 9 = 2.2 time constants
    rng = np.random.default_rng(3)
    rows = [
        lfilter([1 - keep], [1, -keep], ideal(), zi=[2.9 * keep])[0] * (1 + 0.01 * rng.standard_normal(1500))
        for _ in range(20)
    ]
    noise = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).noise()
    assert noise.rise_samples == pytest.approx(6, rel=0.2)


@pytest.mark.parametrize("scale", [1.0, 1e-6])
def test_staircase_is_found_to_the_sample(scale):
    recipe = Recipe() if scale == 1 else Recipe().with_settings(["plateaus.join_decades=0.02"])
    table = Analysis(recording(12, scale=scale), recipe).plateaus()
    assert len(table) == 36
    assert np.array_equal(table.start.reshape(12, 3), np.tile([0, 80, 200], (12, 1)))
    assert np.array_equal(table.stop.reshape(12, 3), np.tile([80, 200, 350], (12, 1)))
    assert np.allclose(table.level_g0.reshape(12, 3), scale * np.array([2.9, 1.95, 0.98]), rtol=0.005)
    assert np.array_equal(table.number.reshape(12, 3), np.tile([3, 2, 1], (12, 1)))
    assert np.allclose(table.length_nm.reshape(12, 3), np.array([80, 120, 150]) * STEP_NM)
    assert np.all(np.isfinite(table.level_sigma_g0))


def test_molecular_plateau_and_nothing_in_decay_or_floor():
    table = Analysis(recording(20, molecule=2e-4)).plateaus()
    molecules = table.take(table.kind == "molecule")
    assert np.array_equal(molecules.trace, np.arange(20))
    assert np.median(np.abs(molecules.stop - molecules.start - 200)) <= 2
    assert np.median(molecules.level_g0) == pytest.approx(2e-4, rel=0.01)
    assert np.all(molecules.number == 1)
    assert np.all(molecules.jump_after_decades < -1)


def test_a_longer_floor_changes_nothing():
    rng = np.random.default_rng(4)
    short = [ideal(2e-4) * (1 + 0.01 * rng.standard_normal(1500)) + SIGMA * rng.standard_normal(1500) for _ in range(8)]
    longer = [np.concatenate([g, SIGMA * np.random.default_rng(5).standard_normal(4000)]) for g in short]
    recipe = Recipe().with_settings(["noise.floor_g0=0.0", "noise.floor_sigma_g0=1e-6", "noise.relative_noise=0.01"])
    one = Analysis(TraceSet.from_arrays(short, step_nm=STEP_NM), recipe).plateaus()
    other = Analysis(TraceSet.from_arrays(longer, step_nm=STEP_NM), recipe).plateaus()
    assert np.array_equal(one.start, other.start)
    assert np.array_equal(one.stop, other.stop)


def test_telegraph_plateau_stays_one():
    rng = np.random.default_rng(6)
    rows = []
    for _ in range(10):
        g = ideal(2e-4)
        begin = np.flatnonzero(g == 2e-4)[0]
        state = np.repeat([0, 1, 0, 1, 0], 40)
        g[begin : begin + 200] *= 10 ** (-0.25 * state)
        rows.append(g * (1 + 0.01 * rng.standard_normal(1500)) + SIGMA * rng.standard_normal(1500))
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    molecules = table.take(table.kind == "molecule")
    assert len(molecules) == 10
    assert np.all(molecules.telegraph)
    assert np.all(molecules.noise_decades > 0.08)


def test_sloping_plateau_is_found_with_its_slope():
    rng = np.random.default_rng(7)
    rows = []
    for _ in range(20):
        g = ideal(3e-4)
        begin = np.flatnonzero(g == 3e-4)[0]
        g[begin : begin + 200] = 3e-4 * 10 ** (-1.0 * STEP_NM * np.arange(200))
        rows.append(g * (1 + 0.02 * rng.standard_normal(1500)) + SIGMA * rng.standard_normal(1500))
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    molecules = table.take(table.kind == "molecule")
    assert len(molecules) == 20
    assert np.median(molecules.slope_decades_per_nm) == pytest.approx(-1.0, abs=0.1)


def test_closing_traces_mirror_opening_ones():
    forward = recording(6, molecule=2e-4)
    backward = TraceSet.from_arrays(
        [forward.trace_conductance(t)[::-1] for t in range(6)], step_nm=STEP_NM, direction="closing"
    )
    one = Analysis(forward).plateaus()
    other = Analysis(backward, Recipe().with_settings(["histogram.direction=closing"])).plateaus()
    assert len(one) == len(other)
    for trace in range(6):
        mine, theirs = one.trace == trace, other.trace == trace
        assert np.array_equal(np.sort(1500 - other.stop[theirs]), one.start[mine])


@pytest.mark.parametrize(
    "rows",
    [
        [np.array([1.0])],
        [np.full(100, 1.0)],
        [np.zeros(100)],
        [np.full(50, np.nan)],
        [np.empty(0), np.ones(3)],
        [np.repeat([3.0, 2.0, 1.0, 0.0], 100)],
        [np.r_[np.full(60, 2.0), np.full(20, np.nan), np.full(60, 1.0), np.zeros(100)]],
        [np.full(200, -1.0)],
    ],
    ids=["one sample", "constant", "zero", "NaN", "empty", "no noise", "gap", "negative"],
)
def test_degenerate_traces(rows):
    analysis = Analysis(TraceSet.from_arrays(rows, step_nm=0.01))
    table, measures = analysis.plateaus(), analysis.result("measures")
    assert len(measures) == len(rows)
    assert np.all(table.stop > table.start)
    assert np.all(table.level_g0 > 0)


def test_missing_samples_and_spikes_do_not_split_a_plateau():
    rng = np.random.default_rng(8)
    rows = []
    for _ in range(10):
        g = ideal() * (1 + 0.01 * rng.standard_normal(1500)) + SIGMA * rng.standard_normal(1500)
        g[230:250] = np.nan
        g[300] *= 1.5
        g[900] = 0.3
        rows.append(g)
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    last = table.take(np.isclose(table.level_g0, 0.98, rtol=0.02))
    assert np.array_equal(last.start, np.full(10, 200))
    assert np.array_equal(last.stop, np.full(10, 350))
    assert len(table) == 30


def test_blocks_and_threads_change_nothing():
    from meseta.work import Work

    traces = recording(20, molecule=2e-4)
    one = Analysis(traces).plateaus(Work(threads=1))
    many = Analysis(traces).plateaus(Work(threads=2, block_samples=4000))
    assert np.array_equal(one.start, many.start)
    assert np.array_equal(one.level_g0, many.level_g0)
    assert np.array_equal(one.trace, many.trace)


@pytest.mark.parametrize("method", ["derivative", "levels"])
def test_simpler_detectors_give_the_same_table(method):
    table = Analysis(recording(10, molecule=2e-4), Recipe().with_settings([f"plateaus.method={method}"])).plateaus()
    last = table.take(np.isclose(table.level_g0, 0.98, rtol=0.05))
    molecules = table.take(np.isclose(np.log10(table.level_g0), np.log10(2e-4), atol=0.1))
    assert len(last) == 10
    assert len(molecules) == 10
    assert np.all(np.abs(last.stop - last.start - 150) <= 20)
    assert table.columns().keys() == Analysis(recording(2)).plateaus().columns().keys()


def test_level_crossing_length_of_the_contact():
    # 150 samples at 0.98 G0 lie between the last crossings of 1.2 and 0.5 G0: 150 steps, to one step.
    measures = Analysis(recording(10)).result("measures")
    assert np.allclose(measures.crossing_length, 150 * STEP_NM, atol=1.1 * STEP_NM)
    assert np.allclose(measures.tunnelling_slope, -10, rtol=0.05)
    assert np.all(measures.reaches_floor)
    assert np.allclose(measures.floor_noise_g0, SIGMA, rtol=0.15)
    assert not np.any(measures.reforms)


def test_a_spike_is_no_crossing_and_a_gap_is_bridged():
    rng = np.random.default_rng(12)
    rows = [ideal() * (1 + 0.01 * rng.standard_normal(1500)) + SIGMA * rng.standard_normal(1500) for _ in range(10)]
    for row in rows:
        row[1200:1202] = 0.8  # two samples: closing on a particle, pickup ...
        row[345:349] = np.nan
    measures = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).result("measures")
    assert np.allclose(measures.crossing_length, 150 * STEP_NM, atol=1.1 * STEP_NM)


def test_no_barrier_is_taken_from_a_decay_with_a_plateau():
    measures = Analysis(recording(10, molecule=2e-4)).result("measures")
    assert set(measures.barrier_refused) == {"the decay is not straight: a plateau lies in it"}
    assert np.all(np.isnan(measures.apparent_barrier_ev))


def test_apparent_barrier_and_why_there_is_none():
    # 9.950338171 decades/nm is a square barrier of 5 eV (tests/core/test_core_quantities.py); 10 decades/nm is 5.05 eV.
    traces = recording(10)
    measures = Analysis(traces).result("measures")
    assert np.allclose(measures.apparent_barrier_ev, 5.05, rtol=0.1)
    assert set(measures.barrier_refused) == {""}
    circular = Analysis(traces, Recipe().with_settings(["calibration.displacement_from=tunnelling"])).result("measures")
    assert np.all(np.isnan(circular.apparent_barrier_ev))
    assert set(circular.barrier_refused) == {"the displacement was calibrated by the tunnelling slope"}
    rows = [traces.trace_conductance(t) for t in range(10)]
    uncalibrated = Analysis(TraceSet.from_arrays(rows)).result("measures")
    assert set(uncalibrated.barrier_refused) == {"the drive is not in nm"}
    flat = Analysis(TraceSet.from_arrays([np.ones(200)], step_nm=STEP_NM)).result("measures")
    assert set(flat.barrier_refused) == {"no tunnelling slope was seen"}


def test_contacts_without_a_neck_do_not_pass_for_a_slow_amplifier():
    # Ideal decays at 8 to 12 decades/nm from contact to floor, no jump: the amplifier is as fast as the sampling.
    rng = np.random.default_rng(9)
    rows = []
    for slope in rng.uniform(8, 12, 60):
        g = 2.0 * 10 ** (-slope * STEP_NM * np.arange(1200))
        rows.append(g * (1 + RELATIVE * rng.standard_normal(1200)) + SIGMA * rng.standard_normal(1200))
    analysis = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM))
    assert analysis.noise().rise_samples < 3
    assert analysis.noise().tunnelling_slope == pytest.approx(-10, rel=0.1)
    assert len(analysis.plateaus()) == 0


@pytest.mark.parametrize("level", ["clean", "hard"])
def test_plateaus_near_the_floor_keep_their_conductance(evaluation, level):
    # Another simulator's molecules of 3 to 10 floor sigma, beside tunnelling that runs into them.
    independent, score = evaluation
    made = independent.recording("low", level, 120, 7)
    found = score.found_by_meseta(made, "change_points")
    figures = score.score(made.truth, found, 120, made.floor_sigma_g0)
    assert figures.molecule_recall > 0.5
    assert abs(figures.bias_low) < 0.03 + 2 * figures.bias_low_error


@pytest.fixture
def evaluation(monkeypatch):
    from pathlib import Path

    monkeypatch.syspath_prepend(str(Path(__file__).parents[1] / "evaluation"))
    import independent
    import score

    return independent, score


def test_saturation_behind_a_series_resistance_and_beside_a_wild_sample():
    # The amplifier stops at a reading of 2.5 G0; 300 ohm removed afterwards, sample by sample, put the pile-up at
    # 2.5 / (1 - 2.5 x 300 / 12906.4) = 2.654 G0.  One trace holds a wild sample far above.
    from meseta.quantities import remove_series_resistance

    rng = np.random.default_rng(10)
    rows = []
    for _ in range(30):
        reading = np.minimum(ideal() * (1 + 0.02 * rng.standard_normal(1500)), 2.5)
        rows.append(remove_series_resistance(reading, 300.0))
    rows[3][700] = 9.0
    analysis = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM))
    assert analysis.noise().saturation_g0 == pytest.approx(2.654, rel=1e-3)
    table = analysis.plateaus()
    assert not np.any(table.level_g0 > 2.5)
    assert set(table.take(table.level_g0 > 1.5).censored) == {"saturation"}
