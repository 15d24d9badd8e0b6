"""Decay constant: an editable table of lengths and conductances, the fit with its band, and what it says."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import Qt, QTimer
from PySide6.QtGui import QGuiApplication, QKeySequence, QShortcut
from PySide6.QtWidgets import (
    QFileDialog,
    QHBoxLayout,
    QLabel,
    QLineEdit,
    QTableWidget,
    QTableWidgetItem,
    QToolButton,
    QVBoxLayout,
)

from meseta import typeset
from meseta.errors import InputError, MesetaError
from meseta.selection.decisions import LengthSeries
from meseta.window.frame import Frame
from meseta.window.jobs import Channel
from meseta.window.on_demand import OnDemand, Wanted
from meseta.window.peak_editing import PeakEditor
from meseta.window.plots.panel import PlotData, PlotPanel
from meseta.window.plots.ticks import ConductanceAxis, PlainAxis
from meseta.window.session import Hover
from meseta.window.theme import Theme, fixed_digits
from meseta.window.views.decay.keeping import SeriesKeeper
from meseta.window.views.decay.points import COLUMNS, Cells, cells_of, pasted, points_of
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.peaks import Decay, DecayPoints

__all__ = ["DecayPanel"]

Floats = npt.NDArray[np.float64]
FIT, READ = Channel("decay", quick=True, shown=False), Channel("decay points", quick=True, shown=False)
TITLES = ("length", f"G / {typeset.G0}", "± length", f"± G / {typeset.G0}", "label")
SPARE_ROWS = 3


@dataclass(frozen=True)
class _Drawn:
    """A fit and its line and band as drawn."""

    fit: Decay
    length: Floats
    middle: Floats
    low: Floats
    high: Floats


class DecayPanel(PlotPanel):
    """Length series and decay constant."""

    title = "Decay constant"
    help_page = "peaks"
    object_name = "decay"

    def __init__(self, frame: Frame) -> None:
        self.up = ConductanceAxis("left")
        super().__init__(frame, PlainAxis("bottom", "length"), self.up)
        self.up.setWidth(64)
        self.plot.setMinimumHeight(180)
        self.low, self.high = pg.PlotCurveItem(), pg.PlotCurveItem()
        self.band = pg.FillBetweenItem(self.low, self.high)
        self.line, self.bars = pg.PlotCurveItem(antialias=False), pg.PlotCurveItem(connect="pairs")
        self.points = pg.ScatterPlotItem(size=8, symbol="o")
        for z, item in enumerate((self.band, self.line, self.bars, self.points)):
            item.setZValue(z)
            self.box.addItem(item, ignoreBounds=True)
        self.names: list[pg.TextItem] = []
        self.table, self.unit = QTableWidget(SPARE_ROWS, len(COLUMNS)), QLineEdit("nm")
        self.said = QLabel("")
        self._points: DecayPoints | None = None
        self._error: MesetaError | None = None
        self._filling = False
        self.keeper = SeriesKeeper(frame.session, self.series, self.show_series)
        self._prepare()
        self._lay_below()
        self._soon = QTimer(self)
        self._soon.setSingleShot(True)
        self._soon.setInterval(50)
        self._soon.timeout.connect(self._read_cells)
        self.job = OnDemand(self, frame.session, FIT, "decay constant", self._wanted, self._draw)
        self.wear(frame.theme)
        self._draw()

    def _prepare(self) -> None:
        table = self.table
        table.setHorizontalHeaderLabels(list(TITLES))
        table.verticalHeader().hide()
        table.setAccessibleName("Points of the length series")
        table.setFont(fixed_digits(table.font()))
        table.setShowGrid(False)
        table.verticalHeader().setDefaultSectionSize(table.fontMetrics().height() + 8)
        table.horizontalHeader().setStretchLastSection(True)
        for column in range(len(COLUMNS)):
            table.setColumnWidth(column, 78)
        table.setMinimumHeight(90)
        table.itemChanged.connect(lambda _: None if self._filling else self._soon.start())
        for keys, function in ((QKeySequence.StandardKey.Paste, self.paste), (QKeySequence("Del"), self.remove_rows)):
            key = QShortcut(QKeySequence(keys), table)
            key.setContext(Qt.ShortcutContext.WidgetShortcut)
            key.activated.connect(function)
        self.unit.setMaximumWidth(90)
        self.unit.setAccessibleName("Unit of length")
        self.unit.setToolTip("What a length counts: nm, angstrom, carbon, ring; the decay constant is per this unit")
        self.unit.editingFinished.connect(self._read_cells)
        self.said.setWordWrap(True)
        self.said.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.said.setAccessibleName("The fit in words")

    def _lay_below(self) -> None:
        tools = QHBoxLayout()
        tools.setSpacing(0)
        for text, tip, function in (
            ("Open …", "Read points from a CSV file with the columns " + ", ".join(COLUMNS), self.ask_file),
            ("Paste", "Take points from the clipboard (Ctrl+V in the table)", self.paste),
            ("Add the peak", "Add the chosen peak of the fit; write its length yourself", self.add_peak),
            ("Remove", "Remove the selected rows (Delete)", self.remove_rows),
        ):
            button = QToolButton()
            button.setText(text)
            button.setToolTip(tip)
            button.setAccessibleName(tip)
            button.setAutoRaise(True)
            button.clicked.connect(function)
            tools.addWidget(button)
        tools.addStretch(1)
        tools.addWidget(QLabel("per "))
        tools.addWidget(self.unit)
        column = self.layout()
        assert isinstance(column, QVBoxLayout)
        below = QVBoxLayout()
        below.setContentsMargins(12, 0, 12, 8)
        below.setSpacing(4)
        below.addWidget(self.said)
        below.addLayout(tools)
        below.addWidget(self.table, 1)
        column.addLayout(below, 2)
        column.setStretch(1, 3)

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.band.setBrush(pg.mkBrush(theme.colour("fit", 40)))
        self.line.setPen(theme.wide_pen("fit", 1.0, dashed=True))
        self.bars.setPen(theme.pen("selected"))
        self.points.setPen(theme.pen("selected"))
        self.points.setBrush(pg.mkBrush(theme.colour("panel")))
        for name in self.names:
            name.setColor(theme.palette.quiet)

    # -- points ------------------------------------------------------------------------------------------------------

    def cells(self) -> Cells:
        """Return what stands in the table."""
        return tuple(
            tuple(item.text() if (item := self.table.item(row, column)) is not None else "" for column in range(5))
            for row in range(self.table.rowCount())
        )

    def fill(self, cells: Cells) -> None:
        """Write rows into the table, some empty ones after them."""
        kept = tuple(row for row in cells if any(cell.strip() for cell in row))
        self._filling = True
        try:
            self.table.setRowCount(len(kept) + SPARE_ROWS)
            for row in range(self.table.rowCount()):
                for column in range(len(COLUMNS)):
                    item = QTableWidgetItem(kept[row][column] if row < len(kept) else "")
                    if column < 4:
                        item.setTextAlignment(Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)
                    self.table.setItem(row, column, item)
        finally:
            self._filling = False
        self._read_cells()

    def _read_cells(self) -> None:
        self._soon.stop()
        try:
            self._points, self._error = points_of(self.cells(), self.unit.text()), None
        except InputError as error:
            self._points, self._error = None, error
        last = self.cells()[-1]
        if any(cell.strip() for cell in last):
            self.fill(self.cells())
            return
        self.keeper.keep()
        self.job.ask()
        self._draw()

    def series(self) -> LengthSeries:
        """Return what stands in the table, without its empty rows."""
        rows = tuple(row for row in self.cells() if any(cell.strip() for cell in row))
        return LengthSeries(self.unit.text().strip() or "nm", rows)

    def show_series(self, series: LengthSeries) -> None:
        """Write a series into the table."""
        self.unit.setText(series.unit)
        self.fill(series.rows)

    def ask_file(self) -> None:
        """Ask for a CSV file of points."""
        path, _ = QFileDialog.getOpenFileName(self, "Open the points of a length series", "", "CSV (*.csv);;All (*)")
        if path:
            self.open_points(path)

    def open_points(self, path: str) -> None:
        """Read points from a CSV file."""
        unit = self.unit.text()

        def task(_: Work, __: Callable[[Any], None]) -> DecayPoints:
            from meseta.peaks import read_points

            return read_points(path, unit)

        self.session.jobs.submit(
            READ, "reading points", task, lambda points: self.fill(cells_of(points)), self._not_read
        )

    def _not_read(self, error: MesetaError) -> None:
        self.session.problem.emit(error)
        self.said.setText(str(error))

    def paste(self) -> None:
        """Add the points on the clipboard."""
        rows = pasted(QGuiApplication.clipboard().text())
        if rows:
            self.fill((*self.cells(), *rows))
        else:
            self.frame.say("there are no points on the clipboard")

    def add_peak(self) -> None:
        """Add the chosen peak's conductance; its length is for the user to write."""
        editor = PeakEditor.of(self.session)
        if editor.chosen < 0:
            self.frame.say("choose a peak first: click it on the histogram or in the table of peaks")
            return
        position = f"{editor.position_of(editor.chosen):.6g}"
        self.fill((*self.cells(), ("", position, "", "", editor.name_of(editor.chosen))))
        row = self.table.rowCount() - SPARE_ROWS - 1
        self.table.setCurrentCell(row, 0)
        item = self.table.item(row, 0)
        if item is not None:
            self.table.editItem(item)

    def remove_rows(self) -> None:
        """Remove the selected rows."""
        chosen = {index.row() for index in self.table.selectedIndexes()}
        self.fill(tuple(row for number, row in enumerate(self.cells()) if number not in chosen))

    # -- fit ---------------------------------------------------------------------------------------------------------

    def _wanted(self) -> Wanted | None:
        points = self._points
        if points is None:
            return None

        def task(_: Work, __: Callable[[Any], None]) -> _Drawn:
            from meseta.peaks import decay

            fit = decay(points)
            low, high = min(0.0, float(points.length.min())), float(points.length.max())
            length = np.linspace(low, high + 0.06 * (high - low), 200)
            return _Drawn(fit, length, *fit.band(length))

        return (self.cells(), self.unit.text()), task

    def _draw(self) -> None:
        drawn: _Drawn | None = self.job.result if self._points is not None and self.job.error is None else None
        for item in (self.band, self.line, self.bars, self.points):
            item.setVisible(drawn is not None)
        while self.names:
            self.box.removeItem(self.names.pop())
        if drawn is not None:
            self._draw_fit(drawn)
        self._say(drawn)

    def _draw_fit(self, drawn: _Drawn) -> None:
        points = drawn.fit.points
        u = np.log10(points.conductance_g0)
        self.line.setData(drawn.length, np.log10(drawn.middle))
        known = np.isfinite(drawn.low) & np.isfinite(drawn.high) & (drawn.low > 0)
        self.low.setData(drawn.length[known], np.log10(drawn.low[known]))
        self.high.setData(drawn.length[known], np.log10(drawn.high[known]))
        self.points.setData(points.length, u)
        self.bars.setData(*_bars(points))
        for length, height, label in zip(points.length, u, points.label, strict=True):
            if label:
                name = pg.TextItem(str(label), anchor=(0, 1), color=self.frame.theme.palette.quiet)
                name.setPos(float(length), float(height))
                self.box.addItem(name, ignoreBounds=True)
                self.names.append(name)
        self.box.setXRange(float(drawn.length[0]), float(drawn.length[-1]), padding=0.02)
        shown = np.concatenate([np.log10(drawn.middle), u])
        self.box.setYRange(float(shown.min()) - 0.3, float(shown.max()) + 0.3, padding=0)
        self.bottom.say(f"length ({points.length_unit})")

    def _say(self, drawn: _Drawn | None) -> None:
        error = self._error or self.job.error
        if self._points is None and error is None:
            self.say_empty("Write lengths and conductances below, paste them, or open a CSV file.")
            self.said.setText("")
        elif error is not None:
            self.say_empty("")
            self.said.setText(f"{error.what}. {error.remedy}".strip())
        elif drawn is not None:
            self.say_empty("")
            self.said.setText("\n".join(self.statements(drawn.fit)))
        doubtful = drawn is not None and self.job.state != "current"
        self.say_state("out of date" if doubtful else "")

    def statements(self, fit: Decay) -> list[str]:
        """Return the fit in words: decay constant with both errors, conductance at zero length, cautions."""
        unit = fit.points.length_unit
        beta = typeset.value_with_uncertainty(fit.beta, fit.beta_low, fit.beta_high)
        errors = f"standard error {typeset.number(fit.beta_sigma_scaled, 2)} from the scatter of the points"
        if fit.absolute:
            errors = f"standard error {typeset.number(fit.beta_sigma, 2)} from the stated errors, {errors[15:]}"
        said = [f"β = {beta} per {unit}, half width of 95 % in brackets; {errors}."]
        contact = f"At zero length {typeset.conductance(fit.contact_g0, 3)}"
        if np.isfinite(fit.contact_low_g0):
            contact += f" (95 %: {typeset.interval(fit.contact_low_g0, fit.contact_high_g0, 'G0')})"
        said.append(f"{contact}; {len(fit.points.length)} points, degrees of freedom: {fit.freedom}.")
        return said + [f"{note[:1].upper()}{note[1:]}." for note in fit.notes]

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Return the conductance under the pointer, where the plots show the same axis."""
        return Hover(y) if self.session.axis == "logarithmic" else None

    def data(self) -> PlotData | None:
        """Return line and band."""
        drawn: _Drawn | None = self.job.result
        if drawn is None:
            return None
        columns = {"length": drawn.length, "conductance_g0": drawn.middle, "low_g0": drawn.low, "high_g0": drawn.high}
        return PlotData("decay", columns)


def _bars(points: DecayPoints) -> tuple[Floats, Floats]:
    """Return the error bars as pairs of points; a bar that reaches zero runs off the plot."""
    u = np.log10(points.conductance_g0)
    up = np.isfinite(points.conductance_error_g0)
    across = np.isfinite(points.length_error)
    with np.errstate(divide="ignore", invalid="ignore"):
        below = np.log10(points.conductance_g0 - points.conductance_error_g0)
        above = np.log10(points.conductance_g0 + points.conductance_error_g0)
    below = np.where(np.isfinite(below), below, u - 10)
    sides = np.column_stack([points.length - points.length_error, points.length + points.length_error])
    x = [np.repeat(points.length[up], 2), sides[across].ravel()]
    y = [np.column_stack([below, above])[up].ravel(), np.repeat(u[across], 2)]
    return np.concatenate(x), np.concatenate(y)
