"""The result figure: 2D histogram and 1D histogram with fitted peaks, side by side on one conductance axis."""

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

__all__ = ["result_figure"]

_SHAPE: Final = 0.46
"""Height of the figure over its width, within bounds in millimetres."""
_LOWEST_MM, _HIGHEST_MM = 62.0, 110.0


@dataclass(frozen=True)
class _Frame:
    """The page in millimetres, from which axes are placed."""

    figure: Figure
    width: float
    height: float

    def axes(self, left: float, bottom: float, width: float, height: float) -> Axes:
        box = (left / self.width, bottom / self.height, width / self.width, height / self.height)
        return self.figure.add_axes(box)


def result_figure(
    histogram: ConductanceHistogram,
    displacement_histogram: DisplacementHistogram,
    peak_fit: PeakFit,
    settings: FigureSettings,
    title: str = "",
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

    Returns
    -------
    matplotlib.figure.Figure
        Not known to pyplot; write it with :func:`~meseta.figures.save_figure`.  A result without traces, without
        aligned traces or without peaks says so in words.
    """
    with page_style(settings):
        point = settings.text_point
        height = min(max(_SHAPE * settings.width_mm, _LOWEST_MM), _HIGHEST_MM)
        frame = _Frame(new_figure(settings, height), settings.width_mm, height)
        left, bottom, right = 1.55 * point, 1.35 * point, 0.35 * point
        top = 1.3 * point + (0.65 * point if title else 0)
        scale = ConductanceScale.of(histogram.grid)
        other = ConductanceScale.of(displacement_histogram.grid)
        shared = scale.logarithmic == other.logarithmic
        gap = 0.8 * point if shared else left
        room = settings.width_mm - left - right - gap
        first, panel = 0.56 * room, height - bottom - top
        plane = frame.axes(left, bottom, first, panel)
        side = frame.axes(left + first + gap, bottom, room - first, panel)
        bar = frame.axes(left + 0.42 * first, height - top + 0.42 * point, 0.58 * first, 0.13 * point)
        draw_displacement(plane, bar, displacement_histogram, scale if shared else other, settings)
        draw_distribution(side, histogram, peak_fit, scale, settings, labelled=not shared)
        if side.get_legend_handles_labels()[0]:
            place = (1.0, 1 + 0.42 * point / panel)
            side.legend(loc="lower right", bbox_to_anchor=place, ncols=4, borderaxespad=0)
        _letters(frame, (left, left + first + gap), height - top + 0.42 * point)
        if title:
            frame.figure.text(
                0.3 * left / frame.width, 1 - 0.35 * point / height, title, va="top", color=colours.LIGHT.quiet
            )
        frame.figure.draw_without_rendering()
    return frame.figure


def _letters(frame: _Frame, places_mm: tuple[float, float], height_mm: float) -> None:
    for letter, place in zip("ab", places_mm, strict=True):
        frame.figure.text(
            place / frame.width, height_mm / frame.height, letter, family=[HEAVY_FACE, "DejaVu Sans"], va="bottom"
        )
