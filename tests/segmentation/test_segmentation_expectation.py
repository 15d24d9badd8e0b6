"""Injection and recovery, and the choice of traces for a contact sheet."""

import json

import numpy as np
import pytest
from test_segmentation_finder import RELATIVE, SIGMA, STEP_NM, ideal, recording

from meseta.analysis import Analysis
from meseta.errors import CallError
from meseta.segmentation import Expectation, choose_traces, expect
from meseta.segmentation.expected import poisson_interval, wilson_interval
from meseta.traces import TraceSet
from meseta.work import Work

PULL = ("pull",)


def expectation(**keywords):
    analysis = Analysis(recording(30))
    return expect(
        analysis.traces,
        analysis.recipe.plateaus,
        analysis.noise(),
        analysis.result("alignment"),
        PULL,
        blank=True,
        **keywords,
    )


def test_bright_long_plateaus_are_found_and_dark_short_ones_are_not():
    result = expectation(conductance_g0=[2e-6, 1e-4, 1e-3], length=[4 * STEP_NM, 200 * STEP_NM])
    assert result.planted.min() >= 25
    assert np.all(result.efficiency[:, 0] == 0)
    assert result.efficiency[0, 1] < 0.1
    assert np.all(result.efficiency[1:, 1] > 0.95)
    assert np.all(np.abs(result.level_bias_decades[1:, 1]) < 0.01)
    assert np.all(np.abs(result.length_bias[1:, 1]) < 10 * STEP_NM)
    assert result.limit_g0[1] == 1e-4
    assert np.isnan(result.limit_g0[0])
    assert result.false_a_trace < 0.05
    assert result.efficiency_at(3e-4, 200 * STEP_NM) > 0.95


def test_the_lengths_planted_by_default_are_lengths_that_are_sought():
    usual = expectation(each=25)
    assert usual.length[0] >= 20 * STEP_NM * 0.999 and usual.length[-1] == pytest.approx(500 * STEP_NM)
    assert usual.efficiency[-1, 0] > 0.8
    analysis = Analysis(recording(30))
    patient = analysis.recipe.with_values("plateaus", minimum_length_nm=0.3).plateaus
    asked = expect(analysis.traces, patient, analysis.noise(), analysis.result("alignment"), PULL, each=25, blank=True)
    assert asked.length[0] > 0.3
    assert asked.efficiency[-1, 0] > 0.8


def test_the_prediction_holds_on_traces_made_elsewhere():
    predicted = expectation(conductance_g0=[2e-4], length=[200 * STEP_NM]).efficiency[0, 0]
    table = Analysis(recording(30, seed=77, molecule=2e-4)).plateaus()
    molecules = table.take(table.kind == "molecule")
    assert abs(len(molecules) / 30 - predicted) < 0.1


def test_the_prediction_near_the_limit_holds_on_unseen_traces():
    # Plateaus of 40 samples at 5 floor sigma are found in part.  Predicted from 150 blank traces; then 150 other
    # traces with that plateau are searched, and judged by the same rule.
    blank = Analysis(recording(150, seed=5))
    level, samples = 5e-6, 40
    predicted = expect(
        blank.traces, blank.recipe.plateaus, blank.noise(), blank.result("alignment"), PULL, blank=True,
        conductance_g0=[level], length=[samples * STEP_NM], each=150,
    )  # fmt: skip
    rng = np.random.default_rng(55)
    clean = ideal()
    begin = int(np.flatnonzero(clean >= level)[-1]) + 1
    away = int(np.flatnonzero(clean < 0.05 * level)[0])
    clean = np.concatenate([clean[:begin], clean[away:]])
    clean[begin : begin + samples] += level
    relative, absolute = rng.standard_normal((2, 150, len(clean)))
    rows = clean * (1 + RELATIVE * relative) + SIGMA * absolute
    table = Analysis(TraceSet.from_arrays(rows, step_nm=STEP_NM)).plateaus()
    common = np.minimum(table.stop, begin + samples) - np.maximum(table.start, begin)
    union = np.maximum(table.stop, begin + samples) - np.minimum(table.start, begin)
    right = (common >= 0.5 * union) & (np.abs(np.log10(np.maximum(table.level_g0, 1e-9) / level)) <= 0.1)
    seen = len(np.unique(table.trace[right])) / 150
    error = np.hypot(predicted.efficiency_error[0, 0], np.sqrt(seen * (1 - seen) / 150))
    assert 0.05 < seen < 0.99
    assert abs(seen - predicted.efficiency[0, 0]) < 3 * error


