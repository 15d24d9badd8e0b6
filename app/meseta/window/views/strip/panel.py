"""The whole recording, one column a trace: where am I, does it drift, what happened when, what is selected."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QRectF

from meseta import typeset
from meseta.window.conditions import Condition
from meseta.window.frame import Frame
from meseta.window.jobs import Channel
from meseta.window.pictures import StripPicture, strip_picture
from meseta.window.plots.drawing import Band
from meseta.window.plots.gestures import Drag
from meseta.window.plots.panel import PlotData, PlotPanel
from meseta.window.plots.ticks import ConductanceAxis, PlainAxis
from meseta.window.session import Change, Hover
from meseta.window.theme import Theme

if TYPE_CHECKING:
    from meseta.histograms import CountMatrix

__all__ = ["StripPanel"]

STRIP = Channel("strip", quick=True, shown=False)
RIBBON = 0.09
"""Height of a ribbon above the picture, as a share of the conductance axis."""


class StripPanel(PlotPanel):
    """The record strip."""

    title = "Record"
    help_page = "temporal"
    object_name = "record"

    def __init__(self, frame: Frame) -> None:
        self.conductance = ConductanceAxis(labelled=False)
        super().__init__(frame, PlainAxis("bottom", "trace number", whole=True), self.conductance)
        self.conductance.setWidth(64)
        self.plot.setMinimumHeight(72)
        self.image, self.selected_ribbon, self.dropped_ribbon = (pg.ImageItem() for _ in range(3))
        for z, item in ((-30, self.image), (-10, self.selected_ribbon), (-10, self.dropped_ribbon)):
            item.setZValue(z)
            self.box.addItem(item, ignoreBounds=True)
        self.position = pg.InfiniteLine(angle=90, movable=False)
        self.position.addMarker("v", position=1.0, size=8.0)
        self.position.setZValue(30)
        self.box.addItem(self.position, ignoreBounds=True)
        self.ranges: list[Band] = []
        self.events: list[pg.InfiniteLine] = []
        self._picture: StripPicture | None = None
        self._level = -1
        self._drawing: int | None = None
        self._span = (0.0, 1.0)
        self._connect()
        self.wear(frame.theme)
        self._traces_changed()

    def _connect(self) -> None:
        session = self.session
        session.traces_changed.connect(self._traces_changed)
        session.result_changed.connect(self._result_changed)
        session.states_changed.connect(self._say)
        session.current_changed.connect(lambda trace: self.position.setPos(trace + 0.5))
        session.subset_changed.connect(lambda _: self._draw_ribbons())
        session.document_changed.connect(self._document_changed)
        self.box.drawn.connect(self._drawn)
        self.box.clicked.connect(lambda x, _: session.go_to(int(np.floor(x))))
        self.box.zoomed.connect(self._zoomed)
        self.box.moved.connect(lambda x, _: self._look(self._span[0] + x, self._span[1] + x))
        self.box.reset.connect(self.show_all)

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.position.setPen(theme.wide_pen("fit", 1.0, dashed=True))
        for line in self.events:
            line.setPen(theme.pen("ink", dotted=True))
            line.label.setColor(theme.palette.ink)
        self._level = -1
        self._draw()
        self._draw_ribbons()

    # -- what is shown -----------------------------------------------------------------------------------------------

    def _traces_changed(self) -> None:
        traces = self.session.traces
        if "counts" not in self.session.shown:
            self._picture = None
            self.image.hide()
        if self._picture is None or self._span[0] <= 0:
            self.show_all()
        else:
            self._look(*self._span)
        self.position.setVisible(traces is not None)
        self._draw_ribbons()
        self._draw_marks()
        self._say_statements()
        self._say()

    def _result_changed(self, name: str) -> None:
        if name == "counts":
            self._ask()
        if name == "selection":
            self._draw_ribbons()
        if name in ("drift", "resampling"):
            self._say_statements()

    def _document_changed(self, change: Change) -> None:
        if change.conditions:
            self._draw_ranges()
        if change.decisions:
            self._draw_marks()
        before, after = change.before.recipe.figure, change.after.recipe.figure
        if before.colour_scale != after.colour_scale:
            self._ask()
        elif before != after:
            self._level = -1
            self._draw()

    def _ask(self) -> None:
        """Have the pyramid of the picture made off the window's thread."""
        counts: CountMatrix | None = self.session.result("counts")
        if counts is None:
            return
        scale = self.session.document.recipe.figure.colour_scale

        def task(work: Any, _: Callable[[Any], None]) -> StripPicture:
            return strip_picture(counts, scale, work)

        self.session.jobs.submit(STRIP, "record strip", task, self._take, self.session.problem.emit)

    def _take(self, picture: StripPicture) -> None:
        self._picture, self._level = picture, -1
        self._draw()
        self._draw_ribbons()
        self._place_vertically()

    def _place_vertically(self) -> None:
        picture = self._picture
        low, high = (picture.u_low, picture.u_high) if picture is not None else (-6.5, 1.0)
        self.conductance.set_logarithmic(picture is None or picture.axis == "logarithmic")
        self.box.setYRange(low, high + 2 * RIBBON * (high - low), padding=0)

    # -- drawing -----------------------------------------------------------------------------------------------------

    def _draw(self) -> None:
        picture = self._picture
        if picture is None:
            return
        level = picture.level_for(*self._span)
        if level == self._level:
            return
        self._level = level
        settings, theme = self.session.document.recipe.figure, self.frame.theme
        lookup = theme.lookup(settings.colour_map).copy()
        lookup[0, :3] = theme.lookup("grey")[0, :3]
        columns = picture.levels[level]
        self.image.setImage(picture.images[level], autoLevels=False, levels=(0, 255), lut=lookup)
        width = len(columns) * 2**level
        self.image.setRect(QRectF(0, picture.u_low, width, picture.u_high - picture.u_low))
        self.image.show()

    def _draw_ribbons(self) -> None:
        """Show which traces are selected and which are dropped, above the picture."""
        subset, kept = self.session.subset, self.session.kept
        theme = self.frame.theme
        self._ribbon(self.selected_ribbon, None if subset is None else subset.mask, 0, theme.over_lookup)
        dropped = None if kept is None else ~kept
        self._ribbon(self.dropped_ribbon, dropped, 1, theme.grey_lookup)

    def _ribbon(self, item: pg.ImageItem, mask: npt.NDArray[np.bool_] | None, row: int, lookup: Any) -> None:
        traces = self.session.traces
        if mask is None or not mask.any() or traces is None:
            item.hide()
            return
        step = max(-(-len(mask) // 4000), 1)
        starts = np.arange(0, len(mask), step)
        share = np.add.reduceat(mask.astype(np.float32), starts) / np.diff(np.append(starts, len(mask)))
        values = np.where(share > 0, 90 + 165 * share, 0).astype(np.uint8)
        item.setImage(values[:, None], autoLevels=False, levels=(0, 255), lut=lookup)
        low, high = (-6.5, 1.0) if self._picture is None else (self._picture.u_low, self._picture.u_high)
        height = RIBBON * (high - low)
        bottom = high + (0.15 + 0.95 * row) * height
        item.setRect(QRectF(0, bottom, len(starts) * step, 0.7 * height))
        words = "selected" if row == 0 else "dropped"
        item.setToolTip(f"{words}: {typeset.integer(int(mask.sum()))} traces")
        item.show()

    def _draw_marks(self) -> None:
        """Draw dated events where they happened."""
        for line in self.events:
            self.box.removeItem(line)
        self.events = []
        traces, events = self.session.traces, self.session.document.decisions.events
        if traces is None or not events:
            return
        rows = self.session.rows_of({event.identity for event in events})
        theme = self.frame.theme
        for event in events:
            if event.identity not in rows:
                continue
            options = {"position": 0.86, "color": theme.palette.ink, "anchors": [(0, 0.5), (0, 0.5)]}
            line = pg.InfiniteLine(
                rows[event.identity], angle=90, pen=theme.pen("ink", dotted=True), label=event.text, labelOpts=options
            )
            self.box.addItem(line, ignoreBounds=True)
            self.events.append(line)

    def _draw_ranges(self) -> None:
        shown = [one for one in self.session.document.conditions.active if one.kind == "range"]
        while len(self.ranges) < len(shown):
            item = Band()
            item.setZValue(10)
            self.box.addItem(item, ignoreBounds=True)
            self.ranges.append(item)
        theme = self.frame.theme
        for place, item in enumerate(self.ranges):
            item.setVisible(place < len(shown))
            if place < len(shown):
                item.setRect(QRectF(shown[place].first, -1e4, shown[place].last - shown[place].first + 1, 2e4))
                item.wear(theme, inverted=shown[place].inverted)

    # -- gestures ----------------------------------------------------------------------------------------------------

    def show_all(self) -> None:
        """Show the whole record."""
        traces = self.session.traces
        self._look(0.0, float(max(1 if traces is None else traces.traces, 1)))
        self._place_vertically()

    def _look(self, first: float, last: float) -> None:
        traces = self.session.traces
        whole = float(max(1 if traces is None else traces.traces, 1))
        width = min(max(last - first, 5.0), whole)
        first = min(max(first, 0.0), whole - width)
        self._span = (first, first + width)
        self.box.setXRange(*self._span, padding=0)
        self._draw()

    def _zoomed(self, x_factor: float, y_factor: float, x: float, _: float) -> None:
        factor = x_factor * y_factor
        first, last = self._span
        self._look(x - (x - first) * factor, x + (last - x) * factor)

    def _drawn(self, drag: Drag) -> None:
        session = self.session
        if session.traces is None:
            return
        first, last = sorted((int(np.floor(drag.x0)), int(np.floor(drag.x1))))
        highest = session.traces.traces - 1
        condition = Condition("range", first=min(max(first, 0), highest), last=min(max(last, 0), highest))
        conditions = session.document.conditions
        if self._drawing is None:
            conditions = conditions.added(condition)
            self._drawing = len(conditions.conditions) - 1
        else:
            conditions = conditions.changed(self._drawing, condition)
        session.drag(replace(session.document, conditions=conditions))
        if drag.ended:
            self._drawing = None
            session.settle("choose a stretch of the record")

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Return the conductance under the pointer, where the strip shows the same axis as the plots."""
        picture, traces = self._picture, self.session.traces
        if picture is None or traces is None or picture.axis != self.session.axis or y > picture.u_high:
            return None
        return Hover(y)

    def _say(self) -> None:
        traces = self.session.traces
        if traces is None:
            self.say_empty("The whole record will stand here, one column a trace.")
        elif self._picture is None:
            self.say_empty("" if self.session.state("counts") != "working" else "Counting the samples …")
        else:
            self.say_empty("")
        out = self.session.state("counts") == "out of date"
        self.say_state("out of date" if out else "")

    def _say_statements(self) -> None:
        """Say beside the heading whether the record drifts, and what its traces are worth."""
        drift, resampling = self.session.result("drift"), self.session.result("resampling")
        drifts, worth = "" if drift is None else drift.text, "" if resampling is None else resampling.statement()
        # the verdicts; their numbers and what follows stand in the tool tip and in the memory of the record
        heads = [drifts.partition(":")[0], worth.partition("; ")[0]]
        self.say_note("; ".join(head for head in heads if head))
        self.note.setToolTip("\n".join(text for text in (drifts, worth) if text))

    def data(self) -> PlotData | None:
        """Return the columns of the picture: mean counts a trace, one row a bin."""
        picture = self._picture
        if picture is None:
            return None
        level = max(self._level, 0)
        columns = picture.levels[level]
        bins = columns.shape[1]
        edges = np.linspace(picture.u_low, picture.u_high, bins + 1)
        return PlotData(
            "temporal histogram",
            {
                "first_trace": np.repeat(np.arange(len(columns)) * 2**level, bins),
                "u_low": np.tile(edges[:-1], len(columns)),
                "u_high": np.tile(edges[1:], len(columns)),
                "counts_per_trace": columns.ravel().astype(np.float64),
            },
        )
