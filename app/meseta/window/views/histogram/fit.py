"""The fit on the histogram: model, background and components dashed, a handle at every peak that can be dragged."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pyqtgraph as pg

from meseta import typeset
from meseta.peaks import PeakFit
from meseta.recipe.peaks import PeakStart
from meseta.window.theme import Theme

if TYPE_CHECKING:
    from meseta.window.views.histogram.panel import HistogramPanel

__all__ = ["FitLayer"]

FWHM_IN_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))


class FitLayer:
    """Draws a fit and turns dragged handles into starting values of the recipe."""

    def __init__(self, panel: HistogramPanel) -> None:
        self._panel = panel
        self.model, self.background, self.components = (_curve(z) for z in (14, 12, 12))
        for item in (self.model, self.background, self.components):
            panel.box.addItem(item, ignoreBounds=True)
        self.handles: list[pg.TargetItem] = []
        self.labels: list[pg.TextItem] = []
        self._fit: PeakFit | None = None
        self._pointer_u = 0.0
        self._placing = False
        panel.session.hover_moved.connect(self._remember_pointer)

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        self.model.setPen(theme.wide_pen("fit", 1.0, dashed=True))
        self.background.setPen(theme.pen("quiet", dotted=True))
        self.components.setPen(theme.pen("fit", dotted=True))
        for handle in self.handles:
            handle.setPen(theme.wide_pen("fit", 1.5))
            handle.setBrush(pg.mkBrush(theme.colour("panel")))
        for label in self.labels:
            self._wear_label(label)

    def _wear_label(self, label: pg.TextItem) -> None:
        theme = self._panel.frame.theme
        label.setColor(theme.palette.fit)
        label.fill = pg.mkBrush(theme.colour("panel", 190))
        label.update()

    def clear(self) -> None:
        """Show no fit."""
        for item in (self.model, self.background, self.components):
            item.setData([], [])
        self._arrange_handles([])

    def show(self, fit: PeakFit | None) -> None:
        """Show a fit, or none."""
        self._fit = fit
        if fit is None or not len(fit.table):
            self.clear()
            return
        if fit.grid.axis == self._panel.session.axis and fit.grid.bins:
            u = (fit.grid.u_edges[:-1] + fit.grid.u_edges[1:]) / 2
            across = self._panel.across
            fitted = fit.grid.widths < 3 * float(np.median(fit.grid.widths))  # a wide bin bridges stretches not fitted
            self.model.setData(np.where(fitted, across(fit.model), np.nan), u, connect="finite")
            self.background.setData(np.where(fitted, across(fit.background), np.nan), u, connect="finite")
            gap = np.array([np.nan])
            parts = [np.where(fitted, across(one + fit.background), np.nan) for one in fit.components]
            lines = [np.concatenate([part, gap]) for part in parts]
            heights = np.tile(np.concatenate([u, gap]), len(lines))
            self.components.setData(np.concatenate(lines), heights, connect="finite")
        else:
            for item in (self.model, self.background, self.components):
                item.setData([], [])
        self._arrange_handles(list(range(len(fit.table))))

    # -- handles -----------------------------------------------------------------------------------------------------

    def _arrange_handles(self, rows: list[int]) -> None:
        while len(self.handles) > len(rows):
            self._panel.box.removeItem(self.handles.pop())
            self._panel.box.removeItem(self.labels.pop())
        while len(self.handles) < len(rows):
            self.handles.append(self._new_handle(len(self.handles)))
            label = pg.TextItem("")
            label.setZValue(29)
            self._wear_label(label)
            self._panel.box.addItem(label, ignoreBounds=True)
            self.labels.append(label)
        self._placing = True
        try:
            for row in rows:
                self._place(row)
        finally:
            self._placing = False
        self.place_labels()

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

    def _new_handle(self, row: int) -> pg.TargetItem:
        handle = pg.TargetItem((0, 0), size=9, symbol="d", movable=True)
        handle.setZValue(30)
        handle.setToolTip("Drag along the conductance axis to begin the fit elsewhere")
        handle.sigPositionChanged.connect(lambda _, row=row: self._dragged(row))
        handle.sigPositionChangeFinished.connect(lambda _, row=row: self._released(row))
        self._panel.box.addItem(handle, ignoreBounds=True)
        return handle

    def _place(self, row: int) -> None:
        assert self._fit is not None
        table, theme = self._fit.table, self._panel.frame.theme
        position = float(table.position_g0[row])
        u = self._u(position)
        handle = self.handles[row]
        handle.setPos(self._height_at(u), u)
        text = typeset.value_with_uncertainty(
            position, float(table.position_low_g0[row]), float(table.position_high_g0[row]), "G0"
        )
        doubt = str(table.status[row])
        self.labels[row].setText(text if doubt == "ok" else f"{text} (doubtful)")
        handle.setPen(theme.wide_pen("fit", 1.5))
        handle.setBrush(pg.mkBrush(theme.colour("panel")))
        handle.setToolTip(f"{table.peak[row]}: {text}; {doubt}. Drag to begin the fit elsewhere.")

    def _height_at(self, u: float) -> float:
        fit = self._fit
        if fit is None or fit.grid.axis != self._panel.session.axis or not fit.grid.bins:
            return float(self._panel.box.viewRange()[0][1]) * 0.5
        centres = (fit.grid.u_edges[:-1] + fit.grid.u_edges[1:]) / 2
        return float(self._panel.across(np.interp(u, centres, fit.model)))

    def _dragged(self, row: int) -> None:
        if self._placing or row >= len(self.handles):
            return
        handle = self.handles[row]
        u = float(handle.pos().y())
        self._placing = True
        try:
            handle.setPos(self._height_at(u), u)
            self.labels[row].setText(f"start at {typeset.conductance(self._g0(u), 3)}")
            self.place_labels()
        finally:
            self._placing = False

    def _released(self, row: int) -> None:
        if self._fit is not None and row < len(self._fit.table):
            starts = self.starts()
            starts[row] = starts[row].model_copy(update={"position_g0": self._g0(float(self.handles[row].pos().y()))})
            self._write(f"move {self._fit.table.peak[row] or 'peak'}", starts)

    # -- starting values ---------------------------------------------------------------------------------------------

    def starts(self) -> list[PeakStart]:
        """Return the starting values in use: those of the recipe, else the fitted peaks."""
        chosen = self._panel.session.document.recipe.peaks.peaks
        fit = self._fit
        if fit is None or len(chosen) == len(fit.table):
            return sorted(chosen, key=lambda start: start.position_g0)
        return [
            PeakStart(
                name=str(fit.table.peak[row]),
                position_g0=float(fit.table.position_g0[row]),
                width=_positive(float(fit.table.fwhm[row]) / FWHM_IN_SIGMA),
            )
            for row in range(len(fit.table))
        ]

    def add_at_pointer(self) -> None:
        """Ask for one more peak where the pointer last was."""
        self.add(self._g0(self._pointer_u))

    def add(self, position_g0: float) -> None:
        """Ask for one more peak."""
        self._write("add a peak", [*self.starts(), PeakStart(position_g0=position_g0)])

    def forget(self) -> None:
        """Ask for no peaks in particular: they are proposed from the histogram."""
        self._write("propose peaks", [])

    def _write(self, text: str, starts: list[PeakStart]) -> None:
        session = self._panel.session
        plain: list[Any] = [start.model_dump() for start in starts]
        recipe = session.document.recipe.with_values("peaks", peaks=plain)
        session.change(text, replace(session.document, recipe=recipe))

    def _remember_pointer(self, hover: Any) -> None:
        if hover is not None:
            self._pointer_u = hover.u

    def _u(self, g0: float) -> float:
        if self._panel.session.axis == "logarithmic":
            return float(np.log10(g0)) if g0 > 0 else self._panel.session.span.low
        return g0

    def _g0(self, u: float) -> float:
        return float(10.0**u) if self._panel.session.axis == "logarithmic" else float(u)


def _positive(value: float) -> float | None:
    return value if np.isfinite(value) and value > 0 else None


def _curve(z: int) -> pg.PlotCurveItem:
    item = pg.PlotCurveItem(antialias=False)
    item.setZValue(z)
    return item