def test_blocks_change_nothing():
    one = expectation(conductance_g0=[1e-4, 1e-3], length=[40 * STEP_NM], seed=3)
    other = expectation(conductance_g0=[1e-4, 1e-3], length=[40 * STEP_NM], seed=3, work=Work(block_samples=3000))
    assert one.plain() == other.plain()


def test_the_result_is_kept_and_read_back():
    result = expectation(conductance_g0=[2e-6, 1e-3], length=[4 * STEP_NM, 100 * STEP_NM], each=20)
    text = json.dumps(result.plain(), allow_nan=False)
    again = Expectation.from_plain(json.loads(text))
    assert again.plain() == result.plain()
    assert np.array_equal(again.found, result.found) and again.found.dtype == np.int64
    columns = result.columns()
    assert {len(column) for column in columns.values()} == {4}
    assert columns["conductance_g0"].tolist() == [2e-6, 2e-6, 1e-3, 1e-3]
    assert columns["efficiency"].tolist() == result.efficiency.ravel().tolist()
    with pytest.raises(CallError, match="efficiency"):
        Expectation.from_plain({name: value for name, value in result.plain().items() if name != "efficiency"})


def test_a_result_kept_beside_the_recording_does_not_disturb_it(tmp_path):
    import meseta

    rows = np.vstack([recording(4).trace_conductance(t) for t in range(4)])
    np.savetxt(tmp_path / "night.csv", rows.T, delimiter=",", header="a (G0),b (G0),c (G0),d (G0)", comments="")
    before = meseta.read(tmp_path / "night.csv").traces
    result = expectation(conductance_g0=[1e-3], length=[100 * STEP_NM], each=5)
    (tmp_path / "night.json").write_text(json.dumps(result.plain()))
    assert meseta.read(tmp_path / "night.csv").traces == before


def test_yield_and_formation_take_it():
    from meseta.histograms.yields import window_efficiency
    from meseta.peaks import formation_probability

    result = expectation(conductance_g0=[1e-4, 1e-3], length=[50 * STEP_NM, 100 * STEP_NM], each=30)
    molecules = Analysis(recording(30, seed=77, molecule=2e-4)).plateaus()
    seen, seen_error = window_efficiency(result, molecules, (1e-4, 1e-3))
    assert seen > 0.9 and 0 < seen_error < 0.1
    efficiency = result.efficiency_at(3e-4, 80 * STEP_NM)
    error = result.efficiency_error_at(3e-4, 80 * STEP_NM)
    formed = formation_probability(30, 100, efficiency=efficiency, efficiency_sigma=error)
    assert formed.probability == pytest.approx(0.3 / efficiency)
    assert 0 < error < 0.1


def test_same_seed_same_answer():
    one = expectation(conductance_g0=[1e-4], length=[30 * STEP_NM], seed=3)
    other = expectation(conductance_g0=[1e-4], length=[30 * STEP_NM], seed=3)
    assert np.array_equal(one.found, other.found)
    assert np.array_equal(one.level_bias_decades, other.level_bias_decades, equal_nan=True)


def test_intervals():
    # Wilson 1927 for 9 of 10 and Garwood 1936 for no event: values computed with scipy.stats.
    from scipy.stats import binomtest, chi2

    low, high = wilson_interval(np.array([9]), np.array([10]))
    theirs = binomtest(9, 10).proportion_ci(method="wilson")
    assert (low[0], high[0]) == pytest.approx((theirs.low, theirs.high))
    assert poisson_interval(0) == pytest.approx((0.0, chi2.ppf(0.975, 2) / 2))


def test_nothing_to_plant_in():
    analysis = Analysis(recording(5, molecule=2e-4))
    with pytest.raises(CallError, match="no trace"):
        expect(analysis.traces, analysis.recipe.plateaus, analysis.noise(), analysis.result("alignment"), PULL)


def test_choice_of_traces():
    table = Analysis(recording(12, molecule=2e-4)).plateaus()
    chosen = choose_traces(table, 12, 5, seed=1)
    assert len(set(chosen.tolist())) == 5
    assert np.array_equal(chosen, np.sort(chosen))
    group = np.where(np.arange(12) < 3, "a;b", "")
    assert choose_traces(table, 12, 5, "group", group=group, name="b").tolist() == [0, 1, 2]
    worst = int(table.trace[np.argmin(np.nan_to_num(table.score - 0.25 * table.telegraph, nan=1.0))])
    assert choose_traces(table, 12, 3, "doubt")[0] == worst
    with pytest.raises(CallError, match="no trace"):
        choose_traces(table, 12, 3, "group", group=group, name="c")
