"""Figures of the physics drawn from peaks: a length series with its decay constant, and all defensible analyses."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Final

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedFormatter, FixedLocator, NullLocator

from meseta import colours, typeset
from meseta.errors import CallError
from meseta.figures.page import new_figure, page_style
from meseta.figures.scale import ConductanceScale, plain_ticks
from meseta.peaks import Decay
from meseta.recipe.figure import FigureSettings

__all__ = ["analyses_figure", "decay_figure"]

Floats = npt.NDArray[np.float64]
_SINGLE_COLUMN_MM: Final = 88.0
_BAND: Final = "#f3ddd1"
_NAME: Final = colours.LIGHT.quiet


def decay_figure(decay: Decay, settings: FigureSettings) -> Figure:
    """Draw a length series: points with their errors, the line, its 95 % confidence band, and the decay constant.

    The line reaches down to zero length, where the contact conductance is read.
    """
    points = decay.points
    width = min(settings.width_mm, _SINGLE_COLUMN_MM)
    with page_style(settings):
        figure, axes = _page(settings, width, 0.62 * width)
        length, conductance = points.length, points.conductance_g0
        high = float(length.max()) * 1.08 if length.max() > 0 else 1.0
        ends = np.linspace(min(0.0, float(length.min())), high, 200)
        middle, low, top = decay.band(ends)
        if np.any(np.isfinite(low)):
            axes.fill_between(ends, np.log10(low), np.log10(top), color=_BAND, linewidth=0, zorder=0.5)
        axes.plot(ends, np.log10(middle), color=colours.LIGHT.fit, linewidth=1.0, linestyle=(0, (4, 1.8)), zorder=2)
        _points(axes, length, conductance, points.length_error, points.conductance_error_g0)
        _names(axes, length, conductance, points.label)
        shown = np.concatenate([np.log10(middle), np.log10(conductance)])
        scale = ConductanceScale(True, float(np.floor(shown.min() - 0.2)), float(np.ceil(shown.max() + 0.1)))
        scale.decorate(axes.yaxis)
        plain_ticks(axes.xaxis, float(ends[0]), high)
        axes.set_xlim(ends[0], high)
        axes.set_ylabel(scale.label)
        axes.set_xlabel(f"Length ({points.length_unit or 'unit not stated'})")
        axes.text(
            0.97, 0.95, _decay_words(decay), transform=axes.transAxes, ha="right", va="top", color=colours.LIGHT.fit
        )
        figure.draw_without_rendering()
    return figure


def _decay_words(decay: Decay) -> str:
    unit = decay.points.length_unit
    beta = typeset.value_with_uncertainty(decay.beta, decay.beta_low, decay.beta_high)
    low, high = decay.contact_low_g0, decay.contact_high_g0
    contact = typeset.conductance(decay.contact_g0, 2)
    interval = f"\n(95 %: {typeset.interval(low, high, 'G0', 2)})" if np.isfinite(low) and np.isfinite(high) else ""
    return f"β = {beta} per {unit or 'unit of length'}\nat zero length {contact}{interval}"


def _points(axes: Axes, length: Floats, conductance: Floats, error_x: Floats, error_g0: Floats) -> None:
    u = np.log10(conductance)
    axes.plot(length, u, "o", color=colours.LIGHT.selected, markersize=3.6, zorder=3)
    with np.errstate(invalid="ignore", divide="ignore"):
        below = np.log10(np.where(conductance > error_g0, conductance - error_g0, np.nan))
        above = np.log10(conductance + error_g0)
    known = np.isfinite(error_g0)
    below = np.where(known & ~np.isfinite(below), u - 10, below)
    axes.vlines(length[known], below[known], above[known], color=colours.LIGHT.selected, linewidth=0.7, zorder=2.5)
    known = np.isfinite(error_x)
    left, right = (length - error_x)[known], (length + error_x)[known]
    axes.hlines(u[known], left, right, color=colours.LIGHT.selected, linewidth=0.7, zorder=2.5)


def _names(axes: Axes, length: Floats, conductance: Floats, labels: Sequence[str] | npt.NDArray[np.str_]) -> None:
    late = float(length.min()) + 0.75 * float(np.ptp(length))
    for x, value, name in zip(length, conductance, labels, strict=True):
        side = "right" if x > late else "left"
        shift = (-4, -9) if x > late else (4, 3)
        if str(name):
            axes.annotate(str(name), (x, np.log10(value)), shift, textcoords="offset points", ha=side, color=_NAME)


def analyses_figure(
    position_g0: npt.ArrayLike,
    position_low_g0: npt.ArrayLike,
    position_high_g0: npt.ArrayLike,
    choices: Mapping[str, Sequence[str]],
    chosen: int,
    settings: FigureSettings,
    title: str = "",
) -> Figure:
    """Draw the headline number of all defensible analyses, in the order of its value, over the choices that made it.

    Parameters
    ----------
    position_g0, position_low_g0, position_high_g0 : (analyses,) array_like
        Position and its 95 % interval under each analysis; NaN where a fit failed.
    choices : mapping of str to sequence of str
        Name of a choice ("bin width") -> what each analysis chose (analyses texts).
    chosen : int
        Row of the analysis that is reported; marked with a diamond and a dashed line.
    settings : FigureSettings
    title : str
        What the position is of.

    Raises
    ------
    CallError
        Where lengths do not agree or no analysis gave a number.
    """
    position = np.asarray(position_g0, float)
    if any(len(values) != len(position) for values in choices.values()):
        raise CallError("choices and positions have different lengths", "analyses_figure", "give one text an analysis")
    order = [int(row) for row in np.argsort(position, kind="stable") if np.isfinite(position[row])]
    if not order:
        raise CallError("no analysis gave a position", "analyses_figure", "look at the fits one by one")
    levels = [(name, level) for name, values in choices.items() for level in dict.fromkeys(map(str, values))]
    point, width = settings.text_point, settings.width_mm
    with page_style(settings):
        left, bottom, grid = 6.2 * point, 0.6 * point, (0.5 * len(levels) + 0.3 * len(choices)) * point
        panel, gap, top = 0.26 * width, 0.35 * point, 0.75 * point
        height = bottom + grid + gap + panel + top
        figure = new_figure(settings, height)
        share = (width - left - 0.4 * point) / width
        upper = figure.add_axes((left / width, (bottom + grid + gap) / height, share, panel / height))
        lower = figure.add_axes((left / width, bottom / height, share, grid / height))
        _values(upper, position, np.asarray(position_low_g0, float), np.asarray(position_high_g0, float), order, chosen)
        _grid(lower, choices, order, chosen)
        if title:
            upper.set_title(title, loc="left", pad=3)
        figure.draw_without_rendering()
    return figure


def _values(axes: Axes, position: Floats, low: Floats, high: Floats, order: Sequence[int], chosen: int) -> None:
    places = np.arange(len(order))
    axes.vlines(places, low[order], high[order], color="#cfd3d6", linewidth=0.7, zorder=1)
    axes.plot(places, position[order], ".", color=colours.LIGHT.every, markersize=3, zorder=2)
    if chosen in order:
        at = order.index(chosen)
        axes.axhline(position[chosen], color=colours.LIGHT.fit, linewidth=0.7, linestyle=(0, (4, 1.8)), zorder=1.5)
        axes.vlines([at], low[chosen], high[chosen], color=colours.LIGHT.fit, linewidth=1.0, zorder=3)
        axes.plot([at], [position[chosen]], "D", color=colours.LIGHT.fit, markersize=4, zorder=4)
    ends = np.concatenate([position[order], low[order], high[order]])
    ends = ends[np.isfinite(ends)]
    room = 0.06 * (ends.max() - ends.min()) or 0.05 * abs(ends[0]) or 1.0
    bottom, top = float(ends.min() - room), float(ends.max() + room)
    plain_ticks(axes.yaxis, bottom, top)
    axes.set_ylim(bottom, top)
    axes.set_xlim(-1, len(order))
    axes.xaxis.set_major_locator(NullLocator())
    axes.set_ylabel(f"Position ({typeset.G0})")
    spread = typeset.interval(float(position[order].min()), float(position[order].max()), "G0", 4)
    failed = len(position) - len(order)
    note = f", {typeset.integer(failed)} left out" if failed else ""
    axes.set_title(f"{typeset.integer(len(order))} analyses, {spread}{note}", loc="right", pad=3)


def _grid(axes: Axes, choices: Mapping[str, Sequence[str]], order: Sequence[int], chosen: int) -> None:
    """Mark under each position what was chosen; the reported analysis has a ring."""
    height, ticks, texts = 0.0, [], []
    for name, values in choices.items():
        for number, level in enumerate(dict.fromkeys(map(str, values))):
            height -= 1.0
            marks = [place for place, row in enumerate(order) if str(values[row]) == level]
            axes.plot(marks, [height] * len(marks), "|", color=colours.LIGHT.quiet, markersize=3, markeredgewidth=0.6)
            if chosen in order and str(values[chosen]) == level:
                axes.plot([order.index(chosen)], [height], "D", color=colours.LIGHT.fit, markersize=3)
            ticks.append(height)
            texts.append(f"{name}: {level}" if number == 0 else level)
        height -= 0.6
    axes.set_ylim(height, 0)
    axes.set_xlim(-1, len(order))
    axes.xaxis.set_major_locator(NullLocator())
    axes.yaxis.set_major_locator(FixedLocator(ticks))
    axes.yaxis.set_major_formatter(FixedFormatter(texts))
    axes.tick_params(length=0)
    for side in ("left", "bottom"):
        axes.spines[side].set_visible(False)


def _page(settings: FigureSettings, width_mm: float, panel_mm: float) -> tuple[Figure, Axes]:
    point = settings.text_point
    left, bottom, right, top = 1.7 * point, 1.35 * point, 0.5 * point, 0.5 * point
    height = bottom + panel_mm + top
    figure = new_figure(settings, height, width_mm)
    box = (left / width_mm, bottom / height, (width_mm - left - right) / width_mm, panel_mm / height)
    return figure, figure.add_axes(box)
