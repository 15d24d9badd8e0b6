"""What to know of the bins: finer than the converter's steps, and a width that the data propose."""

from __future__ import annotations

import numpy as np

from meseta.histograms.distribution import summed
from meseta.histograms.results import ConductanceHistogram, CountMatrix, Grid
from meseta.segmentation.results import NoiseModel

__all__ = ["bin_notes", "proposed_width"]


def bin_notes(grid: Grid, noise: NoiseModel) -> tuple[str, ...]:
    """Return warnings about a grid: bins narrower than two steps of the converter show combs, not physics."""
    step = noise.converter_step_g0
    if not step > 0:
        return ()
    width = np.diff(grid.edges_g0)
    fine = width < 2 * step
    if not fine.any():
        return ()
    if grid.axis == "linear":
        return (f"bins of {width[0]:.3g} G0 are narrower than two steps of the converter ({2 * step:.3g} G0)",)
    last = float(grid.edges_g0[1:][fine].max())
    return (f"below {last:.2g} G0 bins are narrower than two steps of the converter ({2 * step:.3g} G0): expect combs",)


def proposed_width(counts: CountMatrix, histogram: ConductanceHistogram, rows: np.ndarray) -> float:
    """Return the bin width (decades or G0) of Freedman and Diaconis for as many independent values as there are traces.

    Notes
    -----
    2 IQR n**(-1/3), Freedman and Diaconis, Z. Wahrscheinlichkeitstheorie verw. Gebiete 57, 453 (1981); n is the number
    of traces, because samples of one trace are not independent.
    """
    fine, _ = summed(counts, rows)
    share = np.cumsum(fine) / max(int(fine.sum()), 1)
    quarter, three = (counts.grid.u_edges[1:][np.searchsorted(share, at)] for at in (0.25, 0.75))
    return float(2 * (three - quarter) * max(histogram.traces, 1) ** (-1 / 3))
