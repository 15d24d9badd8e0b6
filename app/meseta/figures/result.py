"""The result figure: 2D histogram and 1D histogram with fitted peaks, on one conductance axis."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from meseta import colours
from meseta.figures.displacement import draw_displacement
from meseta.figures.distribution import draw_distribution
from meseta.figures.page import HEAVY_FACE, new_figure, page_style
from meseta.figures.scale import ConductanceScale
from meseta.histograms import ConductanceHistogram, DisplacementHistogram
from meseta.peaks import PeakFit
from meseta.recipe.figure import FigureSettings
from meseta.recipe.histogram import DisplacementHistogramSettings

__all__ = ["result_figure"]

_NARROW: Final = 16.0
"""A page of fewer millimetres a point of text has its panels below one another."""
_LINE: Final = 0.42
"""Height of a line of text, in millimetres a point."""

Box = tuple[float, float, float, float]
"""Left, bottom, width, height in millimetres."""


@dataclass(frozen=True)
class _Layout:
    """Where everything stands on the page, in millimetres."""

    height: float
    plane: Box
    side: Box
    bar: Box

    @classmethod
    def beside(cls, width: float, point: float, title: bool, shared: bool) -> _Layout:
        """Place both panels side by side; the right one has no tick text of its own where the axis is shared."""
        left, bottom, right = 1.55 * point, 1.35 * point, 0.35 * point
        top = (1.6 + 0.6 * title) * point
        gap = 0.8 * point if shared else left
        room, panel = width - left - right - gap, min(max(0.46 * width, 62.0), 110.0) - bottom - top
        first = 0.56 * room
        plane = (left, bottom, first, panel)
        side = (left + first + gap, bottom, room - first, panel)
        return cls(bottom + panel + top, plane, side, _bar_above(plane, point))

    @classmethod
    def stacked(cls, width: float, point: float, title: bool) -> _Layout:
        """Place the panels below one another, for a single column."""
        left, bottom, right = 1.55 * point, 1.35 * point, 0.35 * point
        top, between, panel = (1.6 + 0.6 * title) * point, 1.25 * point, 0.6 * width
        side = (left, bottom, width - left - right, panel)
        plane = (left, 2 * bottom + panel + between, width - left - right, panel)
        return cls(2 * (bottom + panel) + between + top, plane, side, _bar_above(plane, point))


def _bar_above(plane: Box, point: float) -> Box:
    left, bottom, width, height = plane
    return (left + 0.42 * width, bottom + height + _LINE * point, 0.58 * width, 0.13 * point)


def result_figure(
    histogram: ConductanceHistogram,
    displacement_histogram: DisplacementHistogram,
    peak_fit: PeakFit,
    settings: FigureSettings,
    title: str = "",
    frame: DisplacementHistogramSettings | None = None,
) -> Figure:
    """Draw the result of an analysis for print.

    Parameters
    ----------
    histogram : ConductanceHistogram
        With its 95 % band; bins reached by few traces are drawn weak.
    displacement_histogram : DisplacementHistogram
        On the same conductance axis; where it is not, each panel has its own.
    peak_fit : PeakFit
        Fit (dashed), single peaks and background (dotted), labels with the 95 % half width in brackets.
    settings : FigureSettings
    title : str
        Name of the recording; empty for none.
    frame : DisplacementHistogramSettings, optional
        What the 2D histogram was made by: where its traces are aligned at another event than the zero of displacement
        the figure says so.

    Returns
    -------
    matplotlib.figure.Figure
        Not known to pyplot; write it with :func:`~meseta.figures.save_figure`.  A result without traces, without
        aligned traces or without peaks says so in words.
    """
    scale, other = ConductanceScale.of(histogram.grid), ConductanceScale.of(displacement_histogram.grid)
    same, point = scale.logarithmic == other.logarithmic, settings.text_point
    narrow = settings.width_mm < _NARROW * point
    with page_style(settings):
        width = settings.width_mm
        layout = (
            _Layout.stacked(width, point, bool(title)) if narrow else _Layout.beside(width, point, bool(title), same)
        )
        figure = new_figure(settings, layout.height)
        plane, side, bar = (_axes(figure, box, width, layout.height) for box in (layout.plane, layout.side, layout.bar))
        draw_displacement(
            plane,
            bar,
            displacement_histogram,
            scale if same else other,
            settings,
            frame.event if frame is not None else "",
        )
        draw_distribution(side, histogram, peak_fit, scale, settings, labelled=narrow or not same)
        _key(side, 1 + _LINE * point / layout.side[3])
        for letter, (left, bottom, _, high) in zip("ab", (layout.plane, layout.side), strict=True):
            place = (left / width, (bottom + high + _LINE * point) / layout.height)
            figure.text(*place, letter, family=[HEAVY_FACE, "DejaVu Sans"], va="bottom")
        if title:
            place = (0.4 * point / width, 1 - 0.35 * point / layout.height)
            figure.text(*place, title, va="top", color=colours.LIGHT.quiet)
        figure.draw_without_rendering()
    return figure


def _axes(figure: Figure, box: Box, width: float, height: float) -> Axes:
    return figure.add_axes((box[0] / width, box[1] / height, box[2] / width, box[3] / height))


def _key(axes: Axes, height: float) -> None:
    """Put the key above the axes, in one row if that fits, else in two."""
    if not axes.get_legend_handles_labels()[0]:
        return
    for columns in (5, 2):
        key = axes.legend(loc="lower right", bbox_to_anchor=(1.0, height), ncols=columns, borderaxespad=0)
        if key.get_window_extent().width < 0.94 * axes.get_window_extent().width:
            return
