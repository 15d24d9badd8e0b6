"""Work that waits until its widget is seen: a hidden table is not filled a hundred times for nobody."""

from __future__ import annotations

from collections.abc import Callable

from PySide6.QtCore import QEvent, QObject, QTimer
from PySide6.QtWidgets import QWidget

__all__ = ["Lazy"]


class Lazy(QObject):
    """Calls a function soon after it was asked for, once, and only while the widget is visible."""

    def __init__(self, widget: QWidget, function: Callable[[], None]) -> None:
        super().__init__(widget)
        self._widget, self._function, self._due = widget, function, True
        self._timer = QTimer(self)
        self._timer.setSingleShot(True)
        self._timer.setInterval(20)
        self._timer.timeout.connect(self._run)
        widget.installEventFilter(self)

    def ask(self) -> None:
        """Have the function called when the widget is seen."""
        self._due = True
        if self._widget.isVisible() and not self._timer.isActive():
            self._timer.start()

    @property
    def pending(self) -> bool:
        """Whether a call is on its way."""
        return self._timer.isActive()

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """Catch up when the widget appears."""
        if event.type() == QEvent.Type.Show and self._due:
            self._timer.start()
        return False

    def _run(self) -> None:
        if self._due and self._widget.isVisible():
            self._due = False
            self._function()
