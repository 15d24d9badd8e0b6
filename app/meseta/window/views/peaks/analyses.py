"""All analyses that could be defended as well: the position of the chosen peak under each, the reported one marked."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtGui import QResizeEvent
from PySide6.QtWidgets import QGraphicsRectItem

from meseta import typeset
from meseta.window.frame import Frame
from meseta.window.jobs import Channel
from meseta.window.on_demand import OnDemand, Wanted
from meseta.window.peak_editing import PeakEditor
from meseta.window.plots.panel import PlotData, PlotPanel, show_below
from meseta.window.plots.ticks import PlainAxis
from meseta.window.session import Hover
from meseta.window.theme import Theme
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.peaks import DefensibleAnalyses, PeakAnalyses

__all__ = ["AnalysesPanel"]

ANALYSES = Channel("analyses")
PIXELS_A_LINE = 15.0
SHORT = {"fit range": "range", "bin width": "bins"}
"""What stands before the levels of a choice that would not be understood without it."""
FEWEST_PIXELS = 150
"""Height that the positions need before the choices get any."""


class _PlaceAxis(PlainAxis):
    """Positions above, and the choices by name below them."""

    def __init__(self) -> None:
        super().__init__("left")
        self.setStyle(hideOverlappingLabels=False)
        self.named: list[tuple[float, str]] = []

    def tickValues(self, minVal: float, maxVal: float, size: float) -> list[tuple[float, list[float]]]:
        """Return the lines of the choices as ticks of their own."""
        return [(1.0, [place for place, _ in self.named])] if self.named else []

    def tickStrings(self, values: list[float], scale: float, spacing: float) -> list[str]:
        """Return the names of the choices."""
        names = dict(self.named)
        return [names.get(value, "") for value in values]


class AnalysesPanel(PlotPanel):
    """Every defensible analysis, in the order of its result, over the choices that made it."""

    title = "All analyses"
    help_page = "peaks"
    object_name = "analyses"

    def __init__(self, frame: Frame) -> None:
        self.positions = PlainAxis("left", f"position ({typeset.G0})")
        super().__init__(
            frame, PlainAxis("bottom", "analyses in the order of their result", whole=True), self.positions
        )
        self.positions.setWidth(128)
        self.bottom.setHeight(22)
        self.bottom.setStyle(showValues=False)
        self.editor = PeakEditor.of(frame.session)
        self.band = QGraphicsRectItem()
        self.errors, self.marks = pg.PlotCurveItem(connect="pairs"), pg.PlotCurveItem(connect="pairs")
        self.points, self.chosen = pg.ScatterPlotItem(size=4), pg.ScatterPlotItem(size=11, symbol="d")
        self.chosen_line = pg.InfiniteLine(angle=0, movable=False)
        self.said = pg.TextItem("", anchor=(0, 0))
        for z, item in enumerate((self.band, self.errors, self.points, self.chosen_line, self.chosen, self.said)):
            item.setZValue(z)
            self.box.addItem(item, ignoreBounds=True)
        self._lines = 0.0
        self._lower()
        self._shown: PeakAnalyses | None = None
        self._order: npt.NDArray[np.int64] = np.empty(0, np.int64)
        self.job = OnDemand(self, frame.session, ANALYSES, "trying all analyses", self._wanted, self._draw)
        self.editor.chosen_changed.connect(lambda _: self._draw())
        self.wear(frame.theme)
        self._draw()

    def _lower(self) -> None:
        """Make the grid of choices under the positions."""
        self.names = _PlaceAxis()
        self.names.setWidth(128)
        self.grid = pg.PlotItem(
            axisItems={"left": self.names, "bottom": PlainAxis("bottom")}, enableMenu=False, viewBox=None
        )
        self.grid.hideAxis("bottom")
        self.grid.hideButtons()
        self.grid.getViewBox().setMouseEnabled(False, False)
        self.grid.getViewBox().setDefaultPadding(0.0)
        self.grid.addItem(self.marks, ignoreBounds=True)
        self.ring = pg.ScatterPlotItem(size=9, symbol="d")
        self.grid.addItem(self.ring, ignoreBounds=True)
        self.plot.getPlotItem().layout.addItem(self.grid, 6, 0, 1, 4)

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.names.wear(theme)
        self.band.setPen(pg.mkPen(None))
        self.band.setBrush(pg.mkBrush(theme.colour("every", 50)))
        self.errors.setPen(theme.pen("hairline"))
        self.marks.setPen(theme.pen("quiet"))
        for item in (self.points,):
            item.setPen(pg.mkPen(None))
            item.setBrush(pg.mkBrush(theme.colour("ink")))
        for item in (self.chosen, self.ring):
            item.setPen(theme.wide_pen("fit", 1.5))
            item.setBrush(pg.mkBrush(theme.colour("panel")))
        self.chosen_line.setPen(theme.wide_pen("fit", 1.0, dashed=True))
        self.said.setColor(theme.palette.ink)

    # -- asking ------------------------------------------------------------------------------------------------------

    def _wanted(self) -> Wanted | None:
        session = self.session
        analysis = session.analysis
        if analysis is None or session.state("peaks") != "current" or self.editor.fit is None:
            return None

        def task(work: Work, _: Callable[[Any], None]) -> DefensibleAnalyses:
            from meseta.analysis import defensible_analyses

            return defensible_analyses(analysis, work)

        return analysis.key("peaks"), task

    # -- drawing -----------------------------------------------------------------------------------------------------

    @property
    def peak(self) -> str:
        """Name of the peak that is looked at: the chosen one, else the one with the largest area."""
        fit, row = self.editor.fit, self.editor.row_of(self.editor.chosen)
        if fit is None:
            return ""
        if row < 0:
            row = int(np.nanargmax(np.where(np.isfinite(fit.table.position_g0), fit.table.area_per_trace, -np.inf)))
        return str(fit.table.peak[row])

    def _draw(self) -> None:
        found: DefensibleAnalyses | None = self.job.result
        peak = self.peak
        self._shown = None
        if found is not None and peak in found.peak:
            self._shown = found.of_peak(peak)
        self._order = self._ordered()
        drawn = self._shown is not None and len(self._order) > 0
        for item in (self.band, self.errors, self.points, self.chosen, self.chosen_line, self.said):
            item.setVisible(drawn)
        show_below(self.grid, drawn)
        if drawn and found is not None:
            self._draw_positions(found, peak)
            self._draw_choices()
        self._say(peak)

    def _ordered(self) -> npt.NDArray[np.int64]:
        if self._shown is None:
            return np.empty(0, np.int64)
        rows = np.argsort(self._shown.position_g0, kind="stable")
        return rows[np.isfinite(self._shown.position_g0[rows])]

    def _draw_positions(self, found: DefensibleAnalyses, peak: str) -> None:
        shown, order = self._shown, self._order
        assert shown is not None
        at, places = np.arange(len(order), dtype=float), shown.position_g0[order]
        self.points.setData(at, places)
        low, high = shown.position_low_g0[order], shown.position_high_g0[order]
        known = np.isfinite(low) & np.isfinite(high)
        self.errors.setData(np.repeat(at[known], 2), np.column_stack([low[known], high[known]]).ravel())
        spread = found.spread()
        row = int(np.flatnonzero(spread.peak == peak)[0])
        bottom, top = float(spread.low_g0[row]), float(spread.high_g0[row])
        self.band.setRect(-0.5, bottom, len(order), top - bottom)
        ends = np.concatenate([places, low[known], high[known]])
        room = 0.08 * (ends.max() - ends.min()) or 0.05 * abs(float(ends[0]))
        top_of_all = float(ends.max() + 5 * room)  # with room for the words
        self.box.setYRange(float(ends.min() - room), top_of_all, padding=0)
        self.box.setXRange(-0.5, len(order) - 0.5, padding=0)
        self.said.setPos(-0.5, top_of_all)
        chosen = float(spread.chosen_g0[row])
        count, inner = typeset.integer(int(spread.analyses[row])), typeset.interval(bottom, top, "G0")
        whole = typeset.interval(float(spread.lowest_g0[row]), float(spread.highest_g0[row]), "G0")
        self.said.setText(
            f"{count} analyses, nine tenths in {inner}, all in {whole}; reported {typeset.conductance(chosen)}"
        )
        self.said.setTextWidth(max(self.box.width() - 12.0, 60.0))
        reported = np.flatnonzero(order == shown.chosen)
        self.chosen.setData(reported.astype(float), shown.position_g0[order[reported]])
        self.chosen_line.setVisible(bool(np.isfinite(chosen)))
        self.chosen_line.setPos(chosen if np.isfinite(chosen) else 0.0)

    def _draw_choices(self) -> None:
        shown, order = self._shown, self._order
        assert shown is not None
        lines: list[tuple[float, str]] = []
        x, y, ring = [], [], []
        height = 0.0
        reported = np.flatnonzero(order == shown.chosen)
        for choice, values in shown.choices.items():
            texts = np.array(values)[order]
            for level in dict.fromkeys(values):
                height -= 1.0
                at = np.flatnonzero(texts == level).astype(float)
                x.append(np.repeat(at, 2))
                y.append(np.tile([height - 0.3, height + 0.3], len(at)))
                if len(reported) and texts[reported[0]] == level:
                    ring.append((float(reported[0]), height))
                lines.append((height, f"{SHORT.get(choice, '')} {level}".strip()))
            height -= 0.5
        self.marks.setData(np.concatenate(x), np.concatenate(y))
        self.ring.setData(*(np.array(ring).T if ring else ([], [])))
        self.names.named = lines
        self.names.picture = None
        self.grid.getViewBox().setRange(
            xRange=(-0.5, len(order) - 0.5), yRange=(height, 0.0), padding=0, disableAutoRange=True
        )
        self._lines = -height
        self._share_height()

    def _share_height(self) -> None:
        """Give the grid of choices its height, or leave it out where the positions would have no room."""
        room = self.plot.height() - FEWEST_PIXELS
        fits = room >= 0.7 * PIXELS_A_LINE * self._lines > 0
        show_below(self.grid, fits)
        self.grid.setFixedHeight(min(PIXELS_A_LINE * self._lines, room) if fits else 0)

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Share the height anew, and keep the words inside."""
        super().resizeEvent(event)
        self._share_height()
        self.said.setTextWidth(max(self.box.width() - 12.0, 60.0))

    def _say(self, peak: str) -> None:
        session, state = self.session, self.job.state
        self.say_heading(f"All analyses of peak {peak}" if peak else self.title)
        if session.traces is None or self.editor.fit is None:
            self.say_empty("How the position of a peak depends on choices will stand here once peaks are fitted.")
        elif self.job.error is not None:
            self.say_empty(str(self.job.error))
        elif self._shown is None:
            self.say_empty("Trying all analyses …" if state == "working" else "Waiting for the fit.")
        elif not len(self._order):
            self.say_empty("No other analysis of this peak could be defended.")
        else:
            self.say_empty("")
        doubtful = self._shown is not None and state in ("out of date", "working")
        self.say_state("out of date" if doubtful else "")

    # -- pointing ----------------------------------------------------------------------------------------------------

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Tell which analysis is under the pointer, and its height on the conductance axis."""
        shown, place = self._shown, round(x)
        if shown is None or not 0 <= place < len(self._order):
            return None
        row = int(self._order[place])
        words = ", ".join(f"{name}: {values[row]}" for name, values in shown.choices.items())
        self.plot.setToolTip(f"{typeset.conductance(float(shown.position_g0[row]))} — {words}")
        return Hover(self.editor.u_of(float(shown.position_g0[row])))

    def data(self) -> PlotData | None:
        """Return all analyses of the peak, one row each."""
        found: DefensibleAnalyses | None = self.job.result
        return None if found is None else PlotData("all analyses", dict(found.take(found.peak == self.peak).columns()))
