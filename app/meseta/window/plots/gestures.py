"""How a plot answers the mouse, the same everywhere: drag draws a window, wheel zooms, middle or Shift drag moves."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import pyqtgraph as pg
from PySide6.QtCore import QPointF, QRectF, Qt, Signal

__all__ = ["Drag", "GestureBox"]


@dataclass(frozen=True)
class Drag:
    """A drag over a plot, in the plot's coordinates; ``ended`` with the release of the button."""

    x0: float
    x1: float
    y0: float
    y1: float
    ended: bool


class GestureBox(pg.ViewBox):
    """A view box that turns mouse events into a few signals and changes nothing by itself."""

    drawn = Signal(object)
    """A :class:`Drag` with the left button: a window is being drawn."""
    moved = Signal(float, float)
    """The view shall move by (x, y)."""
    zoomed = Signal(float, float, float, float)
    """The view shall be (x factor, y factor) as wide, keeping (x, y) in place."""
    clicked = Signal(float, float)
    double_clicked = Signal(float, float)
    reset = Signal()
    """A double click as well: most plots show the whole again and need not know where it was."""

    def __init__(self) -> None:
        super().__init__(enableMenu=False)
        self.setMouseEnabled(False, False)
        self.disableAutoRange()
        self.setDefaultPadding(0.0)
        self.setBorder(None)

    def _plot_point(self, scene: QPointF) -> QPointF:
        return self.mapSceneToView(scene)

    def mouseDragEvent(self, event: Any, axis: int | None = None) -> None:
        """Draw a window or move the view."""
        event.accept()
        start, now = self._plot_point(event.buttonDownScenePos()), self._plot_point(event.scenePos())
        shift = bool(event.modifiers() & Qt.KeyboardModifier.ShiftModifier)
        if event.button() == Qt.MouseButton.LeftButton and not shift:
            self.drawn.emit(Drag(start.x(), now.x(), start.y(), now.y(), bool(event.isFinish())))
        else:
            before = self._plot_point(event.lastScenePos())
            self.moved.emit(before.x() - now.x(), before.y() - now.y())

    def mouseClickEvent(self, event: Any) -> None:
        """Tell of clicks with the left button; double clicks reset the view."""
        if event.button() != Qt.MouseButton.LeftButton:
            event.ignore()
            return
        event.accept()
        point = self._plot_point(event.scenePos())
        if event.double():
            self.double_clicked.emit(point.x(), point.y())
            self.reset.emit()
            return
        self.clicked.emit(point.x(), point.y())

    def wheelEvent(self, event: Any, axis: int | None = None) -> None:
        """Zoom the conductance axis, or the other one with Ctrl or over its own scale."""
        event.accept()
        factor = 0.999 ** event.delta()
        point = self._plot_point(event.scenePos())
        across = axis == 0 or (axis is None and bool(event.modifiers() & Qt.KeyboardModifier.ControlModifier))
        self.zoomed.emit(factor if across else 1.0, 1.0 if across else factor, point.x(), point.y())

    def visible(self) -> QRectF:
        """Return the part of the plot in view."""
        return self.viewRect()
