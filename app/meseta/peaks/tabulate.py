"""From fits to the peak table and the curves to draw."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.ndimage import gaussian_filter1d

from meseta.histograms.results import ConductanceHistogram, Grid, Resampling
from meseta.peaks.fitting import Fitted, Refitted
from meseta.peaks.intervals import Interval, bca_interval, percentile_interval
from meseta.peaks.meaning import assignment, channels_at_least
from meseta.peaks.model import WIDTH_TO_FWHM
from meseta.peaks.results import PeakFit, PeakTable
from meseta.peaks.systematic import half_spread
from meseta.peaks.verdicts import FEW_TRACES, fit_verdicts
from meseta.peaks.windows import Start, Window
from meseta.quantities import G0_SIEMENS, R0_OHM
from meseta.recipe.peaks import PeakSettings
from meseta.segmentation.results import PlateauTable

__all__ = ["FittedWindow", "empty_fit", "tabulate", "weakest_peak"]

Floats = npt.NDArray[np.float64]

_POOR = 0.06
_NO_TRACES = "no interval: a histogram alone does not know its traces"


@dataclass(frozen=True)
class FittedWindow:
    """One stretch of the axis with its fit, refits of resampled and of left-out traces, and shifts.

    ``reached`` is the number of traces with a sample within two widths of each peak.
    """

    window: Window
    fitted: Fitted
    replicates: Refitted | None
    left_out: Refitted | None
    shifts: tuple[tuple[str, Floats], ...]
    reached: tuple[int, ...]


@dataclass(frozen=True)
class _Row:
    """One peak on its way into the table; conductances in G0."""

    name: str
    range_g0: tuple[float, float]
    position_g0: tuple[float, float, float]
    systematic_g0: float
    fwhm: tuple[float, float, float]
    area: tuple[float, float, float]
    height: float
    status: str
    mode_g0: float
    plateau_median_g0: float
    plateaus: int
    shifts_g0: dict[str, float]


def tabulate(
    histogram: ConductanceHistogram,
    settings: PeakSettings,
    parts: Sequence[FittedWindow],
    resampling: Resampling | None,
    plateaus: PlateauTable | None,
) -> PeakFit:
    """Return the peak table and the fitted curves of all stretches together."""
    rows: list[_Row] = []
    for part in parts:
        rows += _rows(histogram, part, resampling, plateaus)
    order = sorted(range(len(rows)), key=lambda at: rows[at].position_g0[0])
    rows = [rows[at] for at in order]
    table = _table(histogram, settings, rows, resampling, parts[0].fitted.model.logarithmic)
    names = list(dict.fromkeys(name for row in rows for name in row.shifts_g0))
    systematic = tuple((name, np.array([row.shifts_g0.get(name, np.nan) for row in rows])) for name in names)
    score = sum(part.fitted.score for part in parts)
    freedom = sum(part.fitted.degrees_of_freedom for part in parts)
    return PeakFit(table, *_curves(histogram, parts, order), systematic=systematic, goodness=score / freedom)


def weakest_peak(parts: Sequence[FittedWindow]) -> Start | None:
    """Return the peak with the smallest area in standard errors, if that is below three: not to be proposed."""
    strength = {}
    for part in parts:
        interval = _interval(part, 0, 1.0)
        for peak, start in enumerate(part.window.starts):
            area, sigma = part.fitted.peaks[peak, 0], _area_sigma(part.fitted, peak, interval)
            strength[start] = area / sigma if sigma > 0 else float("inf") if area > 0 else 0.0
    weakest = min(strength, key=lambda start: strength[start])
    return weakest if strength[weakest] < 3.0 else None


def empty_fit(histogram: ConductanceHistogram, settings: PeakSettings, reason: str) -> PeakFit:
    """Return a fit without peaks: one row of NaN whose status says why."""
    nothing = (np.nan, np.nan, np.nan)
    row = _Row("", (np.nan, np.nan), nothing, np.nan, nothing, nothing, np.nan, reason, np.nan, np.nan, 0, {})
    logarithmic = (histogram.grid.axis if settings.axis == "as_histogram" else settings.axis) == "logarithmic"
    blank = np.full(histogram.grid.bins, np.nan)
    return PeakFit(
        table=_table(histogram, settings, [row], None, logarithmic),
        grid=histogram.grid,
        model=blank,
        background=blank,
        components=blank[None, :],
        observed=histogram.density,
        systematic=(),
        goodness=np.nan,
    )


def _rows(
    histogram: ConductanceHistogram,
    part: FittedWindow,
    resampling: Resampling | None,
    plateaus: PlateauTable | None,
) -> list[_Row]:
    fitted, model = part.fitted, part.fitted.model
    factor = 1.0 if resampling is None else resampling.widen
    counts = histogram.counts[part.window.first : part.window.last].astype(float)
    verdicts = fit_verdicts(fitted, counts)
    intervals = [_interval(part, column, factor) for column in range(3)]
    spread = half_spread(part.shifts, model.peaks)
    area_scale = _area_scale(histogram, part)
    rows = []
    for peak, (area, position, width, _) in enumerate(fitted.peaks):
        said = verdicts[peak] + _sample_verdicts(histogram, part, peak, intervals, resampling)
        failed = not fitted.converged
        place = np.nan if failed else position
        near = (position - WIDTH_TO_FWHM * width / 2, position + WIDTH_TO_FWHM * width / 2)
        median, number = _plateau_median(plateaus, near, model.logarithmic)
        density = area_scale[peak] * area
        rows.append(
            _Row(
                name=part.window.starts[peak].name,
                range_g0=_both(_g0(np.array(model.range_u), model.logarithmic)),
                position_g0=_three(
                    _g0(np.array([place, intervals[1].low[peak], intervals[1].high[peak]]), model.logarithmic)
                ),
                systematic_g0=_distance_g0(place, spread[peak], model.logarithmic),
                fwhm=_three(WIDTH_TO_FWHM * np.array([width, intervals[2].low[peak], intervals[2].high[peak]])),
                area=_three(area_scale[peak] * np.array([area, intervals[0].low[peak], intervals[0].high[peak]])),
                height=density / (width * np.sqrt(2 * np.pi))
                if model.shape == "gaussian"
                else _height(part, peak, density),
                status="; ".join(said) or "ok",
                mode_g0=np.nan if failed else _mode(histogram, model.logarithmic, near),
                plateau_median_g0=median,
                plateaus=number,
                shifts_g0={
                    name: float(
                        _g0(np.array(place + shift[peak]), model.logarithmic) - _g0(np.array(place), model.logarithmic)
                    )
                    for name, shift in part.shifts
                },
            )
        )
    return rows


def _interval(part: FittedWindow, column: int, factor: float) -> Interval:
    """Return the interval of area (0), position (1) or width (2) of every peak."""
    fitted, replicates = part.fitted, part.replicates
    if replicates is None or not fitted.converged:
        nothing = np.full(fitted.model.peaks, np.nan)
        return Interval(nothing, nothing, nothing)
    estimate, drawn = fitted.peaks[:, column], replicates.peaks[:, :, column]
    if part.left_out is None:
        interval = percentile_interval(estimate, drawn, factor)
    else:
        interval = bca_interval(estimate, drawn, part.left_out.peaks[:, :, column], factor)
    if column in (0, 2):  # an area and a width are never negative, however far the factor stretches
        return Interval(np.maximum(interval.low, 0.0), interval.high, interval.sigma)
    return interval


def _sample_verdicts(
    histogram: ConductanceHistogram,
    part: FittedWindow,
    peak: int,
    intervals: list[Interval],
    resampling: Resampling | None,
) -> list[str]:
    """Return what the number of traces and the refits make doubtful."""
    said, fitted = [], part.fitted
    if part.reached[peak] < min(histogram.weak_traces, histogram.traces / 2):  # few traces are said elsewhere
        said.append(f"weak: reached by {part.reached[peak]} traces")
    elif _area_sigma(fitted, peak, intervals[0]) > fitted.peaks[peak, 0] / 3.0:
        said.append("weak: area below three standard errors")
    misfit = _misfit(part, peak, histogram, resampling)
    if misfit > _POOR:
        said.append(f"shape fits poorly: residuals up to {100 * misfit:.0f} % of its height")
    if resampling is None or part.replicates is None:
        said.append(_NO_TRACES)
    else:
        bad = int((~part.replicates.good).sum())
        if bad > 0.05 * len(part.replicates.good):
            said.append(f"{bad} of {len(part.replicates.good)} resampled fits failed")
    if histogram.traces < FEW_TRACES:
        said.append(f"fewer than {FEW_TRACES} traces")
    return said


def _misfit(part: FittedWindow, peak: int, histogram: ConductanceHistogram, resampling: Resampling | None) -> float:
    """Return the largest smoothed residual under a peak, as a share of its height, less what chance explains."""
    model, (_, position, width, _) = part.fitted.model, part.fitted.peaks[peak]
    curves = model.curves(part.fitted.inner)
    step = model.high - model.low
    near = np.abs((model.low + model.high) / 2 - position) < WIDTH_TO_FWHM * width
    height = (curves.components[peak] / step).max()
    if not near.any() or not height > 0:
        return 0.0
    blur = max(0.5 * width / float(np.median(step)), 0.5)
    inside = slice(part.window.first, part.window.last)
    rest = gaussian_filter1d((histogram.counts[inside] - curves.total) / step, blur, mode="nearest")
    chance = np.zeros(len(rest))
    if resampling is not None:
        drawn = gaussian_filter1d(resampling.counts[:100, inside] / step, blur, mode="nearest")
        chance = 2.0 * drawn.std(axis=0)
    return float(np.maximum(np.abs(rest) - chance, 0.0)[near].max() / height)


def _area_sigma(fitted: Fitted, peak: int, interval: Interval) -> float:
    """Return the standard error of an area: from the refits, else from the counts with their over-dispersion."""
    if np.isfinite(interval.sigma[peak]):
        return float(interval.sigma[peak])
    place = np.flatnonzero(fitted.free == 4 * peak)
    if not len(place):
        return 0.0
    variance = fitted.covariance[place[0], place[0]]
    return float(np.sqrt(variance * max(fitted.score / fitted.degrees_of_freedom, 1.0)))


def _g0(u: Floats, logarithmic: bool) -> Floats:
    value: Floats = 10.0**u if logarithmic else u
    return value


def _distance_g0(position: float, spread: float, logarithmic: bool) -> float:
    """Return half a spread on the axis as a distance in G0."""
    if not logarithmic:
        return float(spread)
    return float((10.0 ** (position + spread) - 10.0 ** (position - spread)) / 2)


def _three(values: Floats) -> tuple[float, float, float]:
    return float(values[0]), float(values[1]), float(values[2])


def _both(values: Floats) -> tuple[float, float]:
    return float(values[0]), float(values[1])


def _area_scale(histogram: ConductanceHistogram, part: FittedWindow) -> Floats:
    """Return for each peak what turns counts into the area of its density."""
    window, fitted = part.window, part.fitted
    unit = (histogram.scale * histogram.grid.widths)[window.first : window.last]
    scales = []
    for component in fitted.model.curves(fitted.inner).components:
        weight = component if component.sum() > 0 else np.ones(len(unit))
        scales.append(float(np.average(unit, weights=weight)))
    return np.array(scales)


def _height(part: FittedWindow, peak: int, density_area: float) -> float:
    """Return the height of a peak that is not Gaussian, from its highest bin."""
    model = part.fitted.model
    share = model.curves(part.fitted.inner).components[peak] / max(part.fitted.peaks[peak, 0], 1e-300)
    return density_area * float((share / (model.high - model.low)).max())


def _mode(histogram: ConductanceHistogram, logarithmic: bool, near: tuple[float, float]) -> float:
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
    return float(_g0(np.array(middle[top] + shift * (u[top + 1] - u[top])), logarithmic))


def _plateau_median(plateaus: PlateauTable | None, near: tuple[float, float], logarithmic: bool) -> tuple[float, int]:
    """Return median conductance and number of the plateaus within half maximum of a peak."""
    if plateaus is None or not len(plateaus):
        return float("nan"), 0
    low, high = _g0(np.array(near), logarithmic)
    level = plateaus.level_g0[(plateaus.level_g0 >= low) & (plateaus.level_g0 <= high)]
    return (float(np.median(level)), len(level)) if len(level) else (float("nan"), 0)


def _table(
    histogram: ConductanceHistogram,
    settings: PeakSettings,
    rows: Sequence[_Row],
    resampling: Resampling | None,
    logarithmic: bool,
) -> PeakTable:
    count = len(rows)
    position = np.array([row.position_g0[0] for row in rows])
    per_axis = " / decade" if histogram.grid.axis == "logarithmic" else " / G0"
    with np.errstate(invalid="ignore", divide="ignore"):
        ohm = R0_OHM / position
    return PeakTable(
        peak=np.array([row.name or str(number + 1) for number, row in enumerate(rows)]),
        axis=np.full(count, "logarithmic" if logarithmic else "linear"),
        shape=np.full(count, settings.shape),
        background=np.full(count, settings.background),
        fit_low_g0=np.array([row.range_g0[0] for row in rows]),
        fit_high_g0=np.array([row.range_g0[1] for row in rows]),
        traces=np.full(count, histogram.traces, np.int64),
        position_g0=position,
        position_low_g0=np.array([row.position_g0[1] for row in rows]),
        position_high_g0=np.array([row.position_g0[2] for row in rows]),
        position_systematic_g0=np.array([row.systematic_g0 for row in rows]),
        position_siemens=position * G0_SIEMENS,
        position_ohm=ohm,
        fwhm=np.array([row.fwhm[0] for row in rows]),
        fwhm_low=np.array([row.fwhm[1] for row in rows]),
        fwhm_high=np.array([row.fwhm[2] for row in rows]),
        area_per_trace=np.array([row.area[0] for row in rows]),
        area_low=np.array([row.area[1] for row in rows]),
        area_high=np.array([row.area[2] for row in rows]),
        height=np.array([row.height for row in rows]),
        status=np.array([row.status for row in rows]),
        resampling=np.full(count, "" if resampling is None else resampling.scheme),
        area_unit=np.full(count, histogram.density_unit.removesuffix(per_axis)),
        height_unit=np.full(count, histogram.density_unit),
        mode_g0=np.array([row.mode_g0 for row in rows]),
        plateau_median_g0=np.array([row.plateau_median_g0 for row in rows]),
        plateaus=np.array([row.plateaus for row in rows], np.int64),
        assigned=np.array([assignment(value, settings.names) for value in position]),
        channels_at_least=np.array([channels_at_least(value) for value in position], np.int64),
    )


def _curves(
    histogram: ConductanceHistogram, parts: Sequence[FittedWindow], order: Sequence[int]
) -> tuple[Grid, Floats, Floats, Floats, Floats]:
    """Return grid, model, background, components and data over all stretches; NaN between them."""
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
    return grid, total, background, stacked, histogram.density[first:last]
