"""Peaks of simulated recordings, from the traces on: the truth is the simulation's own population of conductances."""

from __future__ import annotations

import numpy as np
import pytest

from meseta.analysis import Analysis
from meseta.recipe import Recipe
from meseta.simulate import SimulationSettings, simulate


@pytest.fixture(scope="module")
def recording():
    settings = SimulationSettings(samples=2000, sampling_hertz=10_000.0, bandwidth_hertz=4000.0)
    return simulate("molecule", 600, 3, settings)


def truths(simulation, axis: str) -> dict[str, float]:
    return {peak["name"]: peak[f"position_{axis}_axis_g0"] for peak in simulation.parameters["peaks"]}


def test_molecule_and_metal_are_found_in_one_recording(recording):
    table = Analysis(recording.traces, Recipe()).result("peaks").table
    truth = truths(recording, "logarithmic")
    for row, name in enumerate(("molecule", "1 atom", "2 atoms")):
        half = (table.position_high_g0[row] - table.position_low_g0[row]) / 2
        assert table.position_g0[row] == pytest.approx(truth[name], abs=2.5 * half)
        assert table.status[row] == "ok"
    assert table.position_g0.min() > 1e-4


def test_first_metal_peak_is_the_single_atom(recording):
    table = Analysis(recording.traces, Recipe.preset("metal")).result("peaks").table
    truth = truths(recording, "linear")
    np.testing.assert_allclose(table.position_g0[:2], [truth["1 atom"], truth["2 atoms"]], rtol=0.02)
    assert str(table.assigned[0]).startswith("1 G0")
