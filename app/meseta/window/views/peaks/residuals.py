"""Residuals of the fit on the shared conductance axis: observed less fitted, within the band of the histogram."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QPointF
from PySide6.QtGui import QPolygonF
from PySide6.QtWidgets import QGraphicsPolygonItem

from meseta import typeset
from meseta.window.frame import Frame
from meseta.window.plots.panel import PlotData, SpinePanel
from meseta.window.plots.ticks import PlainAxis
from meseta.window.theme import Theme

if TYPE_CHECKING:
    from meseta.peaks import PeakFit

__all__ = ["ResidualsPanel"]

Floats = npt.NDArray[np.float64]
SCATTERS = 2.0


class _EvenAxis(PlainAxis):
    """Zero and one round number to either side: all that a narrow panel has room for."""

    def tickValues(self, minVal: float, maxVal: float, size: float) -> list[tuple[float, list[float]]]:
        """Return the places of the three ticks."""
        reach = min(-minVal, maxVal) * 0.9
        if not reach > 0:
            return []
        power = 10.0 ** np.floor(np.log10(reach))
        step = float(next(one * power for one in (5, 2, 1) if one * power <= reach))
        return [(step, [-step, 0.0, step])]


class ResidualsPanel(SpinePanel):
    """Observed less fitted density, beside the histogram."""

    title = "Residuals"
    help_page = "peaks"
    object_name = "residuals"

    def __init__(self, frame: Frame) -> None:
        self.axis = _EvenAxis("bottom", "observed less fitted")
        super().__init__(frame, self.axis)
        self.band = QGraphicsPolygonItem()
        self.band.setZValue(0)
        self.zero = pg.InfiniteLine(angle=90, movable=False)
        self.line = pg.PlotCurveItem(antialias=False)
        self.line.setZValue(5)
        for item in (self.band, self.zero, self.line):
            self.box.addItem(item, ignoreBounds=True)
        session = self.session
        session.result_changed.connect(lambda name: self._draw() if name == "peaks" else None)
        session.states_changed.connect(self._say)
        session.traces_changed.connect(self._draw)
        session.span_changed.connect(lambda _: self._rescale())
        session.document_changed.connect(lambda change: self._draw() if change.recipe else None)
        self.wear(frame.theme)
        self._draw()

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.band.setPen(pg.mkPen(None))
        self.band.setBrush(pg.mkBrush(theme.colour("every", 70)))
        self.zero.setPen(theme.wide_pen("fit", 1.0, dashed=True))
        self.line.setPen(theme.curve_pen("ink"))

    @property
    def fit(self) -> PeakFit | None:
        """The fit as last shown, where it belongs on the axis in use and fitted something."""
        fit: PeakFit | None = self.session.result("peaks")
        usable = fit is not None and fit.grid.axis == self.session.axis and np.isfinite(fit.residuals).any()
        return fit if usable else None

    def _draw(self) -> None:
        fit = self.fit
        if fit is None:
            self.line.setData([], [])
            self.band.setPolygon(QPolygonF())
            self._say()
            return
        u = fit.grid.u_edges
        self.line.setData(np.repeat(fit.residuals, 2), np.repeat(u, 2)[1:-1], connect="finite")
        known = np.flatnonzero(np.isfinite(fit.scatter)) if len(fit.scatter) == fit.grid.bins else np.empty(0, int)
        middle, reach = (u[:-1] + u[1:]) / 2, SCATTERS * fit.scatter[known] if len(known) else np.empty(0)
        x = np.concatenate([-reach, reach[::-1]])
        y = np.concatenate([middle[known], middle[known][::-1]])
        self.band.setPolygon(QPolygonF([QPointF(a, b) for a, b in zip(x.tolist(), y.tolist(), strict=True)]))
        self.axis.say("observed less fitted")
        unit = str(fit.table.height_unit[0]).replace("G0", typeset.G0)
        self.heading.setToolTip(f"In {unit}; grey: twice the scatter of resampled data sets.")
        self._rescale()
        self._say()

    def _rescale(self) -> None:
        fit = self.fit
        if fit is None:
            return
        middle = (fit.grid.u_edges[:-1] + fit.grid.u_edges[1:]) / 2
        inside = (middle >= self.session.span.low) & (middle <= self.session.span.high) & np.isfinite(fit.residuals)
        top = float(np.abs(fit.residuals[inside]).max(initial=0.0)) if inside.any() else 0.0
        if top > 0:
            self.box.setXRange(-1.15 * top, 1.15 * top, padding=0)

    def _say(self) -> None:
        session, state = self.session, self.session.state("peaks")
        if session.traces is None:
            self.say_empty("What the fit leaves over will stand here.")
        elif session.result("peaks") is None:
            self.say_empty("Fitting …" if state == "working" else "")
        else:
            self.say_empty("" if self.fit is not None else "Nothing is fitted on this axis.")
        self.say_state("out of date" if state in ("out of date", "working") and self.fit is not None else "")

    def data(self) -> PlotData | None:
        """Return the residuals, one row a bin of the fit."""
        fit = self.fit
        if fit is None:
            return None
        columns: dict[str, npt.NDArray[Any]] = {
            "g_low_g0": fit.grid.edges_g0[:-1],
            "g_high_g0": fit.grid.edges_g0[1:],
            "observed": fit.observed,
            "model": fit.model,
            "residual": fit.residuals,
            "scaled_residual": fit.scaled_residuals,
        }
        return PlotData("residuals", columns)
