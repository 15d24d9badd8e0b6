"""The bounds of the chosen peak as two lines that can be dragged, between them a bracket."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pyqtgraph as pg
from PySide6.QtCore import Qt

from meseta import typeset
from meseta.window.theme import Theme

if TYPE_CHECKING:
    from meseta.window.views.histogram.fit import FitLayer
    from meseta.window.views.histogram.panel import HistogramPanel

__all__ = ["BoundHandles"]


class BoundHandles:
    """Shows between which conductances the chosen peak may lie."""

    def __init__(self, layer: FitLayer, panel: HistogramPanel) -> None:
        self._layer, self._panel, self._peak, self._placing = layer, panel, -1, False
        self.lines = {"low": self._line("from"), "high": self._line("to")}
        for line in self.lines.values():
            line.sigPositionChangeFinished.connect(self._released)

    def _line(self, word: str) -> pg.InfiniteLine:
        options = {"position": 0.98, "anchors": [(1, 0 if word == "from" else 1)] * 2}
        line = pg.InfiniteLine(angle=0, movable=True, label=word, labelOpts=options)
        line.setZValue(28)
        line.setCursor(Qt.CursorShape.SizeVerCursor)
        line.hide()
        self._panel.box.addItem(line, ignoreBounds=True)
        return line

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        for line in self.lines.values():
            line.setPen(theme.pen("fit", dotted=True))
            line.setHoverPen(theme.wide_pen("fit", 1.5))
            line.label.setColor(theme.palette.fit)

    def place(self, peak: int) -> None:
        """Show the bounds of a peak; -1 shows none."""
        editor = self._layer.editor
        self._peak = peak
        start = editor.starts()[peak] if 0 <= peak < len(editor.starts()) else None
        self._placing = True
        try:
            for end, line in self.lines.items():
                value = None if start is None else getattr(start, f"{end}_g0")
                line.setVisible(value is not None)
                if value is not None:
                    line.setPos(editor.u_of(value))
                    line.setToolTip(f"{editor.name_of(peak)} stays {'above' if end == 'low' else 'below'} "
                                    f"{typeset.conductance(value)}; drag to change")  # fmt: skip
        finally:
            self._placing = False

    def _released(self, _: pg.InfiniteLine) -> None:
        if self._placing or self._peak < 0:
            return
        editor = self._layer.editor
        ends = {
            end: editor.g0_of(float(line.value())) if line.isVisible() else None for end, line in self.lines.items()
        }
        low, high = ends["low"], ends["high"]
        if low is not None and high is not None and low > high:
            low, high = high, low
        editor.bound(self._peak, low, high)
