"""What is read off a histogram beside its fit: mode, plateaus, area, height, and the curves to draw."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter1d

from meseta.histograms.results import ConductanceHistogram, Grid, Resampling
from meseta.peaks.stretch import FittedWindow
from meseta.segmentation.results import PlateauTable

__all__ = ["area_scale", "curves_of", "distance_g0", "height_of", "mode_of", "on_g0", "plateau_median"]

Floats = npt.NDArray[np.float64]


def on_g0(u: Floats, logarithmic: bool) -> Floats:
    """Return places on the axis as conductances in G0."""
    value: Floats = 10.0**u if logarithmic else u
    return value


def distance_g0(position: float, spread: float, logarithmic: bool) -> float:
    """Return half a spread on the axis as a distance in G0."""
    if not logarithmic:
        return float(spread)
    return float((10.0 ** (position + spread) - 10.0 ** (position - spread)) / 2)


def area_scale(histogram: ConductanceHistogram, part: FittedWindow) -> Floats:
    """Return for each peak what turns counts into the area of its density."""
    window, fitted = part.window, part.fitted
    unit = (histogram.scale * histogram.grid.widths)[window.first : window.last]
    scales = []
    for component in fitted.model.curves(fitted.inner).components:
        weight = component if component.sum() > 0 else np.ones(len(unit))
        scales.append(float(np.average(unit, weights=weight)))
    return np.array(scales)


def height_of(part: FittedWindow, peak: int, density_area: float) -> float:
    """Return the height of a peak that is not Gaussian, from its highest bin."""
    model = part.fitted.model
    share = model.curves(part.fitted.inner).components[peak] / max(part.fitted.peaks[peak, 0], 1e-300)
    return density_area * float((share / (model.high - model.low)).max())


def mode_of(histogram: ConductanceHistogram, logarithmic: bool, near: tuple[float, float]) -> float:
    """Return the highest point of the lightly smoothed histogram within half maximum of a peak, in G0."""
    edges = histogram.grid.edges_g0
    u = np.log10(np.maximum(edges, 1e-300)) if logarithmic else edges
    middle, density = (u[1:] + u[:-1]) / 2, histogram.counts / np.diff(u)
    smooth = gaussian_filter1d(density, max((near[1] - near[0]) / 8 / float(np.median(np.diff(u))), 0.5))
    inside = np.flatnonzero((u[1:] >= near[0]) & (u[:-1] <= near[1]))
    if not len(inside):
        return float("nan")
    top = int(inside[np.argmax(smooth[inside])])
    if not 0 < top < len(middle) - 1 or smooth[top] < max(smooth[top - 1], smooth[top + 1]):
        return float("nan")
    left, here, right = smooth[top - 1 : top + 2]
    bend = left - 2 * here + right
    shift = 0.5 * (left - right) / bend if bend < 0 else 0.0
    return float(on_g0(np.array(middle[top] + shift * (u[top + 1] - u[top])), logarithmic))


def plateau_median(plateaus: PlateauTable | None, near: tuple[float, float], logarithmic: bool) -> tuple[float, int]:
    """Return median conductance and number of the plateaus within half maximum of a peak."""
    if plateaus is None or not len(plateaus):
        return float("nan"), 0
    low, high = on_g0(np.array(near), logarithmic)
    level = plateaus.level_g0[(plateaus.level_g0 >= low) & (plateaus.level_g0 <= high)]
    return (float(np.median(level)), len(level)) if len(level) else (float("nan"), 0)


def curves_of(
    histogram: ConductanceHistogram,
    parts: Sequence[FittedWindow],
    order: Sequence[int],
    resampling: Resampling | None,
) -> tuple[Grid, Floats, Floats, Floats, Floats, Floats]:
    """Return grid, model, background, components, data and their scatter over all stretches; NaN between them."""
    first, last = min(part.window.first for part in parts), max(part.window.last for part in parts)
    total, background = np.full(last - first, np.nan), np.full(last - first, np.nan)
    components = []
    for part in parts:
        curves = part.fitted.model.curves(part.fitted.inner)
        inside = slice(part.window.first - first, part.window.last - first)
        scale = histogram.scale[part.window.first : part.window.last]
        total[inside], background[inside] = curves.total * scale, curves.background * scale
        for component in curves.components:
            whole = np.full(last - first, np.nan)
            whole[inside] = component * scale
            components.append(whole)
    grid = Grid(histogram.grid.edges_g0[first : last + 1], histogram.grid.axis)
    stacked = np.array([components[at] for at in order])
    scatter = np.full(last - first, np.nan)
    if resampling is not None:
        scatter = resampling.counts[:, first:last].std(axis=0) * histogram.scale[first:last]
    return grid, total, background, stacked, histogram.density[first:last], scatter
