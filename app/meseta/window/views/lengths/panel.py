"""Lengths: how long plateaus in a window are, how far traces stretch; with what was cut short beside them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import Qt
from PySide6.QtGui import QAction, QActionGroup
from PySide6.QtWidgets import QHBoxLayout, QLabel, QMenu, QPushButton, QToolButton, QVBoxLayout

from meseta import typeset
from meseta.window.conditions import WINDOWS
from meseta.window.frame import Frame
from meseta.window.jobs import Channel
from meseta.window.on_demand import OnDemand, Wanted
from meseta.window.plots.panel import BOTTOM_PIXELS, PlotData, PlotPanel, show_below
from meseta.window.plots.ticks import PlainAxis
from meseta.window.theme import Theme
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.histograms import LengthHistogram, Spacing

__all__ = ["LengthsPanel"]

SPACING = Channel("spacing", quick=True, shown=False)
STEP = "length_histograms"
SLOPES = "slope_histogram"
KINDS = ("plateaus in the window", "level crossing", "stretch to rupture", "tunnelling slope")
NOTHING = {
    STEP: "No plateau lies in the window. Draw a window on the histogram and use it here.",
    SLOPES: "No trace shows a tunnelling decay.",
}
HEIGHT = 150


class LengthsPanel(PlotPanel):
    """A length histogram, and the share that outlasts each length."""

    title = "Length histogram"
    help_page = "lengths"
    object_name = "lengths"

    def __init__(self, frame: Frame) -> None:
        self.number = PlainAxis("left", "number")
        super().__init__(frame, PlainAxis("bottom", "length"), self.number)
        self.number.setWidth(64)
        self.bottom.setHeight(8)
        self.bottom.setStyle(showValues=False)
        self.bottom.show_name(False)
        self.kind = 0
        self.whole, self.cut = pg.PlotCurveItem(antialias=False), pg.PlotCurveItem(antialias=False)
        self.peaks = pg.PlotCurveItem(connect="pairs")
        for item in (self.whole, self.cut, self.peaks):
            self.box.addItem(item, ignoreBounds=True)
        self._make_lower()
        self.choice = self._choice_button()
        self.corner.addWidget(self.choice)
        self.statement = QLabel("")
        self.statement.setWordWrap(True)
        self.statement.setContentsMargins(12, 0, 12, 0)
        self.statement.setAccessibleName("The lengths in words")
        self.statement.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.use = QPushButton("Use the drawn window")
        self.use.setToolTip("Measure the plateaus in the conductance window that is drawn on the plots")
        self.use.clicked.connect(self.use_window)
        column = self.layout()
        assert isinstance(column, QVBoxLayout)
        column.addWidget(self.statement)
        row = QHBoxLayout()
        row.setContentsMargins(12, 4, 12, 8)
        row.addWidget(self.use)
        row.addStretch(1)
        column.addLayout(row)
        self.spacing = OnDemand(self, frame.session, SPACING, "spacing of lengths", self._wanted, self._draw_spacing)
        session = self.session
        session.result_changed.connect(lambda name: self._draw() if name == self.step else None)
        session.states_changed.connect(self._say)
        session.traces_changed.connect(self._draw)
        session.document_changed.connect(lambda _: self._offer())
        self.box.reset.connect(self._show_all)
        self.box.zoomed.connect(lambda x_factor, y_factor, x, _: self._zoom(x_factor * y_factor, x))
        self.box.moved.connect(lambda x, _: self._look(self._span[0] + x, self._span[1] + x))
        self.wear(frame.theme)
        self._draw()
        self._offer()

    def _make_lower(self) -> None:
        self._span: tuple[float, float] = (0.0, 2.0)
        self.share, self.length = PlainAxis("left", "share longer"), PlainAxis("bottom", "length")
        self.share.setWidth(64)
        self.length.setHeight(BOTTOM_PIXELS)
        self.item = pg.PlotItem(axisItems={"left": self.share, "bottom": self.length}, enableMenu=False)
        self.item.hideButtons()
        box = self.item.getViewBox()
        box.setMouseEnabled(False, False)
        box.disableAutoRange()
        box.setYRange(0, 1.05, padding=0)
        self.low, self.high = pg.PlotCurveItem(antialias=False), pg.PlotCurveItem(antialias=False)
        self.band = pg.FillBetweenItem(self.low, self.high)
        self.survival = pg.PlotCurveItem(antialias=False)
        self.median = pg.InfiniteLine(angle=90, movable=False)
        for item in (self.band, self.survival, self.median):
            self.item.addItem(item, ignoreBounds=True)
        self.item.setFixedHeight(HEIGHT)
        self.plot.getPlotItem().layout.addItem(self.item, 6, 0, 1, 4)

    def _choice_button(self) -> QToolButton:
        button, menu = QToolButton(), QMenu(self)
        group = QActionGroup(self)
        for place, name in enumerate(KINDS):
            action = QAction(name, menu)
            action.setCheckable(True)
            action.setChecked(place == self.kind)
            action.triggered.connect(lambda _=False, one=place: self.show_kind(one))
            group.addAction(action)
            menu.addAction(action)
        button.setMenu(menu)
        button.setPopupMode(QToolButton.ToolButtonPopupMode.InstantPopup)
        button.setAutoRaise(True)
        button.setText(KINDS[self.kind])
        button.setAccessibleName("Which length")
        return button

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        for axis in (self.share, self.length):
            axis.wear(theme)
        self.whole.setPen(theme.pen("selected"))
        self.whole.setBrush(pg.mkBrush(theme.colour("selected", 50)))
        self.cut.setPen(theme.pen("ink", dotted=True))
        self.peaks.setPen(theme.wide_pen("fit", 1.0, dashed=True))
        self.band.setBrush(pg.mkBrush(theme.colour("selected", 50)))
        self.survival.setPen(theme.pen("selected"))
        self.median.setPen(theme.pen("ink", dashed=True))

    # -- choosing ----------------------------------------------------------------------------------------------------

    def show_kind(self, kind: int) -> None:
        """Show another length."""
        self.kind = kind
        self.choice.setText(KINDS[kind])
        self._draw()
        self.spacing.ask()

    def _window(self) -> tuple[float, float] | None:
        """Return the last conductance window that is drawn and switched on."""
        active = self.session.document.conditions.active
        drawn = [(one.low_g0, one.high_g0) for one in active if one.kind in WINDOWS]
        return drawn[-1] if drawn else None

    def _offer(self) -> None:
        settings, window = self.session.document.recipe.lengths, self._window()
        self.use.setEnabled(window is not None and window != (settings.low_g0, settings.high_g0))

    def use_window(self) -> None:
        """Measure the lengths of plateaus in the drawn window; a step of undo."""
        window = self._window()
        if window is not None:
            session = self.session
            recipe = session.document.recipe.with_values("lengths", low_g0=window[0], high_g0=window[1])
            session.change(
                f"measure lengths from {typeset.interval(*window, 'G0', 2)}", replace(session.document, recipe=recipe)
            )

    # -- drawing -----------------------------------------------------------------------------------------------------

    @property
    def found(self) -> LengthHistogram | None:
        """The length histogram that is looked at, as last shown."""
        found: tuple[LengthHistogram, ...] | None = self.session.result(STEP)
        if self.step == SLOPES:
            slopes: LengthHistogram | None = self.session.result(SLOPES)
            return slopes
        return found[self.kind] if found is not None and self.kind < len(found) else None

    @property
    def step(self) -> str:
        """The step of the analysis that is looked at."""
        return SLOPES if self.kind == len(KINDS) - 1 else STEP

    def _draw(self) -> None:
        found = self.found
        drawn = found is not None and bool(found.counts.sum() + found.censored_counts.sum())
        for item in (self.whole, self.cut):
            item.setVisible(drawn)
        show_below(self.item, drawn)
        if found is not None and drawn:
            edges = np.repeat(found.edges, 2)
            both = found.counts + found.censored_counts
            self.whole.setData(edges, np.concatenate([[0], np.repeat(found.counts, 2), [0]]), fillLevel=0.0)
            self.cut.setVisible(bool(found.censored_counts.any()))
            self.cut.setData(edges, np.concatenate([[0], np.repeat(both, 2), [0]]))
            self.box.setYRange(0, 1.1 * float(both.max()), padding=0)
            self._draw_survival(found)
            self._show_all()
        self._draw_spacing()
        self._say()

    def _draw_survival(self, found: LengthHistogram) -> None:
        curve = found.survival
        x = np.repeat(np.concatenate([[0.0], curve.length]), 2)[1:]
        steps = [np.repeat(np.concatenate([[1.0], one]), 2)[:-1] for one in (curve.survival, curve.low, curve.high)]
        self.survival.setData(x, steps[0])
        known = np.isfinite(steps[1]) & np.isfinite(steps[2])
        self.low.setData(x[known], steps[1][known])
        self.high.setData(x[known], steps[2][known])
        self.median.setVisible(bool(np.isfinite(curve.median)))
        if np.isfinite(curve.median):
            self.median.setPos(curve.median)
        self.length.say(f"{'slope' if self.step == SLOPES else 'length'} ({found.unit})")
        self.share.say("share steeper" if self.step == SLOPES else "share longer")

    def _show_all(self) -> None:
        found = self.found
        if found is not None:
            filled = np.flatnonzero(found.counts + found.censored_counts)
            last = int(filled[-1]) + 1 if len(filled) else len(found.edges) - 1
            self._look(0.0, float(found.edges[min(last + 2, len(found.edges) - 1)]))

    def _zoom(self, factor: float, x: float) -> None:
        first, last = self._span
        self._look(x - (x - first) * factor, x + (last - x) * factor)

    def _look(self, first: float, last: float) -> None:
        if last - first > 1e-9:
            self._span = (first, last)
            for box in (self.box, self.item.getViewBox()):
                box.setXRange(first, last, padding=0)

    # -- spacing -----------------------------------------------------------------------------------------------------

    def _wanted(self) -> Wanted | None:
        analysis, found = self.session.analysis, self.found
        if analysis is None or found is None or self.step == SLOPES or self.session.state(STEP) != "current":
            return None

        def task(_: Work, __: Callable[[Any], None]) -> Spacing:
            from meseta import histograms

            return histograms.spacing_of(found)

        return (analysis.key(STEP), self.kind), task

    def _draw_spacing(self) -> None:
        spacing: Spacing | None = self.spacing.result if self.spacing.state == "current" else None
        places = np.empty(0) if spacing is None or len(spacing.peaks) < 2 else spacing.peaks
        top = float(self.box.viewRange()[1][1])
        self.peaks.setData(np.repeat(places, 2), np.tile([0.0, top], len(places)))
        self.peaks.setVisible(len(places) > 0)
        self._write(spacing)

    def _write(self, spacing: Spacing | None) -> None:
        found = self.found
        if found is None:
            self.statement.setText("")
            return
        number = int(found.counts.sum() + found.censored_counts.sum()) + found.over
        cut = int(found.censored_counts.sum())
        parts = [
            f"{found.kind[:1].upper()}{found.kind[1:].replace('G0', typeset.G0)}: {typeset.integer(number)} in "
            f"{typeset.integer(found.traces)} traces, {typeset.integer(found.none)} traces without."
        ]
        if self.step == SLOPES:
            self.statement.setText(
                f"Tunnelling slope: seen in {typeset.integer(number)} of {typeset.integer(found.traces)} traces; "
                f"median {typeset.quantity(found.survival.median, found.unit)}."
            )
            return
        short = f"the {typeset.integer(cut)} that were cut short count as longer" if cut else "none was cut short"
        parts.append(f"Median {typeset.quantity(found.survival.median, found.unit)} (Kaplan and Meier; {short}).")
        if found.over:
            parts.append(f"{typeset.integer(found.over)} beyond the axis.")
        if spacing is not None and len(spacing.peaks):
            parts.append(f"{spacing.text[:1].upper()}{spacing.text[1:]}.")
        self.statement.setText(" ".join(parts))

    def _say(self) -> None:
        session, state, found = self.session, self.session.state(self.step), self.found
        error = session.errors.get(self.step)
        if session.traces is None:
            self.say_empty("How long plateaus are will stand here.")
        elif error is not None:
            self.say_empty(str(error))
        elif found is None:
            self.say_empty("Measuring lengths …" if state == "working" else "Not yet worked out.")
        elif not found.counts.sum() + found.censored_counts.sum():
            self.say_empty(NOTHING[self.step])
        else:
            self.say_empty("")
        self.say_note("" if found is None or self.step == SLOPES else "filled: complete; dotted: with those cut short")
        self.say_state("out of date" if state == "out of date" else "")

    def data(self) -> PlotData | None:
        """Return the bins with complete lengths and those cut short."""
        found = self.found
        if found is None:
            return None
        columns: dict[str, npt.NDArray[Any]] = {
            f"low_{found.unit}": found.edges[:-1],
            f"high_{found.unit}": found.edges[1:],
            "complete": found.counts,
            "cut_short": found.censored_counts,
            "density": found.density,
        }
        return PlotData("length histogram", columns)
