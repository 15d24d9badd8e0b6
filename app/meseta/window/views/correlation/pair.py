"""Histograms of the traces that are rich in a pair of bins, drawn over that of all traces."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

import numpy as np
import pyqtgraph as pg
from PySide6.QtGui import QGuiApplication, QPen

from meseta import typeset
from meseta.window.plots.panel import show_below
from meseta.window.plots.ticks import ConductanceAxis, LogCountAxis
from meseta.window.theme import Theme

if TYPE_CHECKING:
    from meseta.histograms import ConductanceHistogram, CorrelationHistogram, PairHistograms
    from meseta.window.views.correlation.panel import CorrelationPanel

__all__ = ["PairPlot"]

HEIGHT = 150
DECADES = 4.0
LOWEST = -30.0
"""Where a density of zero is drawn: below every view."""


class PairPlot:
    """A second plot under the map, on the same conductance axis."""

    def __init__(self, panel: CorrelationPanel) -> None:
        self._panel = panel
        self.found: PairHistograms | None = None
        self.up, self.across = LogCountAxis("left", "density"), ConductanceAxis("bottom")
        self.up.logarithmic = True
        self.up.setWidth(64)
        self.across.setHeight(38)
        self.item = pg.PlotItem(axisItems={"left": self.up, "bottom": self.across}, enableMenu=False)
        self.item.hideButtons()
        box = self.item.getViewBox()
        box.setMouseEnabled(False, False)
        box.disableAutoRange()
        self.curves = {name: pg.PlotCurveItem(antialias=False) for name in ("all", "first", "second", "both")}
        for curve in self.curves.values():
            self.item.addItem(curve, ignoreBounds=True)
        self.item.setFixedHeight(HEIGHT)
        panel.plot.getPlotItem().layout.addItem(self.item, 6, 0, 1, 4)
        self.item.hide()
        self.item.setFixedHeight(0)

    def pens(self, theme: Theme) -> dict[str, QPen]:
        """Return the pen of each curve: each differs by its dash as well as by its colour."""
        return {
            "all": theme.pen("every"),
            "first": theme.pen("selected"),
            "second": theme.pen("ink", dashed=True),
            "both": theme.wide_pen("selected", 2.0),
        }

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        for axis in (self.up, self.across):
            axis.wear(theme)
        for name, pen in self.pens(theme).items():
            self.curves[name].setPen(pen)

    def set_logarithmic(self, logarithmic: bool) -> None:
        """Use the map's axis."""
        self.across.set_logarithmic(logarithmic)

    def look(self, low: float, high: float) -> None:
        """Show the same stretch of the axis as the map."""
        self.item.getViewBox().setXRange(low, high, padding=0)

    def show(self, found: PairHistograms | None, shown: CorrelationHistogram | None) -> None:
        """Show the histograms of a pair, or none."""
        self.found = found
        show_below(self.item, found is not None)
        self.item.setFixedHeight(HEIGHT if found is not None else 0)
        if found is None or shown is None:
            return
        self.up.say(found.both.density_unit.split(" / ")[0])
        self.up.setToolTip(found.both.density_unit)
        parts = self._parts(found)
        inside = (parts["all"].grid.centres_g0 >= shown.grid.edges_g0[0]) & (
            parts["all"].grid.centres_g0 < shown.grid.edges_g0[-1]
        )
        top = 0.0
        for name, histogram in parts.items():
            with np.errstate(divide="ignore", invalid="ignore"):
                height = np.where(histogram.density > 0, np.log10(histogram.density), LOWEST)
            self.curves[name].setData(np.repeat(histogram.grid.u_edges, 2)[1:-1], np.repeat(height, 2))
            top = max(top, float(np.nanmax(histogram.density[inside], initial=0.0)))
        high = float(np.log10(top)) + 0.2 if top > 0 else 0.0
        self.item.getViewBox().setYRange(high - DECADES, high, padding=0)
        self.look(*self._panel.box.viewRange()[0])

    def _parts(self, found: PairHistograms) -> dict[str, ConductanceHistogram]:
        return {
            "all": found.first.everything,
            "first": found.first.yes,
            "second": found.second.yes,
            "both": found.both,
        }

    def legend(self) -> str:
        """Return which line is which, as rich text; empty where there is no pair."""
        found, theme = self.found, self._panel.frame.theme
        if found is None:
            return ""
        first, second = (typeset.interval(*one, "G0", 2) for one in (found.first_g0, found.second_g0))
        words = (
            ("—", "every", f"all {typeset.integer(found.first.everything.traces)}"),
            ("—", "selected", f"rich in {first}: {typeset.integer(found.first.yes.traces)}"),
            ("- -", "ink", f"rich in {second}: {typeset.integer(found.second.yes.traces)}"),
            ("━", "selected", f"in both: {typeset.integer(found.both.traces)}"),
        )
        return " &nbsp; ".join(
            f"<span style='color:{theme.colour(meaning).name()}'>{dash} {escape(text)}</span>"
            for dash, meaning, text in words
        )

    def copy(self) -> None:
        """Put the four histograms on the clipboard."""
        if self.found is None:
            return
        parts = self._parts(self.found)
        grid = parts["all"].grid
        columns = [grid.edges_g0[:-1], grid.edges_g0[1:], *(one.density for one in parts.values())]
        names = ["g_low_g0", "g_high_g0", *(f"density_{name}" for name in parts)]
        rows = ["\t".join(repr(float(value)) for value in row) for row in zip(*columns, strict=True)]
        QGuiApplication.clipboard().setText("\n".join(["\t".join(names), *rows]))
        self._panel.frame.say(f"{typeset.integer(len(rows))} rows of the pair's histograms copied")
