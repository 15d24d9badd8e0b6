"""The contact sheet: many single traces with their plateaus on a few pages, for eyes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from meseta import colours, typeset
from meseta.figures.page import new_figure, page_style
from meseta.figures.scale import ConductanceScale, plain_ticks
from meseta.figures.words import say
from meseta.recipe.figure import FigureSettings
from meseta.segmentation import PlateauTable
from meseta.traces import TraceSet

__all__ = ["contact_sheet"]

Floats = npt.NDArray[np.float64]
_COLUMNS, _ROWS = 4, 6
_PAGE_MM: Final = 250.0
_BLOCK: Final = 16
_ABOVE_DECADES: Final = 2.3
"""A panel ends soon after the trace has fallen to so many decades above the lower end of the axis, which lies at the
smallest of the floor's readings, some 1.5 decades below its noise."""
_POINTS: Final = 700
"""Points a trace is drawn with: smallest and largest of each stretch, so that no spike is lost."""


def contact_sheet(
    traces: TraceSet, plateaus: PlateauTable, rows: npt.ArrayLike, settings: FigureSettings
) -> list[Figure]:
    """Draw the chosen traces with their plateaus, 24 a page.

    Parameters
    ----------
    traces : TraceSet
    plateaus : PlateauTable
        Plateaus of all traces; each is drawn along its slope with end caps, a censored one open at the end.
    rows : array_like of int
        Rows of the traces to draw, in this order.
    settings : FigureSettings

    Returns
    -------
    list of Figure
        Pages for :func:`~meseta.figures.save_pages`; one page that says so where no trace is chosen.
    """
    chosen = [int(row) for row in np.asarray(rows, np.int64).ravel()]
    with page_style(settings):
        if not chosen:
            figure = new_figure(settings, 60.0)
            axes = figure.add_axes((0.1, 0.1, 0.8, 0.8))
            axes.set_axis_off()
            say(axes, "no trace was chosen")
            return [figure]
        scale = _common_scale(traces, chosen)
        a_page = _COLUMNS * _ROWS
        parts = [chosen[first : first + a_page] for first in range(0, len(chosen), a_page)]
        return [
            _page(traces, plateaus, part, scale, settings, f"page {number} of {len(parts)}")
            for number, part in enumerate(parts, 1)
        ]


def _common_scale(traces: TraceSet, rows: Sequence[int]) -> ConductanceScale:
    """Return one logarithmic axis for all panels: whole decades from the floor to the highest reading."""
    lows, highs = [], []
    for row in rows:
        values = traces.trace_conductance(row)
        positive = values[values > 0]
        if positive.size:
            lows.append(float(np.quantile(positive, 0.02)))
            highs.append(float(positive.max()))
    if not lows:
        return ConductanceScale(True, -6.0, 1.0)
    low, high = np.log10(np.median(lows)), np.log10(np.quantile(highs, 0.9))
    return ConductanceScale(True, float(np.floor(low)), float(max(np.ceil(high), np.floor(low) + 1)))


def _page(
    traces: TraceSet,
    plateaus: PlateauTable,
    rows: Sequence[int],
    scale: ConductanceScale,
    settings: FigureSettings,
    foot: str,
) -> Figure:
    width, point = settings.width_mm, settings.text_point
    figure = new_figure(settings, _PAGE_MM)
    left, bottom, top, gap = 2.1 * point, 1.7 * point, 0.7 * point, 0.45 * point
    wide = (width - left - 0.4 * point - (_COLUMNS - 1) * gap) / _COLUMNS
    high = (_PAGE_MM - bottom - top - (_ROWS - 1) * 1.2 * point) / _ROWS
    for number, row in enumerate(rows):
        down, across = divmod(number, _COLUMNS)
        corner = (left + across * (wide + gap), _PAGE_MM - top - (down + 1) * high - down * 1.2 * point)
        box = (corner[0] / width, corner[1] / _PAGE_MM, wide / width, high / _PAGE_MM)
        _panel(figure.add_axes(box), traces, plateaus, row, scale, labelled=across == 0)
    name = "Displacement" if traces.drive.is_displacement else "Drive"
    figure.text(0.5, 0.5 * point / _PAGE_MM, f"{name} ({typeset.unit_text(traces.drive.unit)})", ha="center")
    figure.text(0.35 * point / width, 0.5, scale.label, rotation=90, va="center")
    figure.text(1 - 0.35 * point / width, 0.5 * point / _PAGE_MM, foot, ha="right", color=colours.LIGHT.quiet)
    return figure


