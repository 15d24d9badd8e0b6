"""Two simpler detectors that the literature uses, beside the change points: same rows, same table.

``derivative``: a plateau is where the smoothed log10 G changes slowly.  ``levels``: a plateau is a stay between two
conductance levels that lasts longer than tunnelling would need to cross them.  Both are common practice; neither uses
the noise model beyond floor and rise time.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.ndimage import uniform_filter1d

from meseta.segmentation.finder_kernels import COLUMNS, Rules
from meseta.segmentation.results import NoiseModel

__all__ = ["derivative_rows", "level_rows"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]
Truths = npt.NDArray[np.bool_]


def derivative_rows(
    pieces: list[Floats], steps: Floats, rules: Rules, noise: NoiseModel, smoothing_samples: int
) -> Floats:
    """Return plateaus as runs of samples whose smoothed slope of log10 G stays within the slope bound.

    Parameters
    ----------
    pieces : list of (n,) float64
        Each trace's conductance above the floor, from the closed end; NaN breaks a run.
    steps : (traces,) float64
        Drive a sample.
    rules : Rules
    noise : NoiseModel
        Gives the floor's sigma, below which log10 G is cut off.
    smoothing_samples : int
        Samples of the least-squares window of the slope.
    """
    from scipy.signal import savgol_filter  # half a second that the window need not wait for

    window = max(3, smoothing_samples | 1)
    rows: list[list[float]] = []
    for trace, g in enumerate(pieces):
        if len(g) <= window:
            continue
        level = np.log10(np.maximum(g, noise.floor_sigma_g0))
        usable = np.where(np.isfinite(level), level, np.log10(noise.floor_sigma_g0))
        slope = savgol_filter(usable, window, 1, deriv=1)
        mean = uniform_filter1d(usable, window)
        flat = np.abs(slope) <= rules.bound * abs(steps[trace])
        flat &= np.isfinite(level) & (mean > np.log10(rules.low)) & (10**mean <= min(rules.high, rules.saturation))
        rows += [_row(trace, g, begin, end) for begin, end in _runs(flat) if _long(begin, end, g, steps[trace], rules)]
    return _rows(rows)


def level_rows(pieces: list[Floats], steps: Floats, rules: Rules, levels_g0: Floats) -> Floats:
    """Return plateaus as stays between neighbouring levels that are flatter than the slope bound allows.

    The stay runs from the last sample above the upper level to the last sample above the lower one, so that short
    excursions do not end it.
    """
    edges = np.sort(np.asarray(levels_g0, float))
    rows: list[list[float]] = []
    for trace, g in enumerate(pieces):
        last = [int(above[-1]) + 1 if len(above := np.flatnonzero(g >= edge)) else 0 for edge in edges]
        for k in range(len(edges) - 1, 0, -1):
            begin, end = last[k], last[k - 1]
            inside = g[begin:end]
            if not np.isfinite(inside).any() or not _long(begin, end, g, steps[trace], rules):
                continue
            third = max((end - begin) // 3, 1)
            ends = np.nanmean(inside[:third]), np.nanmean(inside[-third:])
            allowed = rules.bound * abs(steps[trace]) * (end - begin) * 2 / 3
            if min(ends) > 0 and abs(np.log10(ends[0] / ends[1])) <= allowed:
                rows.append(_row(trace, g, begin, end))
    return _rows(rows)


def _runs(mask: Truths) -> list[tuple[int, int]]:
    """Return the half-open runs of true."""
    change = np.flatnonzero(np.diff(np.concatenate([[False], mask, [False]])))
    return list(zip(change[::2].tolist(), change[1::2].tolist(), strict=True))


def _long(begin: int, end: int, g: Floats, step: float, rules: Rules) -> bool:
    """Return whether a stretch is long enough for its conductance, within the limits of conductance."""
    samples = end - begin
    if samples < rules.shortest_samples or not np.isfinite(g[begin:end]).any():
        return False
    level = float(np.nanmean(g[begin:end]))
    shortest = rules.shortest_metal if level >= rules.metal_from else rules.shortest_molecule
    return samples * abs(step) >= shortest and rules.low <= level <= min(rules.high, rules.saturation)


def _row(trace: int, g: Floats, begin: int, end: int) -> list[float]:
    """Return one row as :func:`meseta.segmentation.finder_kernels.find` makes them; it has no score."""
    inside = g[begin:end]
    good = np.isfinite(inside) & (inside > 0)
    slope, spread = np.nan, np.nan
    if good.sum() >= 3:
        x, y = np.flatnonzero(good), np.log10(inside[good])
        slope, offset = np.polyfit(x, y, 1)
        spread = float(np.std(y - slope * x - offset))
    censored = 1.0 if end >= len(g) else 0.0
    level = float(np.nanmean(inside))
    missing = ~np.isfinite(inside)
    gap = max((stop - start for start, stop in _runs(missing)), default=0)
    return [
        trace, begin, end, level, slope, spread, np.nan, np.nan, np.nan, censored, 0.0, np.nan, int(missing.sum()), gap,
    ]  # fmt: skip


def _rows(rows: list[list[float]]) -> Floats:
    return np.array(rows, float).reshape(len(rows), COLUMNS)
