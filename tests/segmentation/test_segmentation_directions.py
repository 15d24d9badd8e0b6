"""Traces of the direction that is not analysed: measures are unknown, never zero."""

from __future__ import annotations

import numpy as np

from meseta import intake
from meseta.analysis import Analysis
from meseta.recipe import Recipe
from meseta.work import Work


def test_the_span_of_a_closing_trace_is_not_claimed_to_be_zero(tmp_path):
    rng, lines = np.random.default_rng(2), ["piezo (V),conductance (G0)"]
    for _ in range(6):
        drive = np.linspace(0, 5, 300)
        pull = np.where(drive < 2, 1.0, 1e-4) * np.exp(rng.normal(0, 0.01, 300))
        lines += [f"{v:.5f},{g:.6g}" for v, g in zip(drive, pull, strict=True)]
        lines += [f"{v:.5f},{g:.6g}" for v, g in zip(drive[::-1], pull[::-1], strict=True)]
    (tmp_path / "ramp.csv").write_text("\n".join(lines) + "\n")
    recipe = Recipe().with_settings(["calibration.nm_per_volt=2", "cutting.pull_is=rising"])
    traces = intake.read([str(tmp_path / "ramp.csv")], recipe)
    span = Analysis(traces, recipe).result("measures", Work()).drive_span
    opening = np.isfinite(span)
    assert 5 <= opening.sum() <= 6 and (~opening).sum() >= 5
    np.testing.assert_allclose(span[opening], 10.0, rtol=0.02)
