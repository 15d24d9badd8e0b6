"""The onset of tunnelling is a shoulder of the histogram, and no molecule."""

from __future__ import annotations

import numpy as np
import pytest

from meseta import Analysis, Recipe, TraceSet


def tunnelling(traces, seed, molecules=0):
    """Traces that jump from 1 G0 to a gap of 0.2 to 2e-3 G0, then tunnel; some stay on a plateau at 3e-5 G0."""
    rng = np.random.default_rng(seed)
    rows = []
    for number in range(traces):
        onset = rng.normal(-3.4, 0.2)
        decay = onset - 10.0 * rng.normal(1, 0.06) * 0.002 * np.arange(400)
        if number < molecules:
            level = rng.normal(-4.53, 0.1)
            decay = np.where((decay < level) & (np.arange(400) < 330), level - 2e-4 * np.arange(400), decay)
        metal = np.full(120, np.log10(rng.normal(0.97, 0.03)))
        trace = 10.0 ** np.concatenate([metal, decay]) * np.exp(rng.normal(0, 0.04, 520))
        rows.append(trace + rng.normal(0, 7e-7, 520))
    return TraceSet.from_arrays([rows[place] for place in rng.permutation(traces)], step_nm=0.002)


def peaks(traces, preset):
    recipe = Recipe.preset(preset) if preset else Recipe()
    table = Analysis(traces, recipe.with_values("resampling", replicates=100)).result("peaks").table
    return [float(position) for position in table.position_g0 if position < 0.4]


@pytest.mark.parametrize("preset", ["molecule", None])
@pytest.mark.parametrize("seed", [1, 2])
def test_no_peak_is_claimed_on_a_blank_with_a_sharp_onset_of_tunnelling(preset, seed):
    assert peaks(tunnelling(400, seed), preset) == []


def test_a_molecule_of_ten_percent_is_found_beside_the_shoulder_and_alone():
    found = peaks(tunnelling(400, 3, molecules=40), "molecule")
    assert len(found) == 1
    assert found[0] == pytest.approx(2.75e-5, rel=0.15)
