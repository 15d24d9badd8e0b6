"""The conductance histogram lying on its side: error band, weak bins, the selected traces' own, and the fit."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QEvent, QObject, QPointF, Qt
from PySide6.QtGui import QAction, QActionGroup, QKeyEvent, QPolygonF, QResizeEvent
from PySide6.QtWidgets import QGraphicsPolygonItem, QMenu, QToolButton

from meseta import typeset
from meseta.window.conditions import WINDOWS
from meseta.window.frame import Frame
from meseta.window.pictures import SubsetPicture
from meseta.window.plots.drawing import WindowTool
from meseta.window.plots.panel import PlotData, SpinePanel
from meseta.window.plots.ticks import LogCountAxis
from meseta.window.session import Change, Hover
from meseta.window.theme import Theme
from meseta.window.views.histogram.fit import FitLayer

if TYPE_CHECKING:
    from meseta.histograms import ConductanceHistogram

__all__ = ["HistogramPanel"]

Floats = npt.NDArray[np.float64]
SCALES = ("in view", "selected", "logarithmic")
DECADES_SHOWN = 4.0
NEAR_PIXELS = 9.0
"""A click this near a peak's height means that peak."""


class HistogramPanel(SpinePanel):
    """The 1D histogram."""

    title = "Conductance histogram"
    shorter = ("1D histogram", "1D")
    help_page = "histogram"
    object_name = "histogram"

    def __init__(self, frame: Frame) -> None:
        self.density_axis = LogCountAxis("bottom", "density")
        super().__init__(frame, self.density_axis)
        self.band = QGraphicsPolygonItem()
        self.band.setZValue(0)
        self.whole, self.weak, self.part = (_curve(z) for z in (5, 4, 8))
        self.box.addItem(self.band, ignoreBounds=True)
        for item in (self.whole, self.weak, self.part):
            self.box.addItem(item, ignoreBounds=True)
        self.beyond = pg.TextItem("", anchor=(1, 1))
        self.beyond.setZValue(35)
        self.box.addItem(self.beyond, ignoreBounds=True)
        self.beyond.hide()
        self.fit = FitLayer(self)
        self.tool = WindowTool(self, across=False)
        self.scale = SCALES[0]
        self.scale_button = self._scale_button()
        self.corner.addWidget(self.scale_button)
        session = self.session
        session.result_changed.connect(self._result_changed)
        session.states_changed.connect(self._say)
        session.subset_changed.connect(self._subset_changed)
        session.traces_changed.connect(self._draw)
        session.document_changed.connect(self._document_changed)
        session.span_changed.connect(lambda _: self._rescale())
        self.box.clicked.connect(self._clicked)
        self.plot.installEventFilter(self)
        self.wear(frame.theme)
        self._draw()

    # -- scale -------------------------------------------------------------------------------------------------------

    def _scale_button(self) -> QToolButton:
        button, menu = QToolButton(), QMenu(self)
        group = QActionGroup(self)
        for name in SCALES:
            action = QAction(f"scale {name}", menu)
            action.setCheckable(True)
            action.setChecked(name == self.scale)
            action.triggered.connect(lambda _=False, one=name: self.scale_to(one))
            group.addAction(action)
            menu.addAction(action)
        button.setMenu(menu)
        button.setPopupMode(QToolButton.ToolButtonPopupMode.InstantPopup)
        button.setAutoRaise(True)
        button.setText(self.scale)
        button.setAccessibleName("Scale of the density axis")
        button.setToolTip("What the density axis is scaled to: the peaks in view, what is selected, or decades")
        return button

    def scale_to(self, scale: str) -> None:
        """Scale the density axis to another part of the histogram, or by decades."""
        self.scale = scale
        self.scale_button.setText(scale)
        self._draw()

    # -- looks -------------------------------------------------------------------------------------------------------

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self._pens()
        self.tool.wear(theme)
        self.fit.wear(theme)
        self.beyond.setColor(theme.palette.quiet)

    def _pens(self) -> None:
        theme = self.frame.theme
        under = self.session.subset is not None
        meaning = "every" if under else "selected"
        self.whole.setPen(theme.curve_pen(meaning))
        self.weak.setPen(theme.curve_pen(meaning, dotted=True))
        self.part.setPen(theme.curve_pen("selected"))
        self.band.setPen(pg.mkPen(None))
        self.band.setBrush(pg.mkBrush(theme.colour(meaning, 60)))

    @property
    def logarithmic(self) -> bool:
        """Whether the density axis is logarithmic."""
        return self.scale == "logarithmic"

    @property
    def histogram(self) -> ConductanceHistogram | None:
        """The histogram as last shown, where it belongs on the axis in use."""
        shown: ConductanceHistogram | None = self.session.result("histogram")
        return shown if shown is not None and shown.grid.axis == self.session.axis else None

    # -- drawing -----------------------------------------------------------------------------------------------------

    def _result_changed(self, name: str) -> None:
        if name in ("histogram", "peaks"):
            self._draw()

    def _document_changed(self, change: Change) -> None:
        if change.recipe:
            self.fit.place()
        self._say()

    def _subset_changed(self, _: SubsetPicture | None) -> None:
        self._draw()

    def across(self, density: npt.ArrayLike) -> Floats:
        """Return densities on the density axis as drawn."""
        values = np.asarray(density, float)
        if not self.logarithmic:
            return values
        top = self._top()
        floor = np.log10(top) - DECADES_SHOWN - 2 if top > 0 else -6.0
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(values > 0, np.log10(values), floor)

    def _draw(self, *_: Any) -> None:
        self.density_axis.logarithmic = self.logarithmic
        histogram = self.histogram
        if histogram is None:
            for item in (self.whole, self.weak, self.part):
                item.setData([], [])
            self.band.setPolygon(QPolygonF())
            self.fit.clear()
            self._say()
            return
        self._pens()
        edges, weak = histogram.grid.u_edges, histogram.traces_in_bin < histogram.weak_traces
        density = self.across(histogram.density)
        self.whole.setData(*_steps(np.where(weak, np.nan, density), edges), connect="finite")
        self.weak.setData(*_steps(_with_neighbours(density, weak), edges), connect="finite")
        self._draw_band(histogram)
        subset = self.session.subset
        own = None if subset is None else subset.histogram
        if own is not None and own.grid.bins == histogram.grid.bins:
            self.part.setData(*_steps(self.across(own.density), own.grid.u_edges), connect="finite")
        else:
            self.part.setData([], [])
        self.density_axis.say(_density_words(histogram.density_unit))
        self.fit.show(self.session.result("peaks"))
        self._rescale()
        self._say()

    def _draw_band(self, histogram: ConductanceHistogram) -> None:
        low, high = histogram.density_low, histogram.density_high
        known = np.flatnonzero(np.isfinite(low) & np.isfinite(high))
        if not len(known):
            self.band.setPolygon(QPolygonF())
            return
        u = (histogram.grid.u_edges[:-1] + histogram.grid.u_edges[1:]) / 2
        x = np.concatenate([self.across(low)[known], self.across(high)[known][::-1]])
        y = np.concatenate([u[known], u[known][::-1]])
        self.band.setPolygon(QPolygonF([QPointF(a, b) for a, b in zip(x.tolist(), y.tolist(), strict=True)]))

    def _top(self) -> float:
        """Return the density that the axis must reach."""
        histogram = self.histogram
        if histogram is None:
            return 0.0
        centres = (histogram.grid.u_edges[:-1] + histogram.grid.u_edges[1:]) / 2
        span, subset = self.session.span, self.session.subset
        inside = (centres >= span.low) & (centres <= span.high)
        above_floor = inside & (histogram.grid.centres_g0 > self._floor_end())
        inside = above_floor if above_floor.any() else inside
        inside = _past_the_decay(histogram.density, inside)
        density = histogram.density
        if self.scale == "selected":
            chosen = inside & self._selected_bins(histogram)
            if chosen.any():
                inside = chosen
                if subset is not None and subset.histogram is not None:
                    density = (
                        np.fmax(density, subset.histogram.density)
                        if len(subset.histogram.density) == len(density)
                        else density
                    )
        top = float(np.nanmax(density[inside], initial=0.0)) if inside.any() else 0.0
        return top if top > 0 else float(np.nanmax(histogram.density, initial=0.0))

    def _floor_end(self) -> float:
        """Return the conductance below which samples are noise: they shall not set the scale."""
        noise = self.session.result("noise")
        if noise is None or not noise.floor_traces:
            return 0.0
        return float(abs(noise.floor_g0) + 6 * noise.floor_sigma_g0)

    def _selected_bins(self, histogram: ConductanceHistogram) -> npt.NDArray[np.bool_]:
        """Return the bins inside a condition's window, or else inside the range of the fit."""
        centres = histogram.grid.centres_g0
        chosen = np.zeros(len(centres), bool)
        for condition in self.session.document.conditions.active:
            if condition.kind in WINDOWS:
                chosen |= (centres >= condition.low_g0) & (centres < condition.high_g0)
        fit = self.session.result("peaks")
        if not chosen.any() and fit is not None and fit.grid.bins:
            chosen = (centres >= fit.grid.edges_g0[0]) & (centres < fit.grid.edges_g0[-1])
        return chosen

    def _rescale(self) -> None:
        top = self._top()
        if top <= 0:
            return
        self._say_beyond(top)
        if self.logarithmic:
            high = float(np.log10(top))
            self.box.setXRange(high - DECADES_SHOWN, high + 0.15, padding=0)
        else:
            self.box.setXRange(-0.02 * top, 1.12 * top, padding=0)
        self.fit.place_labels()

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Keep the labels of peaks inside."""
        super().resizeEvent(event)
        self.fit.place_labels()

    def _say_beyond(self, top: float) -> None:
        """Mark where the curve runs beyond the scale, with how far."""
        histogram = self.histogram
        peak = 0.0
        if histogram is not None:
            centres = (histogram.grid.u_edges[:-1] + histogram.grid.u_edges[1:]) / 2
            seen = np.where(
                (centres >= self.session.span.low) & (centres <= self.session.span.high), histogram.density, 0
            )
            place = int(np.nanargmax(seen))
            peak, height = float(seen[place]), float(centres[place])
        shown = peak > 1.2 * top > 0
        self.beyond.setVisible(shown)
        if shown:
            self.beyond.setText(f"to {typeset.number(peak, 2)} ▸")
            right = float(np.log10(top)) + 0.15 if self.logarithmic else 1.12 * top
            self.beyond.setPos(right, height)

    def _say(self) -> None:
        session = self.session
        shown = session.shown.get("histogram")
        state = session.state("histogram")
        if session.traces is None:
            self.say_empty("The distribution of all conductances will stand here, with its peaks.")
        elif "histogram" in session.errors:
            self.say_empty(str(session.errors["histogram"]))
        elif self.histogram is None:
            self.say_empty("Counting the samples …" if state == "working" else "")
        elif self.histogram.counts.sum() == 0:
            self.say_empty("No sample lies in the range. See the step Conductance histogram.")
        else:
            self.say_empty("")
        resampling = session.result("resampling")
        self.heading.setToolTip(self.title if resampling is None else resampling.statement())
        words = {"out of date": "out of date", "working": "provisional" if shown else ""}
        self.say_state(words.get(state, "") if shown is not None else "")

    # -- the numbers behind it ---------------------------------------------------------------------------------------

    def data(self) -> PlotData | None:
        """Return the columns of ``histogram.csv``."""
        histogram: ConductanceHistogram | None = self.session.result("histogram")
        return None if histogram is None else PlotData("conductance histogram", histogram.table().columns())

    # -- peaks by mouse and keys -------------------------------------------------------------------------------------

    def _clicked(self, _: float, y: float) -> None:
        editor = self.fit.editor
        if editor.choose_near(y, NEAR_PIXELS * self.box.viewPixelSize()[1]) < 0:
            editor.choose(-1)

    def double_clicked(self, x: float, y: float) -> None:
        """Edit the peak under the pointer, or add one there."""
        if self.histogram is None:
            self.frame.reset_view()
        elif self.fit.editor.choose_near(y, NEAR_PIXELS * self.box.viewPixelSize()[1]) >= 0:
            self.frame.run_action("peak_edit")
        else:
            self.fit.editor.add(self.fit.editor.g0_of(y))

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """Move the caret with the arrow keys while the plot has the focus; Enter adds a peak there or edits it."""
        if isinstance(event, QKeyEvent) and event.type() == QEvent.Type.KeyPress and self.histogram is not None:
            steps = {Qt.Key.Key_Up: 1.0, Qt.Key.Key_Down: -1.0}.get(Qt.Key(event.key()), 0.0)
            if steps and not event.modifiers() & ~Qt.KeyboardModifier.ShiftModifier:
                self._move_caret(steps * (5.0 if event.modifiers() else 1.0))
                return True
            if event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter, Qt.Key.Key_Insert):
                self.double_clicked(0.0, self.fit.editor.caret_u)
                return True
        return super().eventFilter(watched, event)

    def _move_caret(self, bins: float) -> None:
        histogram, span, u = self.histogram, self.session.span, self.fit.editor.caret_u
        assert histogram is not None
        start = u if span.low <= u <= span.high else (span.low + span.high) / 2
        step = max(float(np.median(histogram.grid.widths)), self.box.viewPixelSize()[1])
        self.session.hover(Hover(min(max(start + bins * step, span.low), span.high)))

    def menu_entries(self) -> list[tuple[str, Callable[[], None]]]:
        """Offer what can be done with peaks."""
        editor, run = self.fit.editor, self.frame.run_action
        entries: list[tuple[str, Callable[[], None]]] = [("Add a peak at the pointer", editor.add_at_caret)]
        if editor.chosen >= 0:
            name, start = editor.name_of(editor.chosen), editor.starts()[editor.chosen]
            entries += [
                (f"Edit {name} …", lambda: run("peak_edit")),
                (f"{'Free' if start.fixed else 'Hold'} {name}", lambda: run("peak_hold")),
                (f"Remove {name}", lambda: run("peak_remove")),
            ]
        if editor.asked:
            entries.append(("Let the peaks be proposed again", editor.forget))
        return entries


def _curve(z: int) -> pg.PlotCurveItem:
    item = pg.PlotCurveItem(antialias=False)
    item.setZValue(z)
    return item


def _steps(density: Floats, edges: Floats) -> tuple[Floats, Floats]:
    """Return a histogram as a stepped line on its side."""
    return np.repeat(density, 2), np.repeat(edges, 2)[1:-1]


def _past_the_decay(density: Floats, inside: npt.NDArray[np.bool_]) -> npt.NDArray[np.bool_]:
    """Return the bins in view without the decay at their lower end, where the floor or tunnelling runs out.

    The decay ends where groups of bins begin to rise again; where they never do, all bins stay.
    """
    places = np.flatnonzero(inside)
    size = max(len(places) // 60, 1)
    groups = len(places) // size
    if groups < 4:
        return inside
    coarse = np.nan_to_num(density[places[: groups * size]]).reshape(groups, size).mean(axis=1)
    rising = np.flatnonzero(np.diff(coarse) > 0)
    if not len(rising) or rising[0] == 0:
        return inside
    result = inside.copy()
    result[places[: rising[0] * size]] = False
    return result


def _with_neighbours(density: Floats, weak: npt.NDArray[np.bool_]) -> Floats:
    """Return the weak bins and those beside them, so that the dotted line meets the full one."""
    near = weak.copy()
    near[1:] |= weak[:-1]
    near[:-1] |= weak[1:]
    return np.where(near, density, np.nan)


def _density_words(unit: str) -> str:
    """Return the unit of the density as an axis shows it."""
    return unit.replace(" / ", " per ").replace("G0", typeset.G0)
