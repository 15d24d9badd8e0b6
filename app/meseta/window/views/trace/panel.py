"""The current trace, its plateaus along their slope with caps and numbers, and the overlay of what is selected."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg

from meseta import typeset
from meseta.window.envelope import heights
from meseta.window.frame import Frame
from meseta.window.pictures import TracePicture
from meseta.window.plots.drawing import WindowTool
from meseta.window.plots.panel import DrivePanel, PlotData
from meseta.window.plots.ticks import PlainAxis
from meseta.window.session import Change
from meseta.window.theme import Theme
from meseta.window.views.trace.overlay import OverlayLayer

__all__ = ["TracePanel"]

LABELS_AT_MOST = 12


class TracePanel(DrivePanel):
    """The trace plot."""

    title = "Trace"
    help_page = "plateaus"
    object_name = "trace"

    def __init__(self, frame: Frame) -> None:
        super().__init__(frame, PlainAxis("bottom", "displacement (nm)"))
        self.curve = _curve(10)
        self.levels = _curve(20)
        self.caps = _curve(20)
        self.labels: list[pg.TextItem] = []
        for item in (self.curve, self.levels, self.caps):
            self.box.addItem(item, ignoreBounds=True)
        self.overlay = OverlayLayer(self)
        self.tool = WindowTool(self, across=True)
        session = self.session
        session.picture_changed.connect(self._show)
        session.overlay_changed.connect(self.overlay.show)
        session.traces_changed.connect(self._traces_changed)
        session.document_changed.connect(self._document_changed)
        session.current_changed.connect(self._current_changed)
        session.drive_span_changed.connect(self._redraw)
        session.span_changed.connect(self._redraw)
        self.wear(frame.theme)
        self._traces_changed()

    # -- looks -------------------------------------------------------------------------------------------------------

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.curve.setPen(theme.curve_pen("ink"))
        self.overlay.wear(theme)
        self.levels.setPen(theme.wide_pen("selected", 3.0))
        self.caps.setPen(theme.wide_pen("selected", 2.0))
        for label in self.labels:
            self._wear_label(label)
        self.tool.wear(theme)

    def _wear_label(self, label: pg.TextItem) -> None:
        theme = self.frame.theme
        label.setColor(theme.palette.selected)
        label.fill = pg.mkBrush(theme.colour("panel", 190))
        label.update()

    # -- what is drawn -----------------------------------------------------------------------------------------------

    def _lowest(self) -> float:
        """Return a height just below the view, where readings at or below zero are drawn."""
        return min(self.session.span.low, self.session.default_span().low) - 1.0

    def _traces_changed(self) -> None:
        traces = self.session.traces
        if traces is None:
            self.say_heading("Trace")
            self.say_empty("Drop recordings here, or open some with Ctrl+O.")
        else:
            self.say_empty("")
        unit = self.session.drive_unit
        self.bottom.say("displacement (nm)" if unit == "nm" else f"drive ({unit})")
        if self.session.picture is None:
            self._clear()

    def _clear(self) -> None:
        for item in (self.curve, self.levels, self.caps):
            item.setData([], [])
        self.overlay.show(None)
        self._label([], [], [])

    def _current_changed(self, trace: int) -> None:
        traces = self.session.traces
        if traces is not None:
            self.say_heading(f"Trace {typeset.integer(trace)}")

    def _redraw(self, _: object) -> None:
        """Place labels and caps anew: they depend on what is in view; so does the image of the overlay."""
        self.overlay.ask()
        if self.session.picture is not None:
            self._show_plateaus(self.session.picture)

    def _document_changed(self, change: Change) -> None:
        if change.before.recipe.histogram.axis != change.after.recipe.histogram.axis:
            if self.session.picture is not None:
                self._show(self.session.picture)
            self.overlay.ask()

    def _show(self, picture: TracePicture) -> None:
        lowest, axis = self._lowest(), self.session.axis
        self.curve.setData(picture.curve.x, picture.curve.on(axis, lowest), connect="finite")
        self._show_plateaus(picture)
        self.say_state(self._doubt(picture))

    def _doubt(self, picture: TracePicture) -> str:
        if not picture.aligned:
            return "no rupture: counted from the start"
        return "" if picture.plateaus_known else "plateaus not yet found"

    def _show_plateaus(self, picture: TracePicture) -> None:
        table, axis = picture.plateaus, self.session.axis
        level, length = np.asarray(table.level_g0, float), picture.x_stop - picture.x_start
        slope = np.nan_to_num(np.asarray(table.slope_decades_per_nm, float))
        half = slope * length / 2
        begin, end = level * 10.0**-half, level * 10.0**half
        low = self._lowest()
        left, right = heights(begin, axis, low), heights(end, axis, low)
        self.levels.setData(*_strokes(picture.x_start, left, picture.x_stop, right), connect="finite")
        cap = 0.012 * (self.session.span.high - self.session.span.low)
        ends_x = np.concatenate([picture.x_start, picture.x_stop])
        ends_u = np.concatenate([left, right])
        self.caps.setData(*_strokes(ends_x, ends_u - cap, ends_x, ends_u + cap), connect="finite")
        first, last = self.session.drive_span
        seen_start, seen_stop = np.clip(picture.x_start, first, last), np.clip(picture.x_stop, first, last)
        middle = np.where(seen_stop > seen_start, heights(level, axis, low), np.nan)
        self._label((seen_start * 3 + seen_stop) / 4, middle, [typeset.conductance(g, 2) for g in level])

    def _label(self, x: npt.ArrayLike, u: npt.ArrayLike, texts: list[str]) -> None:
        """Write the numbers of the longest plateaus where they do not lie upon one another."""
        xs, us = np.asarray(x, float), np.asarray(u, float)
        room = 0.045 * (self.session.span.high - self.session.span.low)
        taken: list[float] = []
        shown = []
        for index in np.argsort(-us):
            if np.isnan(us[index]):
                continue
            if len(taken) < LABELS_AT_MOST and all(abs(us[index] - other) > room for other in taken):
                taken.append(us[index])
                shown.append(int(index))
        while len(self.labels) < len(shown):
            label = pg.TextItem("", anchor=(0, 1))
            label.setZValue(30)
            self._wear_label(label)
            self.labels.append(label)
            self.box.addItem(label, ignoreBounds=True)
        for place, label in enumerate(self.labels):
            label.setVisible(place < len(shown))
            if place < len(shown):
                index = shown[place]
                label.setText(texts[index])
                label.setPos(xs[index], us[index])

    # -- the numbers behind it ---------------------------------------------------------------------------------------

    def data(self) -> PlotData | None:
        """Return the current trace as drawn."""
        picture = self.session.picture
        if picture is None:
            return None
        unit = picture.unit
        return PlotData(
            f"trace {picture.trace}", {f"displacement_{unit}": picture.curve.x, "conductance_g0": picture.curve.g0}
        )

    def menu_entries(self) -> list[tuple[str, Callable[[], None]]]:
        """Offer what can be decided about the current trace."""
        return [
            ("Reject this trace", lambda: self.frame.run_action("reject")),
            ("Keep this trace", lambda: self.frame.run_action("keep")),
            ("Leave this trace to the rules", lambda: self.frame.run_action("undecide")),
            ("Mark an event before this trace …", lambda: self.frame.run_action("event")),
        ]


def _curve(z: int) -> pg.PlotCurveItem:
    item = pg.PlotCurveItem(antialias=False, skipFiniteCheck=False)
    item.setZValue(z)
    return item


def _strokes(
    x0: npt.NDArray[np.float64], y0: npt.NDArray[np.float64], x1: npt.NDArray[np.float64], y1: npt.NDArray[np.float64]
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """Return separate strokes as one broken line."""
    gap = np.full(len(x0), np.nan)
    return np.stack([x0, x1, gap], 1).ravel(), np.stack([y0, y1, gap], 1).ravel()
