"""The traces that the conditions pick, laid under the current one: an image made for the view off its thread.

A path of hundreds of traces takes tens of milliseconds at every repaint, so the window would stumble under the mouse
as long as the overlay is there; an image costs nothing however many traces it stands for.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QRectF

from meseta.window.jobs import Channel
from meseta.window.pictures import OverlayPicture
from meseta.window.theme import Theme
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.window.plots.panel import DrivePanel

__all__ = ["OverlayImage", "OverlayLayer", "overlay_image"]

OVERLAY_IMAGE = Channel("overlay_image", quick=True, shown=False)


@dataclass(frozen=True)
class View:
    """What part of the plot is drawn on how many pixels."""

    x_low: float
    x_high: float
    u_low: float
    u_high: float
    columns: int
    rows: int

    def rectangle(self) -> QRectF:
        """Return the part of the plot."""
        return QRectF(self.x_low, self.u_low, self.x_high - self.x_low, self.u_high - self.u_low)


@dataclass(frozen=True)
class OverlayImage:
    """How many traces pass through each pixel of a view, (columns, rows) uint8, 255 and more alike."""

    hits: npt.NDArray[np.uint8]
    view: View


def overlay_image(overlay: OverlayPicture, axis: str, view: View, work: Work) -> OverlayImage:
    """Return the overlay as an image of the view."""
    from meseta.window.raster import count_lines

    work.check()
    u = overlay.curve.on(axis, view.u_low - 1.0)
    x = (overlay.curve.x - view.x_low) * (view.columns / (view.x_high - view.x_low))
    y = (u - view.u_low) * (view.rows / (view.u_high - view.u_low))
    work.check()
    hits = np.zeros((view.columns, view.rows), np.uint16)
    count_lines(x, y, hits)
    return OverlayImage(np.minimum(hits, 255).astype(np.uint8), view)


class OverlayLayer:
    """The overlay's place in the trace plot."""

    def __init__(self, panel: DrivePanel) -> None:
        self._panel = panel
        self.picture: OverlayPicture | None = None
        self.item = pg.ImageItem()
        self.item.setZValue(1)
        self.item.hide()
        panel.box.addItem(self.item, ignoreBounds=True)
        panel.box.sigResized.connect(lambda _: self.ask())

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        self.item.setLookupTable(self._lookup(theme))

    def _lookup(self, theme: Theme) -> npt.NDArray[np.uint8]:
        """Return the colours of 0 to 255 traces: the fainter each the more there are, so that the current one shows."""
        drawn = 1 if self.picture is None else max(self.picture.drawn, 1)
        one = min(max(20 / drawn, 0.09), 0.5)
        table = theme.over_lookup.copy()
        table[:, 3] = np.round(255 * 0.75 * (1 - (1 - one) ** np.arange(256)))
        return table

    def show(self, picture: OverlayPicture | None) -> None:
        """Show other traces, or none."""
        self.picture = picture
        self.wear(self._panel.frame.theme)
        if picture is None or not picture.drawn:
            self._panel.session.jobs.cancel(OVERLAY_IMAGE)
            self.item.hide()
            return
        if picture.drawn < picture.asked:
            self.item.setToolTip(f"{picture.drawn} of {picture.asked} traces drawn")
        self.ask()

    def _view(self) -> View:
        box, ratio = self._panel.box, self._panel.plot.devicePixelRatioF()
        (x_low, x_high), (u_low, u_high) = box.viewRange()
        columns, rows = (max(int(length * ratio), 2) for length in (box.width(), box.height()))
        return View(x_low, x_high, u_low, u_high, columns, rows)

    def ask(self) -> None:
        """Have the image made for what is in view now; until it comes the last one moves with the axes."""
        picture, axis, view = self.picture, self._panel.session.axis, self._view()
        if picture is None or not picture.drawn:
            return

        def task(work: Work, _: Callable[[Any], None]) -> OverlayImage:
            return overlay_image(picture, axis, view, work)

        session = self._panel.session
        session.jobs.submit(OVERLAY_IMAGE, "overlay", task, self._take, session.problem.emit)

    def _take(self, image: OverlayImage) -> None:
        self.item.setImage(image.hits, autoLevels=False, levels=(0, 255))
        self.item.setRect(image.view.rectangle())
        self.item.show()
