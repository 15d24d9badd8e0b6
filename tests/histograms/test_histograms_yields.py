"""Molecular yield: planted shares come back within their intervals, and what a bad answer would be is refused."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from test_histograms_record import plateaus_at
from yield_experiments import SHARES, WINDOW, efficiency, experiment, recording

from meseta.analysis import yield_in_window
from meseta.errors import CallError
from meseta.histograms import molecular_yield, window_efficiency
from meseta.work import Work


def test_planted_yields_come_back_from_the_samples() -> None:
    """50, 20, 5 and 0 %, two recordings of 200 traces each: 8 intervals of 95 %, of which 6 hold (p = 0.994)."""
    work = Work(threads=2)
    known = efficiency(600, 7, work)
    assert 0.5 < known.share < 0.8
    held = []
    for share in SHARES:
        for number in range(2):
            found = experiment(share, 200, int(1000 * share) + number, known, work)
            held.append(found.share_low <= share <= found.share_high)
            assert found.share == pytest.approx(share, abs=0.13)
    assert sum(held) >= 6


@pytest.mark.parametrize("share", [0.5, 0.2, 0.05, 0.0])
def test_intervals_over_an_uncertain_efficiency_hold_as_they_say(share: float) -> None:
    """300 experiments: 60 % of molecules are seen, which is known to 3 %; 2 % false plateaus."""
    random, held, limits = np.random.default_rng(int(1000 * share) + 1), [], []
    for _ in range(300):
        seen = (random.random(1000) < share) & (random.random(1000) < 0.6)
        hit, blank = seen | (random.random(1000) < 0.02), random.random(800) < 0.02
        found = molecular_yield(hit, blank, random.normal(0.6, 0.03), 0.03)
        held.append(found.share_low <= share <= found.share_high)
        limits.append(share <= found.upper_limit)
    # 95 % within three binomial standard deviations, or above for small counts
    assert 0.912 <= np.mean(held) <= 0.995
    assert np.mean(limits) >= 0.912


def test_specimens_that_differ_widen_the_interval() -> None:
    """Seven specimens with yields that scatter by 10 %: the interval is for the population of specimens."""
    random, held = np.random.default_rng(4), []
    specimen = np.repeat(np.arange(7), 150)
    for _ in range(300):
        mine = np.clip(random.normal(0.3, 0.1, 7), 0, 1)
        hit = random.random(1050) < mine[specimen]
        found = molecular_yield(hit, None, specimen=specimen)
        held.append(found.share_low <= 0.3 <= found.share_high)
        assert "7 specimens" in found.reason or found.effective_traces == 1050
    assert 0.90 <= np.mean(held) <= 0.99
    one = np.arange(1050) % 10 < 3
    assert molecular_yield(one, specimen=specimen).effective_traces == 1050


def test_efficiency_scales_the_share_and_is_said() -> None:
    hit = np.arange(1000) % 5 == 0
    all_seen, half_seen = molecular_yield(hit), molecular_yield(hit, efficiency=0.5)
    assert half_seen.share == pytest.approx(2 * all_seen.share)
    assert half_seen.share_high == pytest.approx(2 * all_seen.share_high)
    assert "efficiency of 50 %" in half_seen.text
    unsure = molecular_yield(hit, efficiency=0.5, efficiency_error=0.05)
    assert unsure.share_high - unsure.share_low > half_seen.share_high - half_seen.share_low
    for wrong in (0.0, 1.2, -1.0):
        with pytest.raises(CallError, match="share of traces"):
            molecular_yield(hit, efficiency=wrong)


def test_no_trace_is_no_number_and_says_so() -> None:
    found = molecular_yield(np.zeros(0, bool), np.zeros(0, bool))
    assert np.isnan(found.share)
    assert not found.found
    assert "no trace" in found.text


def test_efficiency_of_what_was_found_counts_the_missed() -> None:
    """Two kinds, 90 found of 100 planted and 20 of 100: 9 and 2 found stand for 10 and 10."""
    detection = SimpleNamespace(
        conductance_g0=np.array([1e-5, 1e-4]),
        length=np.array([0.1, 1.0]),
        planted=np.full((2, 2), 100),
        found=np.array([[20, 50], [80, 90]]),
    )
    table = plateaus_at([1.1e-4] * 9 + [0.9e-5] * 2 + [1.0], np.arange(12), [1.2] * 9 + [0.09] * 2 + [1.0])
    share, error = window_efficiency(detection, table, (1e-6, 1e-2))
    assert share == pytest.approx(11 / 20)
    # nearly all of the error is that of the second kind: 10 of 20, known to sqrt(0.2 x 0.8 / 100) / 0.2 = 20 %
    assert error == pytest.approx(11 / 20 * 0.5 * 0.2, rel=0.1)
    assert np.isnan(window_efficiency(detection, table, (1e-9, 1e-8))[0])


def test_blank_with_other_plateau_settings_is_refused() -> None:
    work = Work(threads=1)
    molecule, blank = (recording("molecule", share, 20, 3, work) for share in (0.5, 0.0))
    other = blank.with_recipe(blank.recipe.with_values("plateaus", sensitivity=7))
    with pytest.raises(CallError, match="other settings"):
        yield_in_window(molecule, WINDOW, other)
