"""The conductance histogram lying on its side: error band, weak bins, the selected traces' own, and the fit."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QPointF
from PySide6.QtGui import QPolygonF
from PySide6.QtWidgets import QComboBox, QGraphicsPolygonItem

from meseta import typeset
from meseta.histograms import ConductanceHistogram
from meseta.window.frame import Frame
from meseta.window.pictures import SubsetPicture
from meseta.window.plots.drawing import WindowTool
from meseta.window.plots.panel import PlotData, SpinePanel
from meseta.window.plots.ticks import LogCountAxis
from meseta.window.theme import Theme
from meseta.window.views.histogram.fit import FitLayer

__all__ = ["HistogramPanel"]

Floats = npt.NDArray[np.float64]
SCALES = ("in view", "selected", "logarithmic")
DECADES_SHOWN = 4.0


class HistogramPanel(SpinePanel):
    """The 1D histogram."""

    title = "Conductance histogram"
    help_page = "histogram"
    object_name = "histogram"

    def __init__(self, frame: Frame) -> None:
        self.density_axis = LogCountAxis("bottom", "density")
        super().__init__(frame, self.density_axis)
        self.band = QGraphicsPolygonItem()
        self.band.setZValue(0)
        self.whole, self.weak, self.part = (_curve(z) for z in (5, 4, 8))
        self.box.addItem(self.band, ignoreBounds=True)
        for item in (self.whole, self.weak, self.part):
            self.box.addItem(item, ignoreBounds=True)
        self.fit = FitLayer(self)
        self.tool = WindowTool(self, across=False)
        self.scale = QComboBox()
        self.scale.addItems([f"scale: {name}" for name in SCALES])
        self.scale.setAccessibleName("Scale of the density axis")
        self.scale.setToolTip("What the density axis is scaled to")
        self.scale.currentIndexChanged.connect(self._draw)
        self.corner.addWidget(self.scale)
        session = self.session
        session.result_changed.connect(self._result_changed)
        session.states_changed.connect(self._say)
        session.subset_changed.connect(self._subset_changed)
        session.traces_changed.connect(self._draw)
        session.document_changed.connect(lambda _: self._say())
        session.span_changed.connect(lambda _: self._rescale())
        self.wear(frame.theme)
        self._draw()

    # -- looks ----------------------------------------------------------------------------------------------------------

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self._pens()
        self.tool.wear(theme)
        self.fit.wear(theme)

    def _pens(self) -> None:
        theme = self.frame.theme
        under = self.session.subset is not None
        meaning = "every" if under else "selected"
        self.whole.setPen(theme.pen(meaning))
        self.weak.setPen(theme.pen(meaning, dotted=True))
        self.part.setPen(theme.pen("selected"))
        self.band.setPen(pg.mkPen(None))
        self.band.setBrush(pg.mkBrush(theme.colour(meaning, 60)))

    @property
    def logarithmic(self) -> bool:
        """Whether the density axis is logarithmic."""
        return SCALES[self.scale.currentIndex()] == "logarithmic"

    @property
    def histogram(self) -> ConductanceHistogram | None:
        """The histogram as last shown, where it belongs on the axis in use."""
        shown: ConductanceHistogram | None = self.session.result("histogram")
        return shown if shown is not None and shown.grid.axis == self.session.axis else None

    # -- drawing ----------------------------------------------------------------------------------------------------------

    def _result_changed(self, name: str) -> None:
        if name in ("histogram", "peaks"):
            self._draw()

    def _subset_changed(self, _: SubsetPicture | None) -> None:
        self._draw()

    def across(self, density: npt.ArrayLike) -> Floats:
        """Return densities on the density axis as drawn."""
        values = np.asarray(density, float)
        if not self.logarithmic:
            return values
        top = self._top()
        floor = np.log10(top) - DECADES_SHOWN - 2 if top > 0 else -6.0
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(values > 0, np.log10(values), floor)

    def _draw(self, *_: Any) -> None:
        self.density_axis.logarithmic = self.logarithmic
        histogram = self.histogram
        if histogram is None:
            for item in (self.whole, self.weak, self.part):
                item.setData([], [])
            self.band.setPolygon(QPolygonF())
            self.fit.clear()
            self._say()
            return
        self._pens()
        edges, weak = histogram.grid.u_edges, histogram.traces_in_bin < histogram.weak_traces
        density = self.across(histogram.density)
        self.whole.setData(*_steps(np.where(weak, np.nan, density), edges), connect="finite")
        self.weak.setData(*_steps(_with_neighbours(density, weak), edges), connect="finite")
        self._draw_band(histogram)
        subset = self.session.subset
        own = None if subset is None else subset.histogram
        if own is not None and own.grid.bins == histogram.grid.bins:
            self.part.setData(*_steps(self.across(own.density), own.grid.u_edges), connect="finite")
        else:
            self.part.setData([], [])
        self.density_axis.say(_density_words(histogram.density_unit))
        self.fit.show(self.session.result("peaks"))
        self._rescale()
        self._say()

    def _draw_band(self, histogram: ConductanceHistogram) -> None:
        low, high = histogram.density_low, histogram.density_high
        known = np.flatnonzero(np.isfinite(low) & np.isfinite(high))
        if not len(known):
            self.band.setPolygon(QPolygonF())
            return
        u = (histogram.grid.u_edges[:-1] + histogram.grid.u_edges[1:]) / 2
        x = np.concatenate([self.across(low)[known], self.across(high)[known][::-1]])
        y = np.concatenate([u[known], u[known][::-1]])
        self.band.setPolygon(QPolygonF([QPointF(a, b) for a, b in zip(x.tolist(), y.tolist(), strict=True)]))

    def _top(self) -> float:
        """Return the density that the axis must reach."""
        histogram = self.histogram
        if histogram is None:
            return 0.0
        centres = (histogram.grid.u_edges[:-1] + histogram.grid.u_edges[1:]) / 2
        span, subset = self.session.span, self.session.subset
        inside = (centres >= span.low) & (centres <= span.high)
        density = histogram.density
        if SCALES[self.scale.currentIndex()] == "selected":
            chosen = inside & self._selected_bins(histogram)
            if chosen.any():
                inside = chosen
                if subset is not None and subset.histogram is not None:
                    density = (
                        np.fmax(density, subset.histogram.density)
                        if len(subset.histogram.density) == len(density)
                        else density
                    )
        top = float(np.nanmax(density[inside], initial=0.0)) if inside.any() else 0.0
        return top if top > 0 else float(np.nanmax(histogram.density, initial=0.0))

    def _selected_bins(self, histogram: ConductanceHistogram) -> npt.NDArray[np.bool_]:
        """Return the bins inside a condition's window, or else inside the range of the fit."""
        centres = histogram.grid.centres_g0
        chosen = np.zeros(len(centres), bool)
        for condition in self.session.document.conditions.active:
            if condition.kind in ("plateau", "passes"):
                chosen |= (centres >= condition.low_g0) & (centres < condition.high_g0)
        fit = self.session.result("peaks")
        if not chosen.any() and fit is not None and fit.grid.bins:
            chosen = (centres >= fit.grid.edges_g0[0]) & (centres < fit.grid.edges_g0[-1])
        return chosen

    def _rescale(self) -> None:
        top = self._top()
        if top <= 0:
            return
        if self.logarithmic:
            high = float(np.log10(top))
            self.box.setXRange(high - DECADES_SHOWN, high + 0.15, padding=0)
        else:
            self.box.setXRange(-0.02 * top, 1.12 * top, padding=0)

    def _say(self) -> None:
        session = self.session
        shown = session.shown.get("histogram")
        state = session.state("histogram")
        if session.traces is None:
            self.say_empty("The distribution of all conductances will stand here, with its peaks.")
        elif "histogram" in session.errors:
            self.say_empty(str(session.errors["histogram"]))
        elif self.histogram is None:
            self.say_empty("Counting the samples …" if state == "working" else "")
        elif self.histogram.counts.sum() == 0:
            self.say_empty("No sample lies in the range. See the step Conductance histogram.")
        else:
            self.say_empty("")
        words = {"out of date": "out of date", "working": "provisional" if shown else ""}
        self.say_state(words.get(state, "") if shown is not None else "")

    # -- the numbers behind it ------------------------------------------------------------------------------------------

    def data(self) -> PlotData | None:
        """Return the columns of ``histogram.csv``."""
        histogram: ConductanceHistogram | None = self.session.result("histogram")
        return None if histogram is None else PlotData("conductance histogram", histogram.table().columns())

    def menu_entries(self) -> list[tuple[str, Callable[[], None]]]:
        """Offer what can be done with peaks."""
        return [
            ("Add a peak at the pointer", self.fit.add_at_pointer),
            ("Let the peaks be proposed again", self.fit.forget),
        ]


def _curve(z: int) -> pg.PlotCurveItem:
    item = pg.PlotCurveItem(antialias=False)
    item.setZValue(z)
    return item


def _steps(density: Floats, edges: Floats) -> tuple[Floats, Floats]:
    """Return a histogram as a stepped line on its side."""
    return np.repeat(density, 2), np.repeat(edges, 2)[1:-1]


def _with_neighbours(density: Floats, weak: npt.NDArray[np.bool_]) -> Floats:
    """Return the weak bins and those beside them, so that the dotted line meets the full one."""
    near = weak.copy()
    near[1:] |= weak[:-1]
    near[:-1] |= weak[1:]
    return np.where(near, density, np.nan)


def _density_words(unit: str) -> str:
    """Return the unit of the density as an axis shows it."""
    return unit.replace(" / ", " per ").replace("G0", typeset.G0)
