"""Figures by which a result is judged: noise model, record (temporal histogram), 2D correlation histogram, offset."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.colorbar import Colorbar
from matplotlib.colors import ListedColormap, Normalize
from matplotlib.figure import Figure

from meseta import colours, typeset
from meseta.figures.cells import draw_cells
from meseta.figures.displacement import colour_map, colour_norm
from meseta.figures.page import new_figure, page_style
from meseta.figures.scale import ConductanceScale, plain_ticks
from meseta.figures.words import say
from meseta.histograms import CorrelationHistogram, TemporalHistogram
from meseta.quantities import G0_SIEMENS
from meseta.recipe.figure import FigureSettings
from meseta.segmentation import NoiseModel

__all__ = ["correlation_figure", "noise_figure", "offset_figure", "record_figure"]

Floats = npt.NDArray[np.float64]


def noise_figure(noise: NoiseModel, settings: FigureSettings) -> Figure:
    """Draw the noise of a single sample and the long-run noise against conductance, both logarithmic."""
    with page_style(settings):
        figure, axes = _single(settings, 0.6 * settings.width_mm, 0.38)
        level = noise.level_g0
        axes.set_xlabel(f"Conductance ({typeset.G0})")
        axes.set_ylabel(f"Noise, 1 σ ({typeset.G0})")
        if not len(level) or not np.all(level > 0):
            say(axes, "no noise model")
            return figure
        u = np.log10(level)
        axes.plot(u, np.log10(noise.sigma_g0), color=colours.LIGHT.selected, label="single sample")
        axes.plot(u, np.log10(noise.long_run_g0), color=colours.LIGHT.every, linestyle="--", label="long-run, a sample")
        low, high = np.floor(u.min()), np.ceil(u.max())
        ConductanceScale(True, float(low), float(max(high, low + 1))).decorate(axes.xaxis)
        both = np.log10(np.concatenate([noise.sigma_g0, noise.long_run_g0]))
        bottom, top = float(np.floor(both.min())), float(np.ceil(both.max()))
        ConductanceScale(True, bottom, max(top, bottom + 1)).decorate(axes.yaxis)
        if noise.floor_traces and noise.floor_sigma_g0 > 0:
            axes.axhline(np.log10(noise.floor_sigma_g0), color=colours.LIGHT.hairline, linewidth=0.5, zorder=0.5)
            text = "floor, 1 σ"
            axes.annotate(text, (high, np.log10(noise.floor_sigma_g0)), (-2, 2), "data", "offset points", ha="right")
        axes.legend(loc="lower right", bbox_to_anchor=(1, 1.01), ncols=2, borderaxespad=0)
        figure.draw_without_rendering()
    return figure


def offset_figure(offset: Mapping[str, Any], settings: FigureSettings) -> Figure:
    """Draw the running offset that was removed against the record.

    Parameters
    ----------
    offset : mapping
        ``notes["floor_offset"]`` of a TraceSet: ``at_trace``, ``offset`` in ``unit`` ("G0 V", a current, or "G0").
    """
    is_current = offset["unit"] == "G0 V"
    values = np.asarray(offset["offset"], np.float64) * (G0_SIEMENS if is_current else 1.0)
    known = np.abs(values[np.isfinite(values)])
    power = 3 * int(np.floor(np.log10(known.max()) / 3)) if known.size and known.max() > 0 else 0
    prefixes = {-6: "µA", -9: "nA", -12: "pA", -15: "fA"}
    plain = f"{typeset.power_of_ten(power) + ' ' if power else ''}{'A' if is_current else typeset.G0}"
    unit = prefixes.get(power, plain) if is_current else plain
    with page_style(settings):
        figure, axes = _single(settings, settings.width_mm, 0.16)
        axes.set_xlabel("Trace")
        axes.set_ylabel(f"Offset ({unit})")
        end = max(int(offset["traces"]), 1)
        plain_ticks(axes.xaxis, 0, end, most=9)
        axes.set_xlim(0, end)
        shown = values / 10.0**power
        axes.plot(offset["at_trace"], shown, color=colours.LIGHT.selected)
        low, high = min(float(np.nanmin(shown)), 0.0), max(float(np.nanmax(shown)), 0.0)
        room = 0.1 * (high - low) or 1.0
        plain_ticks(axes.yaxis, low - room, high + room, most=5)
        axes.set_ylim(low - room, high + room)
        figure.draw_without_rendering()
    return figure


def record_figure(record: TemporalHistogram, settings: FigureSettings) -> Figure:
    """Draw the temporal histogram: consecutive traces from left to right, samples a kept trace as colour."""
    scale = ConductanceScale.of(record.grid)
    with page_style(settings):
        figure, axes = _single(settings, settings.width_mm, 0.24)
        scale.decorate(axes.yaxis)
        axes.set_ylabel(scale.label)
        axes.set_xlabel("Trace")
        end = max(len(record.traces) * record.traces_a_column, 1)
        plain_ticks(axes.xaxis, 0, end, most=9)
        axes.set_xlim(0, end)
        if not np.any(record.counts):
            say(axes, "no sample lies in this range" if np.any(record.traces) else "no trace takes part")
            return figure
        density, edges = record.counts_per_trace, record.grid.u_edges
        draw_cells(
            axes,
            np.ma.masked_where(record.counts == 0, density).T,
            (0, end, edges[0], edges[-1]),
            colour_map(settings.colour_map),
            colour_norm(density[record.counts > 0], settings.colour_scale),
        )
        axes.set_xlim(0, end)
        axes.set_ylim(scale.low, scale.high)
        column = record.traces_a_column
        note = f"{typeset.integer(column)} traces a column" if column > 1 else "one trace a column"
        axes.set_title(f"Samples a trace, {note}", loc="right", color=colours.LIGHT.quiet, pad=3)
        figure.draw_without_rendering()
    return figure


def correlation_figure(correlation: CorrelationHistogram, settings: FigureSettings) -> Figure:
    """Draw the 2D correlation histogram on a diverging scale that is symmetric about zero.

    Chance values of the largest correlation are marked on the colour bar where they were computed.
    """
    scale = ConductanceScale.of(correlation.grid)
    with page_style(settings):
        side = 0.42 * settings.width_mm
        point = settings.text_point
        left, bottom, top = 1.55 * point, 1.35 * point, 0.5 * point
        width, height = left + side + 2.2 * point, bottom + side + top
        figure = new_figure(settings, height, width)
        axes = figure.add_axes((left / width, bottom / height, side / width, side / height))
        bar = figure.add_axes(
            ((left + side + 0.3 * point) / width, bottom / height, 0.13 * point / width, side / height)
        )
        scale.decorate(axes.xaxis)
        scale.decorate(axes.yaxis)
        axes.set_xlabel(scale.label)
        axes.set_ylabel(scale.label)
        values = correlation.correlation
        off = values[~np.eye(len(values), dtype=bool)]
        known = np.abs(off[np.isfinite(off)])
        if not known.size:
            bar.set_visible(False)
            say(axes, "no two bins vary over the traces")
            return figure
        _draw_correlation(axes, bar, correlation, scale, float(np.percentile(known, 99.5)))
        figure.draw_without_rendering()
    return figure


def _draw_correlation(
    axes: Axes, bar: Axes, correlation: CorrelationHistogram, scale: ConductanceScale, end: float
) -> None:
    end = max(end, 1.2 * correlation.threshold if np.isfinite(correlation.threshold) else 0.0, 1e-6)
    map_ = ListedColormap(colours.diverging(), name="meseta-diverging").with_extremes(bad=colours.LIGHT.ground)
    edges = correlation.grid.u_edges
    cells = draw_cells(
        axes,
        np.ma.masked_invalid(correlation.correlation),
        (edges[0], edges[-1], edges[0], edges[-1]),
        map_,
        Normalize(-end, end, clip=True),
    )
    axes.set_xlim(scale.low, scale.high)
    axes.set_ylim(scale.low, scale.high)
    drawn = Colorbar(bar, cells)
    drawn.outline.set_linewidth(0.3)
    drawn.set_label(f"Correlation over {typeset.integer(correlation.traces)} traces")
    plain_ticks(bar.yaxis, -end, end, most=5)
    if np.isfinite(correlation.threshold):
        for sign in (-1, 1):
            bar.axhline(sign * correlation.threshold, color=colours.LIGHT.ink, linewidth=0.6)


def _single(settings: FigureSettings, width_mm: float, shape: float) -> tuple[Figure, Axes]:
    """Return a page with one pair of axes; ``shape`` is the height of the axes over the page's width."""
    point = settings.text_point
    left, bottom, right, top = 1.55 * point, 1.35 * point, 0.35 * point, 0.75 * point
    panel = shape * width_mm
    height = bottom + panel + top
    figure = new_figure(settings, height, width_mm)
    box = (left / width_mm, bottom / height, (width_mm - left - right) / width_mm, panel / height)
    return figure, figure.add_axes(box)
