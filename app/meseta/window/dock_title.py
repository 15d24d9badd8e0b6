"""The title of a dock: said once.  Where docks lie over one another their tabs are the titles."""

from __future__ import annotations

from PySide6.QtCore import QSize, Qt
from PySide6.QtGui import QPainter, QPaintEvent
from PySide6.QtWidgets import QDockWidget, QMainWindow, QSizePolicy, QTabBar, QWidget

from meseta.window.plots.panel import PlotPanel

__all__ = ["DockTitle", "name_docks"]

GRIP_PIXELS = 6
MARGIN = 8


class DockTitle(QWidget):
    """A title to drag a dock by; a bare strip while a tab says the same."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self._text, self._said = text, True
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Fixed)
        self.setToolTip("Drag to move the table; double-click to take it out of the window")

    def say(self, said: bool) -> None:
        """Write the title, or leave a strip without words."""
        if said != self._said:
            self._said = said
            self.updateGeometry()
            self.update()

    @property
    def said(self) -> bool:
        """Whether the title is written."""
        return self._said

    def sizeHint(self) -> QSize:
        """Ask for a line of text, or for the strip."""
        height = self.fontMetrics().height() + MARGIN if self._said else GRIP_PIXELS
        return QSize(2 * MARGIN, height)

    def minimumSizeHint(self) -> QSize:
        """Ask for the same."""
        return self.sizeHint()

    def paintEvent(self, event: QPaintEvent) -> None:
        """Paint the title where it is said."""
        if not self._said:
            return
        painter, font = QPainter(self), self.font()
        font.setBold(True)
        painter.setFont(font)
        painter.setPen(self.palette().color(self.foregroundRole()))
        room = self.rect().adjusted(MARGIN, 0, -MARGIN, 0)
        text = painter.fontMetrics().elidedText(self._text, Qt.TextElideMode.ElideRight, room.width())
        painter.drawText(room, Qt.AlignmentFlag.AlignVCenter | Qt.AlignmentFlag.AlignLeft, text)
        painter.end()


def name_docks(window: QMainWindow, docks: list[QDockWidget]) -> None:
    """Write the title of every dock that no tab names; many tabs are scrolled to, never cut to a letter."""
    for bar in window.findChildren(QTabBar, options=Qt.FindChildOption.FindDirectChildrenOnly):
        bar.setElideMode(Qt.TextElideMode.ElideNone)
        bar.setUsesScrollButtons(True)
    for dock in docks:
        others = [other for other in window.tabifiedDockWidgets(dock) if not other.isHidden()]
        alone = dock.isFloating() or not others
        title, widget = dock.titleBarWidget(), dock.widget()
        if isinstance(title, DockTitle):
            title.say(alone)
        elif isinstance(widget, PlotPanel):
            widget.title_said(alone)
