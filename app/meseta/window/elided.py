"""A line of text that is cut with dots where it does not fit, and says all of it as a tool tip."""

from __future__ import annotations

from PySide6.QtCore import QSize, Qt
from PySide6.QtGui import QPainter, QPaintEvent
from PySide6.QtWidgets import QLabel, QSizePolicy

__all__ = ["Elided"]


class Elided(QLabel):
    """A label that cuts its text to the width it is given, or says it in a shorter form that fits.

    Parameters
    ----------
    text, tone : str
    shorter : tuple of str
        Shorter forms of the text, longest first; there is always room for the last.
    """

    def __init__(self, text: str = "", tone: str = "quiet", shorter: tuple[str, ...] = ()) -> None:
        super().__init__("")
        self.setProperty("tone", tone)
        self._shorter = shorter
        wide = QSizePolicy.Policy.Preferred if shorter else QSizePolicy.Policy.Ignored
        self.setSizePolicy(wide, QSizePolicy.Policy.Fixed)
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
        painter.drawText(self.rect(), Qt.AlignmentFlag.AlignVCenter | Qt.AlignmentFlag.AlignLeft, self.painted())
        painter.end()

    def painted(self) -> str:
        """Return the text as it is painted: whole, in a shorter form, or cut."""
        metrics = self.fontMetrics()
        for form in (self.text(), *self._shorter):
            if metrics.horizontalAdvance(form) <= self.width():
                return form
        return metrics.elidedText((self.text(), *self._shorter)[-1], Qt.TextElideMode.ElideRight, self.width())

    def minimumSizeHint(self) -> QSize:
        """Ask for the height, and for the width of the shortest form where there are such."""
        least = self.fontMetrics().horizontalAdvance(self._shorter[-1]) + 2 if self._shorter else 16
        return QSize(least, self.fontMetrics().height())

    def sizeHint(self) -> QSize:
        """Ask for the width of the text."""
        return QSize(self.fontMetrics().horizontalAdvance(self.text()) + 2, self.fontMetrics().height())
