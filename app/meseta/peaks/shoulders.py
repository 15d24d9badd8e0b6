"""Shoulders and humps of the tunnelling background that no plateau supports: no molecular peaks to propose."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from meseta.peaks.stretch import FittedWindow
from meseta.peaks.windows import Start
from meseta.segmentation.results import PlateauTable

__all__ = ["bare_shoulder"]

_SUB_QUANTUM_G0 = 0.4
_FEWEST_PLATEAUS = 3
_LEAST_SHARE = 0.005


def bare_shoulder(parts: Sequence[FittedWindow], plateaus: PlateauTable, traces: int) -> Start | None:
    """Return a peak below 0.4 G0 in which no plateaus lie.

    Where tunnelling sets in after the rupture the histogram has a shoulder or a hump too.  A molecular junction leaves
    plateaus, so those decide; whoever knows better asks for the peak by name.

    Parameters
    ----------
    parts : sequence of FittedWindow
    plateaus : PlateauTable
        Of the selected traces.
    traces : int
        Number of selected traces.

    Returns
    -------
    Start or None
        The first such peak; None where there is none.
    """
    fewest = max(_FEWEST_PLATEAUS, _LEAST_SHARE * traces)
    peaks = [
        (start, *part.fitted.peaks[number, 1:3])
        for part in parts
        if part.fitted.model.logarithmic
        for number, start in enumerate(part.window.starts)
    ]
    if not peaks:
        return None
    level = np.log10(plateaus.level_g0[plateaus.level_g0 > 0])
    away = np.abs(level[:, None] - np.array([position for _, position, _ in peaks]))
    nearest = away.argmin(axis=1)
    for number, (start, position, width) in enumerate(peaks):
        own = np.count_nonzero((nearest == number) & (away[:, number] <= 1.5 * width))
        if position < np.log10(_SUB_QUANTUM_G0) and own < fewest:
            return start
    return None
