"""The panel of the 2D conductance-displacement histogram and its colour bar."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.colorbar import Colorbar
from matplotlib.colors import Colormap, ListedColormap, LogNorm, Normalize, PowerNorm
from matplotlib.ticker import FixedFormatter, FixedLocator, NullLocator

from meseta import colours, typeset
from meseta.figures.cells import draw_cells
from meseta.figures.scale import ConductanceScale, plain_ticks
from meseta.figures.words import per, say
from meseta.histograms import DisplacementHistogram
from meseta.recipe.figure import FigureSettings

__all__ = ["colour_map", "colour_norm", "draw_displacement"]

_TOP_SHARE = 99.9
"""Percentile of the cells with samples at which the colour scale ends; what lies above has the last colour."""


def colour_map(name: str) -> Colormap:
    """Return the named ramp; masked cells are the paper."""
    return ListedColormap(colours.ramp(name), name=f"meseta-{name}").with_extremes(bad=colours.LIGHT.panel)


def colour_norm(filled: npt.NDArray[np.float64], scale: str) -> Normalize:
    """Return the colour scale for the densities of the cells that have samples (at least one)."""
    top = float(np.percentile(filled, _TOP_SHARE))
    lowest = float(filled.min())
    if scale == "logarithmic":
        return LogNorm(lowest, max(top, lowest * 10), clip=True)
    if scale == "square_root":
        return PowerNorm(0.5, 0, top, clip=True)
    return Normalize(0, top, clip=True)


def draw_displacement(
    axes: Axes,
    bar: Axes,
    histogram: DisplacementHistogram,
    scale: ConductanceScale,
    settings: FigureSettings,
    counted_from: str = "",
) -> None:
    """Draw the 2D histogram on ``axes`` and its colour bar, with unit and normalisation, on ``bar``.

    ``counted_from`` says what the displacement is counted from where that is not the zero of displacement.
    """
    edges = histogram.drive_edges
    scale.decorate(axes.yaxis)
    axes.set_ylabel(scale.label)
    plain_ticks(axes.xaxis, float(edges[0]), float(edges[-1]))
    axes.set_xlim(edges[0], edges[-1])
    name = "Displacement" if histogram.drive_unit == "nm" else "Drive"
    axes.set_xlabel(f"{name} ({typeset.unit_text(histogram.drive_unit)})")
    filled = histogram.density[histogram.counts > 0]
    if not filled.size:
        bar.set_visible(False)
        say(axes, _nothing(histogram))
        return
    norm = colour_norm(filled, settings.colour_scale)
    drawn = draw_cells(
        axes,
        np.ma.masked_where(histogram.counts == 0, histogram.density).T,
        (edges[0], edges[-1], histogram.grid.u_edges[0], histogram.grid.u_edges[-1]),
        colour_map(settings.colour_map),
        norm,
    )
    axes.set_xlim(edges[0], edges[-1])
    axes.set_ylim(scale.low, scale.high)
    if settings.guides:
        scale.guides(axes, sideways=True, closest_u=_closest(axes, scale))
    if edges[0] < 0 < edges[-1]:
        axes.axvline(0, color=colours.LIGHT.hairline, linewidth=0.4, zorder=0.6)
    count = f"{typeset.integer(histogram.traces)} aligned traces"
    if counted_from:
        count = f"{typeset.integer(histogram.traces)} traces, aligned at\n{counted_from}"
    axes.text(0.985, 0.98, count, transform=axes.transAxes, ha="right", va="top", color=colours.LIGHT.quiet)
    _bar(Colorbar(bar, drawn, orientation="horizontal"), norm, histogram.density_unit, settings.colour_scale)


def _nothing(histogram: DisplacementHistogram) -> str:
    if histogram.traces:
        return "no sample of the aligned traces\nlies in this range"
    if histogram.not_aligned:
        return f"none of {typeset.integer(histogram.not_aligned)} traces\nhas a zero of displacement"
    return "no traces to show"


def _closest(axes: Axes, scale: ConductanceScale) -> float:
    """Return how much of the conductance axis four points of paper are."""
    box = axes.get_window_extent()
    return float(4 * axes.figure.dpi / 72 / box.height * (scale.high - scale.low))


def _bar(bar: Colorbar, norm: Normalize, unit: str, scale: str) -> None:
    """Put few round ticks above the bar, and what it counts above them."""
    axes = bar.ax
    bar.outline.set_linewidth(0.3)
    axes.xaxis.set_ticks_position("top")
    axes.xaxis.set_label_position("top")
    ticks = _bar_ticks(norm, scale)
    axes.xaxis.set_major_locator(FixedLocator(ticks))
    axes.xaxis.set_major_formatter(FixedFormatter([_bar_text(tick, scale) for tick in ticks]))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.tick_params(length=1.6, pad=1)
    note = {"linear": "", "square_root": "square-root scale", "logarithmic": "logarithmic scale"}[scale]
    axes.set_xlabel(", ".join(part for part in (per(unit), note) if part), labelpad=1.5, loc="right")


def _bar_ticks(norm: Normalize, scale: str) -> list[float]:
    low, top = float(norm.vmin or 0), float(norm.vmax or 1)
    if scale == "logarithmic":
        return [10.0**power for power in range(int(np.ceil(np.log10(low))), int(np.floor(np.log10(top))) + 1)]
    if scale == "linear":
        step = _round_step(top / 4)
        return [float(tick) for tick in np.arange(0, top * (1 + 1e-9), step)]
    unit = _round_step(top / 1.6)
    return [0.0, *[unit * part for part in (0.05, 0.25, 1.0) if unit * part <= top]]


def _round_step(value: float) -> float:
    """Return the largest of 1, 2, 5 times a power of ten that is not above the value."""
    power = 10.0 ** np.floor(np.log10(value))
    return float(max(part * power for part in (1, 2, 5) if part * power <= value * (1 + 1e-9)))


def _bar_text(value: float, scale: str) -> str:
    if scale == "logarithmic":
        return typeset.power_of_ten(round(np.log10(value)))
    return (
        typeset.number(float(f"{value:.3g}"), 3).rstrip("0").rstrip(".")
        if 0 < value < 100
        else typeset.number(value, 3)
    )
