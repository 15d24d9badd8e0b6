"""The 2D correlation histogram: a diverging map over two conductance axes; what chance explains is drawn as paper."""

from __future__ import annotations

import numpy as np
import pyqtgraph as pg
from PySide6.QtCore import QRectF

from meseta import colours, typeset
from meseta.histograms import CorrelationHistogram
from meseta.window.frame import Frame
from meseta.window.plots.panel import PlotData, PlotPanel
from meseta.window.plots.ticks import ConductanceAxis
from meseta.window.session import Hover
from meseta.window.theme import Theme

__all__ = ["CorrelationPanel"]


class CorrelationPanel(PlotPanel):
    """Correlation over traces between the counts of two bins."""

    title = "2D correlation histogram"
    help_page = "correlation"
    object_name = "correlation"

    def __init__(self, frame: Frame) -> None:
        self.across, self.up = ConductanceAxis("bottom"), ConductanceAxis("left")
        super().__init__(frame, self.across, self.up)
        self.up.setWidth(64)
        self.image = pg.ImageItem()
        self.box.addItem(self.image, ignoreBounds=True)
        self._shown: CorrelationHistogram | None = None
        session = self.session
        session.result_changed.connect(lambda name: self._draw() if name == "correlation_histogram" else None)
        session.states_changed.connect(self._say)
        session.traces_changed.connect(self._draw)
        self.box.zoomed.connect(self._zoom)
        self.box.moved.connect(self._move)
        self.box.reset.connect(self._show_all)
        self.wear(frame.theme)
        self._draw()

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self._draw()

    def _draw(self) -> None:
        result: CorrelationHistogram | None = self.session.result("correlation_histogram")
        self.image.setVisible(result is not None)
        if result is not None:
            self._paint(result)
            if result is not self._shown:
                self._shown = result
                self._show_all()
        self._say()

    def _paint(self, result: CorrelationHistogram) -> None:
        values = np.nan_to_num(np.asarray(result.correlation, np.float64))
        limit = float(result.threshold) if np.isfinite(result.threshold) else 0.0
        values = np.where(np.abs(values) <= limit, 0.0, values)
        places = np.clip(np.round((values + 1) * 128), 0, 256).astype(np.uint16)
        ramp = colours.diverging(self.frame.theme.dark, 257)
        table = np.full((257, 4), 255, np.uint8)
        table[:, :3] = np.round(ramp * 255)
        self.image.setImage(table[places], autoLevels=False, levels=(0, 255))
        u = result.grid.u_edges
        low, wide = float(u[0]), float(u[-1] - u[0])
        self.image.setRect(QRectF(low, low, wide, wide))
        for axis in (self.across, self.up):
            axis.set_logarithmic(result.grid.axis == "logarithmic")

    def _show_all(self) -> None:
        if self._shown is not None:
            u = self._shown.grid.u_edges
            self.box.setRange(QRectF(float(u[0]), float(u[0]), float(u[-1] - u[0]), float(u[-1] - u[0])), padding=0.01)

    def _zoom(self, x_factor: float, y_factor: float, x: float, y: float) -> None:
        factor = x_factor * y_factor
        (left, right), (low, high) = self.box.viewRange()
        self.box.setXRange(x - (x - left) * factor, x + (right - x) * factor, padding=0)
        self.box.setYRange(y - (y - low) * factor, y + (high - y) * factor, padding=0)

    def _move(self, x: float, y: float) -> None:
        (left, right), (low, high) = self.box.viewRange()
        self.box.setXRange(left + x, right + x, padding=0)
        self.box.setYRange(low + y, high + y, padding=0)

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Return the conductance of the upper axis under the pointer, where the plots show the same axis."""
        same = self._shown is not None and self._shown.grid.axis == self.session.axis
        return Hover(y) if same else None

    def _say(self) -> None:
        session, state = self.session, self.session.state("correlation_histogram")
        error = session.errors.get("correlation_histogram")
        if session.traces is None:
            self.say_empty("Which conductances go together in one trace will stand here.")
        elif error is not None:
            self.say_empty(str(error))
        elif session.result("correlation_histogram") is None:
            self.say_empty("Correlating …" if state == "working" else "Not yet worked out.")
        else:
            self.say_empty("")
        self.say_state("out of date" if state == "out of date" else "")
        shown = session.result("correlation_histogram")
        if shown is not None and np.isfinite(shown.threshold):
            self.heading.setToolTip(f"values within ±{typeset.number(float(shown.threshold), 2)} are left to chance")

    def data(self) -> PlotData | None:
        """Return the correlations, one row a pair of bins."""
        shown = self._shown
        if shown is None:
            return None
        g, bins = shown.grid.centres_g0, shown.grid.bins
        pairs = {"first_g0": np.repeat(g, bins), "second_g0": np.tile(g, bins)}
        return PlotData("2D correlation histogram", {**pairs, "correlation": shown.correlation.ravel()})
