"""Hands for the tests: real mouse and keys on the plots of a window."""

from __future__ import annotations

from PySide6.QtCore import QEvent, QPoint, QPointF, Qt
from PySide6.QtGui import QMouseEvent, QWheelEvent
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication


def place_of(panel, x: float, y: float) -> QPoint:
    """Return the pixel of a point in a panel's plot."""
    return panel.plot.mapFromScene(panel.box.mapViewToScene(QPointF(x, y)))


def _send(panel, kind, place, button, buttons, modifiers) -> None:
    view = panel.plot.viewport()
    spot = QPointF(place)
    QApplication.sendEvent(view, QMouseEvent(kind, spot, view.mapToGlobal(spot), button, buttons, modifiers))


def drag(panel, start, stop, *, button=Qt.MouseButton.LeftButton, modifiers=Qt.KeyboardModifier.NoModifier, steps=5):
    """Drag over a plot, from and to points in the plot's own numbers."""
    first, last = place_of(panel, *start), place_of(panel, *stop)
    _send(panel, QEvent.Type.MouseMove, first, Qt.MouseButton.NoButton, Qt.MouseButton.NoButton, modifiers)
    _send(panel, QEvent.Type.MouseButtonPress, first, button, button, modifiers)
    for step in range(1, steps + 1):
        at = first + (last - first) * step / steps
        _send(panel, QEvent.Type.MouseMove, at, Qt.MouseButton.NoButton, button, modifiers)
        QApplication.processEvents()
    _send(panel, QEvent.Type.MouseButtonRelease, last, button, Qt.MouseButton.NoButton, modifiers)
    QApplication.processEvents()


def click(panel, x: float, y: float) -> None:
    """Click on a plot."""
    QTest.mouseClick(panel.plot.viewport(), Qt.MouseButton.LeftButton, pos=place_of(panel, x, y))
    QApplication.processEvents()


def double_click(panel, x: float, y: float) -> None:
    """Double-click on a plot: two presses and two releases, as a mouse sends them."""
    place, left, none = place_of(panel, x, y), Qt.MouseButton.LeftButton, Qt.MouseButton.NoButton
    plain = Qt.KeyboardModifier.NoModifier
    for kind in (QEvent.Type.MouseButtonPress, QEvent.Type.MouseButtonDblClick):
        _send(panel, kind, place, left, left, plain)
        _send(panel, QEvent.Type.MouseButtonRelease, place, left, none, plain)
    QApplication.processEvents()


def point_at(panel, x: float, y: float) -> None:
    """Move the pointer over a plot."""
    nothing = Qt.MouseButton.NoButton
    _send(panel, QEvent.Type.MouseMove, place_of(panel, x, y), nothing, nothing, Qt.KeyboardModifier.NoModifier)
    QApplication.processEvents()


def wheel(panel, x: float, y: float, clicks: int, modifiers=Qt.KeyboardModifier.NoModifier) -> None:
    """Turn the wheel over a plot."""
    view, spot = panel.plot.viewport(), QPointF(place_of(panel, x, y))
    event = QWheelEvent(
        spot, view.mapToGlobal(spot), QPoint(), QPoint(0, 120 * clicks), Qt.MouseButton.NoButton, modifiers,
        Qt.ScrollPhase.NoScrollPhase, False,
    )  # fmt: skip
    QApplication.sendEvent(view, event)
    QApplication.processEvents()


def press(window, key, modifiers=Qt.KeyboardModifier.NoModifier) -> None:
    """Press a key on the window."""
    QTest.keyClick(window, key, modifiers)
    QApplication.processEvents()
