"""Drawing a window on a plot, and the bands that show the conditions there."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pyqtgraph as pg
from PySide6.QtCore import Qt
from PySide6.QtGui import QBrush, QPainter
from PySide6.QtWidgets import QGraphicsRectItem, QStyleOptionGraphicsItem, QWidget

from meseta.window.conditions import BOXES, WINDOWS, Condition
from meseta.window.plots.gestures import Drag
from meseta.window.theme import Theme

if TYPE_CHECKING:
    from meseta.window.plots.panel import SpinePanel

__all__ = ["Band", "WindowTool"]

SMALLEST_PIXELS = 5


class Band(QGraphicsRectItem):
    """A window on a plot: filled where traces inside are meant, hatched with a dashed edge where those outside are."""

    inverted = False

    def wear(self, theme: Theme, *, inverted: bool) -> None:
        """Take the colours of a theme, and the look of what the window means."""
        self.inverted = inverted
        self.setPen(theme.pen("selected", dashed=inverted))
        hatch = QBrush(theme.colour("selected", 110), Qt.BrushStyle.BDiagPattern)
        self.setBrush(hatch if inverted else pg.mkBrush(theme.colour("selected", 26)))

    def paint(self, painter: QPainter, option: QStyleOptionGraphicsItem, widget: QWidget | None = None) -> None:
        """Paint the window; the hatch is in pixels whatever the axes show."""
        brush = self.brush()
        if self.inverted:
            back, known = painter.worldTransform().inverted()
            if known:
                brush.setTransform(back)
        painter.setPen(self.pen())
        painter.setBrush(brush)
        painter.drawRect(self.rect())


class WindowTool:
    """Lets a panel draw a conductance window (with a displacement window where ``across``) and shows all conditions."""

    def __init__(self, panel: SpinePanel, *, across: bool) -> None:
        self._panel, self._across = panel, across
        self._bands: list[Band] = []
        self._shown: tuple[Condition, ...] = ()
        self._drawing: int | None = None
        panel.box.drawn.connect(self._drawn)
        session = panel.session
        session.document_changed.connect(lambda _: self.show_conditions())
        session.traces_changed.connect(self.show_conditions)
        panel.box.sigXRangeChanged.connect(lambda *_: self._stretch())
        self.show_conditions()

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        for band, condition in zip(self._bands, self._shown, strict=False):
            band.wear(theme, inverted=condition.inverted)

    # -- drawing -----------------------------------------------------------------------------------------------------

    def _drawn(self, drag: Drag) -> None:
        session = self._panel.session
        if session.analysis is None:
            return
        pixel_x, pixel_y = self._panel.box.viewPixelSize()
        tall = abs(drag.y1 - drag.y0) >= SMALLEST_PIXELS * pixel_y
        wide = abs(drag.x1 - drag.x0) >= SMALLEST_PIXELS * pixel_x
        if not tall and self._drawing is None:
            return
        condition = self._condition(drag, wide)
        conditions = session.document.conditions
        if self._drawing is None:
            conditions = conditions.added(condition)
            self._drawing = len(conditions.conditions) - 1
        else:
            conditions = conditions.changed(self._drawing, condition)
        session.drag(replace(session.document, conditions=conditions))
        if drag.ended:
            self._drawing = None
            session.settle("draw a window")

    def _condition(self, drag: Drag, wide: bool) -> Condition:
        low, high = sorted((self._g0(drag.y0), self._g0(drag.y1)))
        unit = self._panel.session.drive_unit
        if self._across and wide:
            left, right = sorted((drag.x0, drag.x1))
            return Condition("passes", low, high, left, right, unit=unit)
        return Condition("plateau", low, high, unit=unit)

    def _g0(self, u: float) -> float:
        return float(10.0**u) if self._panel.session.axis == "logarithmic" else float(u)

    # -- showing -----------------------------------------------------------------------------------------------------

    def show_conditions(self) -> None:
        """Draw a band for every condition that is switched on and has a conductance window."""
        session = self._panel.session
        shown = tuple(one for one in session.document.conditions.active if one.kind in WINDOWS)
        if session.analysis is None:
            shown = ()
        self._shown = shown
        while len(self._bands) < len(shown):
            band = Band()
            band.setZValue(-5)
            self._panel.box.addItem(band, ignoreBounds=True)
            self._bands.append(band)
        for place, band in enumerate(self._bands):
            band.setVisible(place < len(shown))
            if place < len(shown):
                self._place(band, shown[place])
        self.wear(self._panel.frame.theme)

    def _place(self, band: Band, condition: Condition) -> None:
        low, high = (self._u(value) for value in (condition.low_g0, condition.high_g0))
        left, right = self._panel.box.viewRange()[0]
        margin = 10 * (right - left)
        if condition.kind in BOXES and self._across:
            left, right, margin = condition.low_drive, condition.high_drive, 0.0
        band.setRect(left - margin, low, right - left + 2 * margin, high - low)
        band.setToolTip(condition.sentence())

    def _stretch(self) -> None:
        if any(band.isVisible() for band in self._bands):
            self.show_conditions()

    def _u(self, g0: float) -> float:
        if self._panel.session.axis == "logarithmic":
            return float(np.log10(g0)) if g0 > 0 else self._panel.session.span.low - 10
        return g0
