"""Few traces: the peak that all of them make is found, and none that chance makes is preferred to it."""

from __future__ import annotations

import numpy as np
import pytest

from meseta.analysis import Analysis, defensible_analyses
from meseta.peaks.candidates import find_candidates
from meseta.recipe import Recipe
from meseta.simulate import SimulationSettings, simulate

FEW = SimulationSettings(samples=600, sampling_hertz=5000.0, bandwidth_hertz=2000.0)


def recipe_of(preset: str, replicates: int = 200) -> Recipe:
    recipe = Recipe.preset(preset) if preset else Recipe()
    return recipe.with_values("resampling", replicates=replicates)


@pytest.mark.parametrize("preset", ["metal", ""])
def test_twenty_openings_show_the_single_atom(preset):
    """The bundled check of the bench: 20 traces, each with a plateau near 0.985 G0 (its truth)."""
    table = Analysis(simulate("metal", 20, 9, FEW).traces, recipe_of(preset)).result("peaks").table
    assert table.position_low_g0[0] < 0.985 < table.position_high_g0[0]
    assert 0.01 < table.position_high_g0[0] - table.position_low_g0[0] < 0.15
    assert table.status[0] == "fewer than 500 traces"


def test_the_third_metal_peak_comes_before_the_fourth():
    simulation = simulate("metal", 200, 21, SimulationSettings(samples=2000))
    table = Analysis(simulation.traces, recipe_of("metal")).result("peaks").table
    truth = [peak["position_linear_axis_g0"] for peak in simulation.parameters["peaks"][:3]]
    np.testing.assert_allclose(table.position_g0, truth, rtol=0.02)


@pytest.mark.parametrize("preset", ["molecule", ""])
def test_a_blank_claims_no_molecule_and_no_peak_where_traces_begin(preset):
    table = Analysis(simulate("blank", 150, 100, SimulationSettings(samples=2000)).traces, recipe_of(preset)).result(
        "peaks"
    )
    found = table.table.position_g0[np.isfinite(table.table.position_g0)]
    assert ((found > 0.4) & (found < 5.0)).all()


def test_lumps_of_a_few_traces_are_no_peaks():
    """Twelve traces, each one narrow plateau anywhere: the hills are alike in all draws, and still are chance."""
    edges = np.linspace(0.0, 5.0, 501)
    middle = (edges[1:] + edges[:-1]) / 2
    spurious = 0
    for seed in range(20):
        rng = np.random.default_rng(seed)
        level = rng.uniform(0.3, 4.7, 12)
        counts = np.array([np.histogram(rng.normal(at, 0.02, 200), edges)[0] for at in level])
        drawn = rng.multinomial(12, np.full(12, 1 / 12), 60) @ counts
        reach = (counts > 0).sum(axis=0)
        found = find_candidates(middle, counts.sum(axis=0), reach, drawn, (0.0, 5.0), False, 12)
        spurious += len(found)
    assert spurious <= 2


def test_all_defensible_analyses_of_traces():
    """The adapter adds other histograms (another region here) to the choices of the fit."""
    analysis = Analysis(simulate("metal", 60, 4, FEW).traces, recipe_of("metal"))
    found = defensible_analyses(analysis)
    assert set(found.histogram) == {"as chosen", "whole phase", "zero at 0.3 G0", "zero at 0.7 G0"}
    spread, table = found.spread(), analysis.result("peaks").table
    np.testing.assert_allclose(spread.chosen_g0, table.position_g0, rtol=1e-6)
    assert spread.lowest_g0[0] <= spread.chosen_g0[0] <= spread.highest_g0[0]
    assert spread.chosen_g0[0] == pytest.approx(0.985, abs=0.03)
