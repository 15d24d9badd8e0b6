"""The 2D correlation histogram: a diverging map over two conductance axes, and what goes with a pair of its bins.

Cells that chance does not explain anywhere in the map are outlined.  A click on the map, or a drag over a stretch of
both axes, asks for the histograms of the traces that are rich there; they stand below, over the whole.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QEvent, QObject, QRectF, Qt
from PySide6.QtGui import QHideEvent, QKeyEvent, QShowEvent
from PySide6.QtWidgets import QLabel, QToolButton

from meseta import colours, typeset
from meseta.window.frame import Frame
from meseta.window.jobs import Channel
from meseta.window.on_demand import OnDemand, Wanted
from meseta.window.plots.gestures import Drag
from meseta.window.plots.panel import BOTTOM_PIXELS, PlotData, PlotPanel
from meseta.window.plots.ticks import ConductanceAxis
from meseta.window.session import Hover
from meseta.window.theme import Theme
from meseta.window.views.correlation.outline import outline
from meseta.window.views.correlation.pair import PairPlot
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.histograms import CorrelationHistogram, PairHistograms

__all__ = ["CorrelationPanel"]

PAIR = Channel("pair", quick=True, shown=False)
Range = tuple[float, float]
SAME, CROSSED = "correlation_histogram", "opening_closing"
ARROWS = {
    Qt.Key.Key_Left: (-1, 0),
    Qt.Key.Key_Right: (1, 0),
    Qt.Key.Key_Down: (0, -1),
    Qt.Key.Key_Up: (0, 1),
}


class CorrelationPanel(PlotPanel):
    """Correlation over traces between the counts of two bins."""

    title = "2D correlation histogram"
    help_page = "correlation"
    object_name = "correlation"

    def __init__(self, frame: Frame) -> None:
        self.across, self.up = ConductanceAxis("bottom"), ConductanceAxis("left")
        super().__init__(frame, self.across, self.up)
        self.up.setWidth(64)
        self.image = pg.ImageItem()
        self.edge = pg.PlotCurveItem(connect="pairs")
        self.edge.setZValue(5)
        self.strips = [pg.LinearRegionItem(orientation=one, movable=False) for one in ("vertical", "horizontal")]
        for item in (self.image, self.edge, *self.strips):
            self.box.addItem(item, ignoreBounds=True)
        self.step = SAME
        self.switch = self._switch_button()
        self.corner.addWidget(self.switch)
        self.pair_plot = PairPlot(self)
        self.sentence = QLabel("")
        self.sentence.setWordWrap(True)
        self.sentence.setTextFormat(Qt.TextFormat.RichText)
        self.sentence.setContentsMargins(12, 0, 12, 8)
        self.sentence.setAccessibleName("What goes with the chosen pair of bins")
        column = self.layout()
        assert column is not None
        column.addWidget(self.sentence)
        self._shown: CorrelationHistogram | None = None
        self._limit = 1.0
        self.chosen: tuple[Range, Range] | None = None
        self.pair = OnDemand(self, frame.session, PAIR, "a pair of bins", self._wanted_pair, self._draw_pair)
        self._connect()
        self.wear(frame.theme)
        self._draw()

    def _connect(self) -> None:
        session = self.session
        session.result_changed.connect(lambda name: self._draw() if name == self.step else None)
        session.states_changed.connect(self._say)
        session.traces_changed.connect(self._traces_changed)
        self.box.zoomed.connect(self._zoom)
        self.box.moved.connect(self._move)
        self.box.reset.connect(self._show_all)
        self.box.clicked.connect(lambda x, y: self.choose_bins(x, y))
        self.box.drawn.connect(self._drawn)
        self.plot.installEventFilter(self)

    def _switch_button(self) -> QToolButton:
        button = QToolButton()
        button.setAutoRaise(True)
        button.setText("with closing")
        button.setCheckable(True)
        button.setAccessibleName("Correlate opening with closing instead of opening with opening")
        button.setToolTip("Correlate each opening with the closing of the same cycle")
        button.toggled.connect(self.cross)
        return button

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.edge.setPen(theme.pen("ink"))
        self.pair_plot.wear(theme)
        for strip, meaning in zip(self.strips, ("selected", "ink"), strict=True):
            strip.setBrush(pg.mkBrush(theme.colour(meaning, 20)))
            for line in strip.lines:
                line.setPen(theme.pen(meaning, dashed=meaning == "ink"))
        self._draw()

    # -- which map ---------------------------------------------------------------------------------------------------

    def cross(self, on: bool) -> None:
        """Show the correlation of opening with closing, or of the chosen direction with itself."""
        self.step = CROSSED if on else SAME
        self.chosen = None
        if self.switch.isChecked() != on:
            self.switch.setChecked(on)
        self._want(self.isVisible())
        self._draw()

    def showEvent(self, event: QShowEvent) -> None:
        """Have the map worked out."""
        super().showEvent(event)
        self._want(True)

    def hideEvent(self, event: QHideEvent) -> None:
        """Let the map rest."""
        super().hideEvent(event)
        self._want(False)

    def _want(self, shown: bool) -> None:
        self.session.pipeline.want(self.object_name, (self.step,) if shown else ())

    def _traces_changed(self) -> None:
        self.chosen = None
        self._draw()

    # -- drawing -----------------------------------------------------------------------------------------------------

    def _draw(self) -> None:
        result: CorrelationHistogram | None = self.session.result(self.step)
        for item in (self.image, self.edge):
            item.setVisible(result is not None)
        if result is not None:
            self._paint(result)
            if result is not self._shown:
                again = self._shown is not None and np.array_equal(self._shown.grid.edges_g0, result.grid.edges_g0)
                self._shown = result
                if not again:
                    self._show_all()
        self.pair.ask()
        self._draw_pair()
        self._say()

    def _paint(self, result: CorrelationHistogram) -> None:
        values = np.nan_to_num(np.asarray(result.correlation, np.float64))
        apart = np.abs(np.subtract.outer(np.arange(len(values)), np.arange(len(values)))) > 1
        strong = np.abs(values[apart if not result.crossed else np.ones_like(apart)])
        self._limit = float(np.quantile(strong, 0.995)) if strong.any() else 1.0
        places = np.clip(np.round((values / max(self._limit, 1e-12) + 1) * 128), 0, 256).astype(np.uint16)
        ramp = colours.diverging(self.frame.theme.dark, 257)
        table = np.full((257, 4), 255, np.uint8)
        table[:, :3] = np.round(ramp * 255)
        self.image.setImage(table[places], autoLevels=False, levels=(0, 255))
        u = result.grid.u_edges
        low, wide = float(u[0]), float(u[-1] - u[0])
        self.image.setRect(QRectF(low, low, wide, wide))
        self.edge.setData(*outline(result.significant, u))
        logarithmic = result.grid.axis == "logarithmic"
        for axis, words in ((self.across, result.first_axis), (self.up, result.second_axis)):
            axis.set_logarithmic(logarithmic)
            axis.say(f"{words}, G / {typeset.G0}" if words else f"conductance G / {typeset.G0}")
        self.pair_plot.set_logarithmic(logarithmic)

    def _show_all(self) -> None:
        if self._shown is not None:
            u = self._shown.grid.u_edges
            self.box.setRange(QRectF(float(u[0]), float(u[0]), float(u[-1] - u[0]), float(u[-1] - u[0])), padding=0.01)
            self.pair_plot.look(*self.box.viewRange()[0])

    def _zoom(self, x_factor: float, y_factor: float, x: float, y: float) -> None:
        factor = x_factor * y_factor
        (left, right), (low, high) = self.box.viewRange()
        self.box.setXRange(x - (x - left) * factor, x + (right - x) * factor, padding=0)
        self.box.setYRange(y - (y - low) * factor, y + (high - y) * factor, padding=0)
        self.pair_plot.look(*self.box.viewRange()[0])

    def _move(self, x: float, y: float) -> None:
        (left, right), (low, high) = self.box.viewRange()
        self.box.setXRange(left + x, right + x, padding=0)
        self.box.setYRange(low + y, high + y, padding=0)
        self.pair_plot.look(*self.box.viewRange()[0])

    # -- a pair ------------------------------------------------------------------------------------------------------

    def choose_bins(self, x: float, y: float, x_end: float | None = None, y_end: float | None = None) -> None:
        """Choose the pair of bins at two heights on the axes, or all bins up to two others."""
        shown = self._shown
        if shown is None:
            return
        first = shown.bins_at(self._g0(x), self._g0(y))
        last = shown.bins_at(self._g0(x if x_end is None else x_end), self._g0(y if y_end is None else y_end))
        if first is None or last is None:
            self.chosen = None
        else:
            ends = [sorted(pair) for pair in zip(first, last, strict=True)]
            one, other = ((shown.range_g0(low)[0], shown.range_g0(high)[1]) for low, high in ends)
            self.chosen = (one, other)
        self._draw_pair()
        self.pair.ask()

    def _drawn(self, drag: Drag) -> None:
        shown = self._shown
        if shown is not None and drag.ended:
            u = shown.grid.u_edges
            inside = [float(np.clip(value, u[0], u[-1] - 1e-9)) for value in (drag.x0, drag.y0, drag.x1, drag.y1)]
            self.choose_bins(*inside)

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """Move the chosen pair with the arrow keys while the map has the focus."""
        kinds = (QEvent.Type.KeyPress, QEvent.Type.ShortcutOverride)
        if isinstance(event, QKeyEvent) and event.type() in kinds and self._shown is not None:
            by = ARROWS.get(Qt.Key(event.key()))
            if by is not None and not event.modifiers() & ~Qt.KeyboardModifier.ShiftModifier:
                event.accept()
                if event.type() == QEvent.Type.KeyPress:
                    self.step_pair(*(5 * one if event.modifiers() else one for one in by))
                return True
        return super().eventFilter(watched, event)

    def step_pair(self, first: int, second: int) -> None:
        """Choose the pair of bins so many bins further along either axis."""
        shown = self._shown
        if shown is None:
            return
        middle = (float(shown.grid.centres_g0[shown.grid.bins // 2]),) * 2
        at = middle if self.chosen is None else (self._middle(self.chosen[0]), self._middle(self.chosen[1]))
        places = shown.bins_at(*at)
        if places is not None:
            moved = [
                min(max(place + by, 0), shown.grid.bins - 1) for place, by in zip(places, (first, second), strict=True)
            ]
            u = (shown.grid.u_edges[:-1] + shown.grid.u_edges[1:]) / 2
            self.choose_bins(float(u[moved[0]]), float(u[moved[1]]))

    def _middle(self, one: Range) -> float:
        return float(np.sqrt(one[0] * one[1])) if self.across.logarithmic else (one[0] + one[1]) / 2

    def _wanted_pair(self) -> Wanted | None:
        analysis, chosen, crossed = self.session.analysis, self.chosen, self.step == CROSSED
        needed = ("counts", "selection", *(("partners",) if crossed else ()))
        if analysis is None or chosen is None or not all(map(analysis.ready, needed)):
            return None

        def task(work: Work, _: Callable[[Any], None]) -> PairHistograms:
            from meseta import histograms

            counts, kept = analysis.result("counts", work), analysis.result("selection", work).kept
            partners = analysis.result("partners", work) if crossed else None
            return histograms.pair_histograms(
                counts, kept, *chosen, analysis.recipe.histogram, partners=partners, work=work
            )

        return (chosen, crossed, *map(analysis.key, (*needed, "histogram"))), task

    def _draw_pair(self) -> None:
        for strip, one in zip(self.strips, self.chosen or (None, None), strict=True):
            strip.setVisible(one is not None)
            if one is not None:
                strip.setRegion([self._u(one[0]), self._u(one[1])])
        found: PairHistograms | None = self.pair.result if self.chosen is not None else None
        if found is not None and (found.first_g0, found.second_g0) != self.chosen:
            return  # the newer one is on its way
        self.pair_plot.show(found, self._shown)
        self.across.setHeight(8 if found is not None else BOTTOM_PIXELS)  # the plot below has the same axis
        self.across.setStyle(showValues=found is None)
        self.across.show_name(found is None)
        self.sentence.setText(self._words(found))

    def _words(self, found: PairHistograms | None) -> str:
        if self.pair.error is not None:
            return str(self.pair.error)
        shown = self._shown
        if shown is None or not np.isfinite(shown.correlation).any():
            return ""
        caution = f"<br>Caution: {shown.note}." if shown.note else ""
        if found is None:
            return f"Click a pair of bins: which traces are rich there will stand here.{caution}"
        return f"{self.pair_plot.legend()}<br>{found.text[:1].upper()}{found.text[1:]}.{caution}"

    # -- words -------------------------------------------------------------------------------------------------------

    def _g0(self, u: float) -> float:
        return float(10.0**u) if self.across.logarithmic else float(u)

    def _u(self, g0: float) -> float:
        return float(np.log10(g0)) if self.across.logarithmic and g0 > 0 else g0

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Return the conductance of the upper axis under the pointer, where the plots show the same axis."""
        shown = self._shown
        if shown is None:
            return None
        places = shown.bins_at(self._g0(x), self._g0(y))
        if places is not None:
            value = float(shown.correlation[places])
            words = "beyond chance" if shown.significant[places] else "left to chance"
            self.plot.setToolTip(
                f"{typeset.conductance(self._g0(x), 2)} with {typeset.conductance(self._g0(y), 2)}: "
                f"{typeset.number(value, 2)}, {words}"
            )
        return Hover(y) if shown.grid.axis == self.session.axis else None

    def _say(self) -> None:
        session, state = self.session, self.session.state(self.step)
        error, shown = session.errors.get(self.step), session.result(self.step)
        if session.traces is None:
            self.say_empty("Which conductances go together in one trace will stand here.")
        elif error is not None:
            self.say_empty(str(error))
        elif shown is None:
            self.say_empty("Correlating …" if state == "working" else "Not yet worked out.")
        elif not np.isfinite(shown.correlation).any():
            self.say_empty(shown.note or "No bin varies over the traces.")
        else:
            self.say_empty("")
        self.say_state("out of date" if state == "out of date" else "")
        note = ""
        if shown is not None and np.isfinite(shown.correlation).any():
            limit = typeset.number(self._limit, 2)
            note = f"teal {typeset.MINUS}{limit} to orange +{limit}"
            if np.isfinite(shown.threshold):
                note += f"; outlined: beyond chance (more than {typeset.number(float(shown.threshold), 2)} from zero)"
        self.say_note(note)

    def data(self) -> PlotData | None:
        """Return the correlations, one row a pair of bins."""
        shown = self._shown
        if shown is None:
            return None
        g, bins = shown.grid.centres_g0, shown.grid.bins
        columns: dict[str, npt.NDArray[Any]] = {"first_g0": np.repeat(g, bins), "second_g0": np.tile(g, bins)}
        columns |= {"correlation": shown.correlation.ravel(), "significant": shown.significant.ravel()}
        return PlotData("2D correlation histogram", columns)

    def menu_entries(self) -> list[tuple[str, Callable[[], None]]]:
        """Offer the histograms of the chosen pair."""
        return [("Copy the histograms of the pair", self.pair_plot.copy)] if self.pair_plot.found is not None else []
