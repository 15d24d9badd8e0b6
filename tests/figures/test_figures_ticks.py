"""Tick labels of linear axes say what the ticks are."""

from __future__ import annotations

import pytest
from matplotlib.figure import Figure

from meseta.figures.scale import plain_ticks


@pytest.mark.parametrize(("low", "high"), [(0, 10), (0, 1), (0, 25), (-0.5, 2), (0, 0.3), (-120, 80), (0, 5e-5)])
def test_tick_labels_are_the_ticks(low, high):
    axes = Figure().add_subplot()
    axes.set_xlim(low, high)
    plain_ticks(axes.xaxis, low, high, most=5)
    for place, text in zip(axes.xaxis.get_majorticklocs(), axes.xaxis.get_ticklabels(), strict=True):
        shown = text.get_text().replace("\N{MINUS SIGN}", "-")
        if "10" not in shown or "×" not in shown:
            assert float(shown) == pytest.approx(place, abs=1e-9 * (high - low))
