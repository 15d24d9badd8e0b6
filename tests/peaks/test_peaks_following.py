"""What follows from a table of peaks: resistance, published values beside it, shares of traces."""

from __future__ import annotations

import json

import numpy as np
import pytest
from peaks_synthetic import counts_histogram
from scipy import stats

from meseta import Recipe
from meseta.peaks import fit_histogram, peak_physics
from meseta.segmentation import PlateauTable


def table_of(*places, axis="linear", width=0.06):
    edges = np.linspace(0.1, 4.4, 431) if axis == "linear" else 10 ** np.linspace(-5.5, -2.5, 301)
    u = edges if axis == "linear" else np.log10(edges)
    counts = sum(np.round(4e5 * np.diff(stats.norm.cdf(u, place, width))) for place in places) + 5
    asked = [{"position_g0": float(p if axis == "linear" else 10**p), "width": width} for p in places]
    settings = Recipe().with_values("peaks", peaks=asked, background="constant").peaks
    return fit_histogram(counts_histogram(counts.astype(int), edges, axis), settings).table


def test_positions_behind_400_ohm_give_400_ohm():
    """True 1, 2, 3 G0 behind 400 ohm are read as 0.9699392858, 1.883266243, 2.744796756 G0 (computed reference)."""
    found = peak_physics(table_of(0.9699392858, 1.883266243, 2.744796756))
    assert found.resistance.resistance_ohm == pytest.approx(400, abs=4)
    assert found.resistance.unit_g0 == pytest.approx(1, abs=0.001)
    np.testing.assert_allclose(found.resistance.per_peak_ohm, 400, atol=5)
    assert found.resistance_peaks == ("1", "2", "3")
    json.dumps(found.plain())


def test_no_multiple_no_resistance_and_one_peak_holds_the_unit():
    assert peak_physics(table_of(-3.6, axis="logarithmic", width=0.2)).resistance is None
    alone = peak_physics(table_of(0.9699392858)).resistance
    assert alone.unit_g0 == 1.0
    assert alone.resistance_ohm == pytest.approx(400, abs=4)


def test_published_octanedithiol_stands_beside_a_peak_near_it():
    """51 +- 5 Mohm = 2.53e-4 G0: Xu, Tao, Science 301, 1221 (2003)."""
    (near,) = peak_physics(table_of(-3.6, axis="logarithmic", width=0.2)).published
    assert "octanedithiol" in near[0].system


def test_the_share_of_traces_counts_each_trace_once():
    table = table_of(-3.6, axis="logarithmic", width=0.2)
    level = 10 ** np.array([-3.6, -3.5, -3.65, -2.9])  # the last is outside half maximum
    trace = np.array([4, 4, 7, 9])
    one = PlateauTable.empty()
    columns = {name: np.zeros(4, column.dtype) for name, column in one.columns().items()}
    plateaus = PlateauTable(**(columns | {"trace": trace, "level_g0": level}))
    (formed,) = peak_physics(table, plateaus, traces=20).formation
    assert formed.share == pytest.approx(2 / 20)
    assert formed.share_low < 0.1 < formed.share_high
    assert "no blank" in formed.corrected
