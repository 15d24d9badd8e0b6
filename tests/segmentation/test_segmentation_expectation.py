"""Injection and recovery, and the choice of traces for a contact sheet."""

import numpy as np
import pytest
from test_segmentation_finder import STEP_NM, recording

from meseta.analysis import Analysis
from meseta.errors import CallError
from meseta.segmentation import choose_traces, expect
from meseta.segmentation.expectation import _poisson, _wilson

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


def test_the_prediction_holds_on_traces_made_elsewhere():
    predicted = expectation(conductance_g0=[2e-4], length=[200 * STEP_NM]).efficiency[0, 0]
    table = Analysis(recording(30, seed=77, molecule=2e-4)).plateaus()
    molecules = table.take(table.kind == "molecule")
    assert abs(len(molecules) / 30 - predicted) < 0.1


def test_same_seed_same_answer():
    one = expectation(conductance_g0=[1e-4], length=[30 * STEP_NM], seed=3)
    other = expectation(conductance_g0=[1e-4], length=[30 * STEP_NM], seed=3)
    assert np.array_equal(one.found, other.found)
    assert np.array_equal(one.level_bias_decades, other.level_bias_decades, equal_nan=True)


def test_intervals():
    # Wilson 1927 for 9 of 10 and Garwood 1936 for no event: values computed with scipy.stats.
    from scipy.stats import binomtest, chi2

    low, high = _wilson(np.array([9]), np.array([10]))
    theirs = binomtest(9, 10).proportion_ci(method="wilson")
    assert (low[0], high[0]) == pytest.approx((theirs.low, theirs.high))
    assert _poisson(0) == pytest.approx((0.0, chi2.ppf(0.975, 2) / 2))


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
