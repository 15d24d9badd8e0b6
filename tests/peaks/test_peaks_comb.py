"""The comb that a converter's steps make of narrow bins is no peak."""

from __future__ import annotations

import numpy as np

from meseta import Analysis, Recipe, TraceSet


def test_a_comb_of_converter_steps_is_not_proposed_as_a_peak():
    rng = np.random.default_rng(5)
    step, rows = 6e-7, []
    for _ in range(300):
        decay = 10 ** -np.linspace(1.5, 6.5, 500)
        floor = np.zeros(500)
        trace = np.concatenate([np.full(150, rng.normal(1.0, 0.04)), decay, floor])
        trace = trace * np.exp(rng.normal(0, 0.03, len(trace))) + rng.normal(0, 1.5e-6, len(trace))
        rows.append(np.round(trace / step) * step)
    recipe = Recipe.preset("molecule").with_values("resampling", replicates=60)
    table = Analysis(TraceSet.from_arrays(rows, step_nm=0.002), recipe).result("peaks").table
    assert not np.isfinite(table.position_g0).any(), table.position_g0
