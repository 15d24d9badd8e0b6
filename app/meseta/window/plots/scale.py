"""A slim colour scale: the ramp, its ends in numbers, and how it is divided, in words."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from PySide6.QtCore import QRect, QSize, Qt
from PySide6.QtGui import QImage, QPainter, QPaintEvent
from PySide6.QtWidgets import QSizePolicy, QWidget

from meseta import typeset
from meseta.window.theme import Theme

__all__ = ["ScaleBar"]

BAR_WIDTH, BAR_HEIGHT = 36, 8


class ScaleBar(QWidget):
    """The colour scale of an image, in the heading of its panel."""

    def __init__(self) -> None:
        super().__init__()
        self._image: QImage | None = None
        self._table: npt.NDArray[np.uint8] | None = None
        self._top = ""
        self._theme: Theme | None = None
        self._room = 10_000
        self.setSizePolicy(QSizePolicy.Policy.Fixed, QSizePolicy.Policy.Fixed)
        self.hide()

    def show_scale(self, lookup: npt.NDArray[np.uint8], top: float, division: str, unit: str, theme: Theme) -> None:
        """Show a colour table whose last colour stands for ``top``."""
        self._table = np.ascontiguousarray(lookup[None, :, :])
        self._image = QImage(self._table.data, 256, 1, 1024, QImage.Format.Format_RGBA8888)
        self._top, self._theme = typeset.number(top, 2), theme
        words = {"square_root": "square-root scale", "logarithmic": "logarithmic scale", "linear": "linear scale"}
        text = f"colour: 0 to {self._top} {unit} and above, {words.get(division, division)}"
        self.setToolTip(text)
        self.setAccessibleName(text)
        self._division = {"square_root": "√", "logarithmic": "log", "linear": ""}.get(division, "")
        self.updateGeometry()
        self.setFixedSize(self.sizeHint())
        self.give_room(self._room)
        self.update()

    def give_room(self, width: int) -> None:
        """Show the scale where it has something to show and fits a width in pixels."""
        self._room = width
        self.setVisible(self._image is not None and self.sizeHint().width() <= width)

    def clear(self) -> None:
        """Show no scale."""
        self._image = None
        self.hide()

    def sizeHint(self) -> QSize:
        """Return the size of bar and numbers."""
        metrics = self.fontMetrics()
        width = metrics.horizontalAdvance(f"0{self._top}") + BAR_WIDTH + 12
        width += metrics.horizontalAdvance(f" {self._division}") if self._top else 0
        return QSize(width, metrics.height())

    def paintEvent(self, event: QPaintEvent) -> None:
        """Paint zero, the ramp, the top and the division."""
        if self._image is None or self._theme is None:
            return
        painter = QPainter(self)
        metrics = self.fontMetrics()
        zero = metrics.horizontalAdvance("0")
        painter.setPen(self._theme.colour("quiet"))
        middle = Qt.AlignmentFlag.AlignVCenter
        painter.drawText(QRect(0, 0, zero, self.height()), middle, "0")
        bar = QRect(zero + 4, (self.height() - BAR_HEIGHT) // 2, BAR_WIDTH, BAR_HEIGHT)
        painter.drawImage(bar, self._image)
        painter.setPen(self._theme.colour("hairline"))
        painter.drawRect(bar.adjusted(0, 0, -1, -1))
        painter.setPen(self._theme.colour("quiet"))
        rest = QRect(bar.right() + 5, 0, self.width() - bar.right() - 5, self.height())
        painter.drawText(rest, middle, f"{self._top} {self._division}".strip())
        painter.end()
