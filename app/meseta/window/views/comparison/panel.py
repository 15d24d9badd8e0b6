"""Comparison on the shared conductance axis: overlaid, side by side, or the difference with its band."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QPointF, Qt
from PySide6.QtGui import QAction, QActionGroup, QPen, QPolygonF, QResizeEvent
from PySide6.QtWidgets import QFileDialog, QGraphicsPolygonItem, QMenu, QSizePolicy, QToolButton

from meseta import typeset
from meseta.colours import GROUPS
from meseta.errors import MesetaError
from meseta.window.conditions import WINDOWS
from meseta.window.frame import Frame
from meseta.window.jobs import Channel
from meseta.window.on_demand import OnDemand, Wanted
from meseta.window.plots.drawing import WindowTool
from meseta.window.plots.panel import HEADING_MARGINS, PlotData, SpinePanel
from meseta.window.plots.ticks import LogCountAxis
from meseta.window.theme import Theme
from meseta.window.views.comparison.request import MOST_PARTS, SOURCES, Compared, Question, answer, read_beside
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.analysis import Analysis
    from meseta.histograms import ConductanceHistogram

__all__ = ["ComparisonPanel"]

Floats = npt.NDArray[np.float64]
COMPARE, READ = Channel("comparison"), Channel("comparison recording")
LOOKS = {
    "overlaid": "overlaid",
    "logarithmic": "overlaid, logarithmic",
    "beside": "side by side",
    "difference": "difference",
}
DASHES = (
    Qt.PenStyle.SolidLine,
    Qt.PenStyle.DashLine,
    Qt.PenStyle.DotLine,
    Qt.PenStyle.DashDotLine,
    Qt.PenStyle.DashDotDotLine,
)
DECADES = 4.0
BUTTON_MARGINS = 28
"""Pixels of a button that are no words."""


@dataclass(frozen=True)
class _Lane:
    """One part as drawn: its curve and its band."""

    curve: pg.PlotCurveItem
    band: QGraphicsPolygonItem


class ComparisonPanel(SpinePanel):
    """Several histograms on one axis."""

    title = "Comparison"
    shorter = ("Comparison",)
    help_page = "comparison"
    object_name = "comparison"

    def __init__(self, frame: Frame) -> None:
        self.density = LogCountAxis("bottom", "density")
        super().__init__(frame, self.density)
        self.source, self.look, self.fit_scale = "conditions", "overlaid", False
        self.others: dict[str, Analysis] = {}
        self.lanes: list[_Lane] = []
        self.zero = pg.InfiniteLine(angle=90, movable=False)
        self.box.addItem(self.zero, ignoreBounds=True)
        self.legend, self.said = pg.TextItem("", anchor=(1, 0)), pg.TextItem("", anchor=(0, 1))
        for item in (self.legend, self.said):
            item.setZValue(35)
            self.box.addItem(item, ignoreBounds=True)
        self.choice = self._choice_button()
        self.corner.addWidget(self.choice)
        self.tool = WindowTool(self, across=False)
        self.job = OnDemand(self, frame.session, COMPARE, "comparing", self._wanted, self._draw)
        session = self.session
        session.traces_changed.connect(self._traces_changed)
        session.span_changed.connect(lambda _: self._rescale())
        self.wear(frame.theme)
        self._draw()

    # -- choosing ----------------------------------------------------------------------------------------------------

    def _choice_button(self) -> QToolButton:
        menu = QMenu(self)
        self.sources: dict[str, QAction] = {}
        group = QActionGroup(self)
        for source, words in SOURCES.items():
            action = menu.addAction(words)
            action.setCheckable(True)
            action.setChecked(source == self.source)
            action.triggered.connect(lambda _=False, one=source: self.compare(one))
            group.addAction(action)
            self.sources[source] = action
        menu.addAction("Open another recording beside this one …", self.ask_recording)
        menu.addSeparator()
        looks = QActionGroup(self)
        for look, words in LOOKS.items():
            action = menu.addAction(words)
            action.setCheckable(True)
            action.setChecked(look == self.look)
            action.triggered.connect(lambda _=False, one=look: self.show_as(one))
            looks.addAction(action)
        menu.addSeparator()
        self.fit_action = menu.addAction("Fit the scale of the second above the drawn window")
        self.fit_action.setCheckable(True)
        self.fit_action.toggled.connect(self._fit_toggled)
        button = QToolButton()
        button.setMenu(menu)
        button.setPopupMode(QToolButton.ToolButtonPopupMode.InstantPopup)
        button.setAutoRaise(True)
        button.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Fixed)
        button.setAccessibleName("What is compared, and how it is laid out")
        return button

    def _name_choice(self) -> None:
        """Write on the button what is compared and how, or only what where the panel is narrow."""
        what = SOURCES[self.source].split(" ")[0]
        both = f"{what}, {LOOKS[self.look]}"
        width = self.fontMetrics().horizontalAdvance
        taken = self.heading.sizeHint().width() + HEADING_MARGINS + BUTTON_MARGINS
        taken += width(self.state.text()) + 8 if self.state.text() else 0
        self.choice.setText(both if width(both) + taken <= self.width() else what)
        self.choice.setMinimumWidth(width(what) + BUTTON_MARGINS // 2)
        self.choice.setToolTip(f"What is compared and how: {SOURCES[self.source]}, {LOOKS[self.look]}")

    def compare(self, source: str) -> None:
        """Compare something else."""
        if source == "recording" and not self.others:
            self.sources[self.source].setChecked(True)
            self.ask_recording()
            return
        self.source = source
        self.sources[source].setChecked(True)
        self.job.ask()
        self._draw()

    def show_as(self, look: str) -> None:
        """Lay the histograms out in another way."""
        self.look = look
        self._draw()

    def _fit_toggled(self, on: bool) -> None:
        self.fit_scale = on
        self.job.ask()

    def _traces_changed(self) -> None:
        if self.session.traces is None:
            self.others = {}
            if self.source == "recording":
                self.compare("conditions")

    def ask_recording(self) -> None:
        """Ask for another recording or study, to stand beside this one."""
        paths, _ = QFileDialog.getOpenFileNames(self, "Open another recording to compare with")
        if paths:
            self.open_recording(paths)

    def open_recording(self, paths: list[str]) -> None:
        """Read another recording in the background, with the settings of this one, and compare."""
        recipe = self.session.document.recipe

        def task(work: Work, _: Callable[[Any], None]) -> tuple[str, Analysis]:
            return read_beside(paths, recipe, work)

        self.frame.say(f"opening {Path(paths[0]).name} to compare with …")
        self.session.jobs.submit(READ, "reading files to compare with", task, self._opened, self._not_opened)

    def _opened(self, opened: tuple[str, Analysis]) -> None:
        name = opened[0] if opened[0] != self.session.name else f"{opened[0]} (2)"
        self.others = {**self.others, name: opened[1]}
        self.compare("recording")

    def _not_opened(self, error: MesetaError) -> None:
        self.session.problem.emit(error)

    # -- asking ------------------------------------------------------------------------------------------------------

    def _window(self) -> tuple[float, float] | None:
        active = self.session.document.conditions.active
        drawn = [(one.low_g0, one.high_g0) for one in active if one.kind in WINDOWS]
        return drawn[-1] if drawn else None

    def _question(self) -> Question:
        rule = self.session.document.conditions.rule() if self.source == "conditions" else ""
        asked = self.source == "recording" or self.fit_scale
        return Question(self.source, rule, self._window() if asked else None, self.fit_scale)

    def _wanted(self) -> Wanted | None:
        session, question = self.session, self._question()
        analysis = session.analysis
        if analysis is None or session.state("histogram") != "current" or session.dragging:
            return None
        if question.source == "conditions" and not question.rule:
            return None
        recipe, name = session.document.recipe, session.name
        others = {key: one.with_recipe(recipe) for key, one in self.others.items()}
        self.others = others
        taken = others if question.source == "recording" else {}

        def task(work: Work, _: Callable[[Any], None]) -> Compared:
            return answer(analysis, taken, name, question, work)

        key = (question, analysis.key("histogram"), *(one.key("histogram") for one in taken.values()))
        return key, task

    # -- looks -------------------------------------------------------------------------------------------------------

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.tool.wear(theme)
        self.zero.setPen(theme.pen("quiet", dotted=True))
        self.said.setColor(theme.palette.ink)
        self.said.fill = self.legend.fill = pg.mkBrush(theme.colour("panel", 200))
        self._draw()

    def _pen(self, place: int) -> QPen:
        """Return the pen of a part: its own colour and its own dash."""
        theme = self.frame.theme
        if place == 0:
            return theme.curve_pen("selected")
        if place == 1:
            return theme.curve_pen("ink", dashed=True)
        style = GROUPS[(place - 2) % len(GROUPS)]
        pen: QPen = theme.curve_pen("ink")
        pen.setColor(pg.mkColor(style.dark if theme.dark else style.light))
        pen.setStyle(DASHES[place % len(DASHES)])
        return pen

    # -- drawing -----------------------------------------------------------------------------------------------------

    @property
    def compared(self) -> Compared | None:
        """What was compared last, where it belongs on the axis in use."""
        found: Compared | None = self.job.result
        return found if found is not None and found.comparison.grid.axis == self.session.axis else None

    def _draw(self) -> None:
        found = self.compared
        shown = self._parts_shown(found)
        self._arrange(0 if found is None else 1 if self.look == "difference" else len(shown))
        self.density.logarithmic = self.look == "logarithmic"
        self.zero.setVisible(found is not None and self.look == "difference")
        if found is not None:
            if self.look == "difference" and found.difference is not None:
                one = found.difference
                self._draw_lane(0, one.density, one.density_low, one.density_high, one.grid.u_edges, 0.0)
            else:
                for place, histogram in enumerate(shown):
                    offset = place * self._top(found) * 1.15 if self.look == "beside" else 0.0
                    self._draw_lane(
                        place,
                        histogram.density,
                        histogram.density_low,
                        histogram.density_high,
                        histogram.grid.u_edges,
                        offset,
                    )
            unit = found.comparison.density_unit.replace(" / ", " per ").replace("G0", typeset.G0)
            self.density.say(unit if self.look != "difference" else f"Δ {unit}")
        self.density.setStyle(showValues=self.look != "beside")
        self._write(found)
        self._rescale()
        self._say(found)

    def _parts_shown(self, found: Compared | None) -> list[ConductanceHistogram]:
        return [] if found is None else [part.histogram for part in found.comparison.parts[:MOST_PARTS]]

    def _arrange(self, count: int) -> None:
        while len(self.lanes) > count:
            lane = self.lanes.pop()
            for item in (lane.curve, lane.band):
                self.box.removeItem(item)
        while len(self.lanes) < count:
            lane = _Lane(pg.PlotCurveItem(antialias=False), QGraphicsPolygonItem())
            lane.band.setZValue(0)
            lane.curve.setZValue(5)
            for item in (lane.band, lane.curve):
                self.box.addItem(item, ignoreBounds=True)
            self.lanes.append(lane)
        for place, lane in enumerate(self.lanes):
            pen = self._pen(place)
            lane.curve.setPen(pen)
            colour = pen.color()
            colour.setAlpha(45)
            lane.band.setPen(pg.mkPen(None))
            lane.band.setBrush(pg.mkBrush(colour))

    def _draw_lane(self, place: int, density: Floats, low: Floats, high: Floats, edges: Floats, offset: float) -> None:
        lane = self.lanes[place]
        lane.curve.setData(np.repeat(self._across(density) + offset, 2), np.repeat(edges, 2)[1:-1], connect="finite")
        known = np.flatnonzero(np.isfinite(low) & np.isfinite(high))
        u = (edges[:-1] + edges[1:]) / 2
        x = np.concatenate([self._across(low)[known], self._across(high)[known][::-1]]) + offset
        y = np.concatenate([u[known], u[known][::-1]])
        lane.band.setPolygon(QPolygonF([QPointF(a, b) for a, b in zip(x.tolist(), y.tolist(), strict=True)]))

    def _across(self, density: Floats) -> Floats:
        if self.look != "logarithmic":
            return density
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(density > 0, np.log10(density), -30.0)

    def _inside(self, found: Compared) -> npt.NDArray[np.bool_]:
        """Return the bins in view that do not belong to the floor."""
        grid, span = found.comparison.grid, self.session.span
        u = (grid.u_edges[:-1] + grid.u_edges[1:]) / 2
        inside = (u >= span.low) & (u <= span.high)
        noise = self.session.result("noise")
        if noise is not None and noise.floor_traces:
            clear = inside & (grid.centres_g0 > abs(noise.floor_g0) + 6 * noise.floor_sigma_g0)
            inside = clear if clear.any() else inside
        return inside

    def _top(self, found: Compared) -> float:
        inside = self._inside(found)
        tops = [float(np.nanmax(one.density[inside], initial=0.0)) for one in self._parts_shown(found)]
        return max(tops, default=0.0) or 1.0

    def _rescale(self) -> None:
        found = self.compared
        if found is None:
            return
        if self.look == "difference" and found.difference is not None:
            inside = self._inside(found)
            one = found.difference
            ends = np.abs(np.concatenate([one.density[inside], one.density_low[inside], one.density_high[inside]]))
            reach = float(np.nanmax(ends, initial=0.0)) or 1.0
            self.box.setXRange(-1.1 * reach, 1.1 * reach, padding=0)
        else:
            top = self._top(found)
            lanes = len(self.lanes) if self.look == "beside" else 1
            if self.look == "logarithmic":
                self.box.setXRange(np.log10(top) - DECADES, np.log10(top) + 0.15, padding=0)
            else:
                self.box.setXRange(-0.02 * top, 1.15 * top * lanes, padding=0)
        self._place_words()

    # -- words -------------------------------------------------------------------------------------------------------

    def _write(self, found: Compared | None) -> None:
        for item in (self.legend, self.said):
            item.setVisible(found is not None)
        if found is None:
            return
        signs = ("—", "- -", "···", "-·-", "-··")
        parts = found.comparison.parts
        names = [
            (self._pen(place).color().name(), f"{signs[place % len(signs)]} {part.name}", part.histogram.traces)
            for place, part in enumerate(parts[:MOST_PARTS])
        ]
        if self.look == "difference":
            names = [(names[0][0], f"{parts[0].name} less {parts[1].name}", 0)]
        lines = [
            f"<span style='color:{colour}'>{_safe(words)}"
            + (f", {typeset.integer(traces)} traces" if traces else "")
            + "</span>"
            for colour, words, traces in names
        ]
        if len(parts) > MOST_PARTS and self.look != "difference":
            lines.append(f"and {len(parts) - MOST_PARTS} more")
        self.legend.setHtml(f"<div style='text-align:right'>{'<br>'.join(lines)}</div>")
        self.said.setText("\n".join(self.statements()))

    def statements(self) -> list[str]:
        """Return what the comparison says in words: the yield against a blank, the scale, and what was done for it."""
        found = self.compared
        if found is None:
            return []
        said = []
        if found.found is not None:
            blank = found.comparison.parts[1].name
            said.append(f"{found.found.text[:1].upper()}{found.found.text[1:]}, with {blank} as blank.")
        elif self.source == "recording":
            said.append("Draw a window on the molecule: its yield against the other recording will stand here.")
        one = found.difference
        if one is not None and one.scale_is_fitted:
            text = typeset.value_with_uncertainty(one.scale, one.scale_low, one.scale_high)
            said.append(f"The second is scaled by {text}, fitted above the window.")
        return said + [f"{note[:1].upper()}{note[1:]}." for note in found.comparison.notes]

    def _place_words(self) -> None:
        (left, right), (low, high) = self.box.viewRange()
        self.legend.setPos(right, high)
        self.said.setPos(left, low)
        for item in (self.legend, self.said):
            item.setTextWidth(max(self.box.width() - 12.0, 60.0))

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Keep the words inside."""
        super().resizeEvent(event)
        self._name_choice()
        self._place_words()

    def _say(self, found: Compared | None) -> None:
        session, state = self.session, self.job.state
        self.fit_action.setEnabled(self._window() is not None)
        if session.traces is None:
            self.say_empty("Two parts of a recording, or two recordings, will stand here on one axis.")
        elif self.source == "conditions" and not session.document.conditions.rule():
            self.say_empty("Draw a window on a plot: the traces that it picks will stand here against the others.")
            self._arrange(0)
            self._write(None)
        elif self.job.error is not None:
            parts = (self.job.error.what, self.job.error.remedy)
            self.say_empty(" ".join(f"{part[:1].upper()}{part[1:]}." for part in parts if part))
            self._arrange(0)
            self._write(None)
        elif found is None:
            self.say_empty("Comparing …" if state == "working" else "Waiting for the histogram.")
        else:
            self.say_empty("")
        old = found is not None and not self.empty.text() and state in ("out of date", "working")
        self.say_state("out of date" if old else "")
        self._name_choice()

    def data(self) -> PlotData | None:
        """Return every histogram with its band, and the difference, one row a bin."""
        found = self.compared
        if found is None:
            return None
        edges = found.comparison.grid.edges_g0
        columns: dict[str, npt.NDArray[Any]] = {"g_low_g0": edges[:-1], "g_high_g0": edges[1:]}
        for part in found.comparison.parts:
            one = part.histogram
            for end, values in (("", one.density), ("_low", one.density_low), ("_high", one.density_high)):
                columns[f"{part.name}{end}"] = values
        if found.difference is not None:
            columns |= {
                "difference": found.difference.density,
                "difference_low": found.difference.density_low,
                "difference_high": found.difference.density_high,
            }
        return PlotData("comparison", columns)

    def menu_entries(self) -> list[tuple[str, Callable[[], None]]]:
        """Offer another recording."""
        return [("Open another recording beside this one …", self.ask_recording)]


def _safe(text: str) -> str:
    return text.replace("&", "&amp;").replace("<", "&lt;")