def _panel(
    axes: Axes, traces: TraceSet, plateaus: PlateauTable, row: int, scale: ConductanceScale, labelled: bool
) -> None:
    drive, conductance = traces.trace_drive(row), traces.trace_conductance(row)
    scale.decorate(axes.yaxis, labelled)
    mine = plateaus.take(plateaus.trace == row)
    shown = drive[_shown(conductance, mine, 10.0 ** (scale.low + _ABOVE_DECADES))]
    begin, end = (float(np.nanmin(shown)), float(np.nanmax(shown))) if np.isfinite(shown).any() else (0.0, 1.0)
    end = end if end > begin else begin + 1.0
    plain_ticks(axes.xaxis, begin, end, most=3)
    axes.set_xlim(begin, end)
    axes.set_title(f"{typeset.integer(row)}", color=colours.LIGHT.quiet, pad=1.5)
    found = f"{len(mine)} plateau{'' if len(mine) == 1 else 's'}"
    axes.set_title(found, loc="right", color=colours.LIGHT.quiet, pad=1.5)
    axes.axhline(0, color=colours.LIGHT.hairline, linewidth=0.4, zorder=0.5)
    x, y = _envelope(drive, scale.u(conductance))
    axes.plot(x, y, color=colours.LIGHT.ink, linewidth=0.45, zorder=1)
    for place in range(len(mine)):
        _plateau(axes, mine, place, drive)


def _shown(conductance: npt.NDArray[np.floating], plateaus: PlateauTable, above_g0: float) -> slice:
    """Return the samples that a panel shows: all above the floor, all plateaus, and a margin, not the long floor."""
    whole = len(conductance) // _BLOCK * _BLOCK
    blocks = np.nan_to_num(conductance[:whole].reshape(-1, _BLOCK), nan=0.0)
    high = np.flatnonzero(np.median(blocks, axis=1) > above_g0) * _BLOCK
    edges = np.concatenate([high, high + _BLOCK, plateaus.start, plateaus.stop])
    if not len(high):
        return slice(0, len(conductance))
    first, last = int(edges.min()), int(edges.max())
    margin = max(_BLOCK, (last - first) // 4)
    return slice(max(first - margin, 0), min(last + margin, len(conductance)))


def _plateau(axes: Axes, plateaus: PlateauTable, place: int, drive: Floats) -> None:
    """Draw a plateau along its slope; end caps stand where it truly ends."""
    first, last = int(plateaus.start[place]), min(int(plateaus.stop[place]), len(drive)) - 1
    level = float(plateaus.level_g0[place])
    if not (0 <= first <= last and level > 0):
        return
    ends = np.array([drive[first], drive[last]])
    slope = float(plateaus.slope_decades_per_nm[place])
    tilt = slope * (ends - ends.mean()) if np.isfinite(slope) else np.zeros(2)
    u = np.log10(level) + tilt
    axes.plot(ends, u, color=colours.LIGHT.selected, linewidth=1.3, zorder=3)
    capped = ends if not str(plateaus.censored[place]) else ends[:1]
    axes.plot(
        capped, u[: len(capped)], "|", color=colours.LIGHT.selected, markersize=3.4, markeredgewidth=0.8, zorder=3
    )


def _envelope(x: Floats, y: Floats) -> tuple[Floats, Floats]:
    """Return smallest and largest value of each stretch of samples, in the order in which they come."""
    stretch = -(-len(x) // (_POINTS // 2))
    if stretch <= 2:
        return x, y
    whole = len(x) // stretch * stretch
    block = y[:whole].reshape(-1, stretch)
    known = np.where(np.isfinite(block), block, 0.0)
    low = np.argmin(np.where(np.isfinite(block), known, np.inf), axis=1)
    high = np.argmax(np.where(np.isfinite(block), known, -np.inf), axis=1)
    order = np.sort(np.stack([low, high], axis=1), axis=1)
    index = (np.arange(len(block))[:, None] * stretch + order).ravel()
    index = np.concatenate([index, np.arange(whole, len(x))])
    return x[index], y[index]
