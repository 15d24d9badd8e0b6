"""A line of text that is cut with dots where it does not fit, and says all of it as a tool tip."""

from __future__ import annotations

from PySide6.QtCore import QSize, Qt
from PySide6.QtGui import QPainter, QPaintEvent
from PySide6.QtWidgets import QLabel, QSizePolicy

__all__ = ["Elided"]


class Elided(QLabel):
    """A label that asks for height only and cuts its text to the width it is given."""

    def __init__(self, text: str = "", tone: str = "quiet") -> None:
        super().__init__("")
        self.setProperty("tone", tone)
        self.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)
        self.say(text)

    def say(self, text: str, tone: str = "") -> None:
        """Show a text, in another tone where one is given."""
        if text != self.text():
            self.setText(text)
            self.setToolTip(text)
            self.setAccessibleName(text)
        if tone and self.property("tone") != tone:
            self.setProperty("tone", tone)
            self.style().unpolish(self)
            self.style().polish(self)

    def paintEvent(self, event: QPaintEvent) -> None:
        """Paint as much as fits."""
        painter = QPainter(self)
        painter.setPen(self.palette().color(self.foregroundRole()))
        text = self.fontMetrics().elidedText(self.text(), Qt.TextElideMode.ElideRight, self.width())
        painter.drawText(self.rect(), Qt.AlignmentFlag.AlignVCenter | Qt.AlignmentFlag.AlignLeft, text)
        painter.end()

    def minimumSizeHint(self) -> QSize:
        """Ask for height only."""
        return QSize(16, self.fontMetrics().height())

    def sizeHint(self) -> QSize:
        """Ask for the width of the text."""
        return QSize(self.fontMetrics().horizontalAdvance(self.text()) + 2, self.fontMetrics().height())
