"""The fit on the histogram: model, background and components dashed, and a handle at every peak to edit it by."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pyqtgraph as pg

from meseta import typeset
from meseta.window.peak_editing import PeakEditor
from meseta.window.theme import Theme
from meseta.window.views.histogram.bounds import BoundHandles

if TYPE_CHECKING:
    from meseta.peaks import PeakFit
    from meseta.window.views.histogram.panel import HistogramPanel

__all__ = ["FitLayer"]

SIZE, CHOSEN_SIZE = 9, 13


class FitLayer:
    """Draws a fit, and turns what is done to its handles into edits of the peaks asked for."""

    def __init__(self, panel: HistogramPanel) -> None:
        self._panel = panel
        self.editor = PeakEditor.of(panel.session)
        self.model, self.background, self.components = (_curve(z) for z in (14, 12, 12))
        for item in (self.model, self.background, self.components):
            panel.box.addItem(item, ignoreBounds=True)
        self.handles: list[pg.TargetItem] = []
        self.labels: list[pg.TextItem] = []
        self.bounds = BoundHandles(self, panel)
        self._placing = False
        self.editor.chosen_changed.connect(lambda _: self.place())

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        self.model.setPen(theme.curve_pen("fit", dashed=True))
        self.background.setPen(theme.pen("quiet", dotted=True))
        self.components.setPen(theme.curve_pen("fit", dotted=True))
        self.bounds.wear(theme)
        for label in self.labels:
            self._wear_label(label)
        self.place()

    def _wear_label(self, label: pg.TextItem) -> None:
        theme = self._panel.frame.theme
        label.setColor(theme.palette.fit)
        label.fill = pg.mkBrush(theme.colour("panel", 190))
        label.update()

    def clear(self) -> None:
        """Show no fit."""
        for item in (self.model, self.background, self.components):
            item.setData([], [])
        self._arrange_handles(0)

    def show(self, fit: PeakFit | None) -> None:
        """Show a fit, or none; peaks asked for have their handles even before they are fitted."""
        usable = fit is not None and len(fit.table) and fit.grid.bins and fit.grid.axis == self._panel.session.axis
        if fit is not None and usable:
            self._draw_curves(fit)
        else:
            for item in (self.model, self.background, self.components):
                item.setData([], [])
        self.place()

    def _draw_curves(self, fit: PeakFit) -> None:
        u = (fit.grid.u_edges[:-1] + fit.grid.u_edges[1:]) / 2
        across = self._panel.across
        fitted = fit.grid.widths < 3 * float(np.median(fit.grid.widths))  # a wide bin bridges stretches not fitted
        self.model.setData(np.where(fitted, across(fit.model), np.nan), u, connect="finite")
        self.background.setData(np.where(fitted, across(fit.background), np.nan), u, connect="finite")
        gap = np.array([np.nan])
        parts = [np.where(fitted, across(one + fit.background), np.nan) for one in fit.components]
        lines = [np.concatenate([part, gap]) for part in parts]
        self.components.setData(np.concatenate(lines), np.tile(np.concatenate([u, gap]), len(lines)), connect="finite")

    # -- handles -----------------------------------------------------------------------------------------------------

    def place(self) -> None:
        """Put a handle with its words at every peak."""
        if self._placing:
            return
        shown = self._panel.histogram is not None
        self._arrange_handles(len(self.editor.starts()) if shown else 0)

    def _arrange_handles(self, count: int) -> None:
        while len(self.handles) > count:
            self._panel.box.removeItem(self.handles.pop())
            self._panel.box.removeItem(self.labels.pop())
        while len(self.handles) < count:
            self.handles.append(self._new_handle(len(self.handles)))
            label = pg.TextItem("")
            label.setZValue(29)
            self._wear_label(label)
            self._panel.box.addItem(label, ignoreBounds=True)
            self.labels.append(label)
        self._placing = True
        try:
            for place in range(count):
                self._place(place)
            self.bounds.place(self.editor.chosen if count else -1)
        finally:
            self._placing = False
        self.place_labels()

    def _new_handle(self, place: int) -> pg.TargetItem:
        handle = pg.TargetItem((0, 0), size=SIZE, symbol="d", movable=True)
        handle.setZValue(30)
        handle.sigPositionChanged.connect(lambda _, place=place: self._dragged(place))
        handle.sigPositionChangeFinished.connect(lambda _, place=place: self._released(place))
        self._panel.box.addItem(handle, ignoreBounds=True)
        return handle

    def _place(self, place: int) -> None:
        editor, theme = self.editor, self._panel.frame.theme
        start, handle = editor.starts()[place], self.handles[place]
        u = editor.u_of(editor.position_of(place))
        chosen = place == editor.chosen
        handle.setSymbol("s" if start.fixed else "d")
        handle.scale = CHOSEN_SIZE if chosen else SIZE
        handle.setPos(self.height_at(u), u)
        handle.viewTransformChanged()  # its shape is kept for a scale and a symbol that may be others now
        pen, paper = theme.wide_pen("fit", 1.5), theme.colour("fit" if chosen else "panel")
        for set_pen, set_brush in ((handle.setPen, handle.setBrush), (handle.setHoverPen, handle.setHoverBrush)):
            set_pen(pen)
            set_brush(pg.mkBrush(paper))
        text, verdict = self._words(place)
        self.labels[place].setText(text)
        held = "held here; " if start.fixed else ""
        handle.setToolTip(
            f"{editor.name_of(place)}: {text}. {held}{verdict}\nDrag to begin the fit elsewhere, double-click to edit."
        )

    def _words(self, place: int) -> tuple[str, str]:
        """Return what stands beside a handle, and the verdict on the peak."""
        editor, row = self.editor, self.editor.row_of(place)
        fit = editor.fit
        if row < 0 or fit is None:
            return f"begins at {typeset.conductance(editor.position_of(place), 3)}", editor.not_fitted
        table = fit.table
        text = typeset.value_with_uncertainty(
            float(table.position_g0[row]), float(table.position_low_g0[row]), float(table.position_high_g0[row]), "G0"
        )
        doubt = str(table.status[row])
        return text if doubt == "ok" else f"{text} (doubtful)", doubt

    def height_at(self, u: float) -> float:
        """Return where on the density axis a handle stands: on the model where it is drawn, else on the histogram."""
        fit, histogram = self.editor.fit, self._panel.histogram
        if fit is not None and fit.grid.axis == self._panel.session.axis and fit.grid.bins:
            centres = (fit.grid.u_edges[:-1] + fit.grid.u_edges[1:]) / 2
            height = float(self._panel.across(np.interp(u, centres, fit.model, left=np.nan, right=np.nan)))
            if np.isfinite(height):
                return height
        if histogram is None:
            return float(self._panel.box.viewRange()[0][1]) * 0.5
        centres = (histogram.grid.u_edges[:-1] + histogram.grid.u_edges[1:]) / 2
        return float(self._panel.across(np.interp(u, centres, histogram.density)))

    def place_labels(self) -> None:
        """Write the positions beside the handles, on the side with room, none upon another."""
        (left, right), (low, high) = self._panel.box.viewRange()
        room = 18.0 * self._panel.box.viewPixelSize()[1]
        below = -np.inf
        for handle, label in sorted(zip(self.handles, self.labels, strict=True), key=lambda pair: pair[0].pos().y()):
            x, u = float(handle.pos().x()), float(handle.pos().y())
            label.setVisible(low <= u <= high)
            if not low <= u <= high:
                continue
            height = max(u, below + room)
            below = height
            pixel = self._panel.box.viewPixelSize()[0]
            shift, width = 8.0 * pixel, label.boundingRect().width() * pixel
            if x + shift + width <= right:
                label.setAnchor((0.0, 0.5))
                label.setPos(x + shift, height)
            elif x - shift - width >= left:
                label.setAnchor((1.0, 0.5))
                label.setPos(x - shift, height)
            else:  # no room on either side: above the handle, at the right edge
                below = max(u + room, below)
                label.setAnchor((1.0, 0.5))
                label.setPos(right, below)

    def _dragged(self, place: int) -> None:
        if self._placing or place >= len(self.handles):
            return
        handle = self.handles[place]
        u = float(handle.pos().y())
        self._placing = True
        try:
            handle.setPos(self.height_at(u), u)
            self.labels[place].setText(f"begins at {typeset.conductance(self.editor.g0_of(u), 3)}")
            self.place_labels()
        finally:
            self._placing = False

    def _released(self, place: int) -> None:
        if place < len(self.handles):
            self.editor.move(place, self.editor.g0_of(float(self.handles[place].pos().y())))


def _curve(z: int) -> pg.PlotCurveItem:
    item = pg.PlotCurveItem(antialias=False)
    item.setZValue(z)
    return item
