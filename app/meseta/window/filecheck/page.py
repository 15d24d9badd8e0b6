"""The page of the file check: what was recognised on the left, a live preview on the right, doubts in sentences."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pyqtgraph as pg
from PySide6.QtCore import Qt, Signal
from PySide6.QtWidgets import QHBoxLayout, QLabel, QPushButton, QScrollArea, QSplitter, QVBoxLayout, QWidget

from meseta import typeset
from meseta.errors import MesetaError
from meseta.recipe import Recipe
from meseta.recipe.calibration import CalibrationSettings
from meseta.recipe.cutting import CuttingSettings
from meseta.recipe.intake import IntakeSettings
from meseta.window.envelope import heights
from meseta.window.filecheck.channels import ChannelTable
from meseta.window.filecheck.draft import DraftFrame
from meseta.window.filecheck.kept import KEPT_SETTINGS, KeptLayouts
from meseta.window.filecheck.preview import CheckPicture, check_picture
from meseta.window.filecheck.remembered import RememberedLayouts
from meseta.window.forms import SectionForm
from meseta.window.frame import Frame
from meseta.window.jobs import Channel
from meseta.window.layouts import emptied
from meseta.window.plots.gestures import GestureBox
from meseta.window.plots.ticks import ConductanceAxis, PlainAxis
from meseta.window.theme import Theme

__all__ = ["FileCheck"]

CHECK = Channel("check", quick=True)
_LOWEST_U = -9.0


class FileCheck(QWidget):
    """Shows what files were taken for, lets it be corrected, and is accepted or left."""

    accepted = Signal(list, object)
    """Paths and the recipe they shall be read with."""
    left = Signal()

    def __init__(self, frame: Frame) -> None:
        super().__init__()
        self.frame = frame
        self.draft = DraftFrame(frame, frame.session.document.recipe)
        self.paths: list[str] = []
        self.picture: CheckPicture | None = None
        self.title, self.summary = QLabel(""), QLabel("")
        self.doubts = QVBoxLayout()
        self.channels = ChannelTable(self.draft.session)
        self.remembered = RememberedLayouts(frame.settings)
        self.kept = KeptLayouts(self.draft.session, self.remembered)
        self.forms = {
            "calibration": SectionForm(self.draft, "calibration", CalibrationSettings, "calibration"),
            "cutting": SectionForm(self.draft, "cutting", CuttingSettings, "cutting"),
            "intake": SectionForm(self.draft, "intake", IntakeSettings, "intake", leave_out=KEPT_SETTINGS),
        }
        self.accept_button, self.leave_button = QPushButton("Read these files"), QPushButton("Leave")
        self.raw, self.calibrated, self.conductance = _plot(PlainAxis("left")), *_calibrated_plot()
        self._raw_items: list[pg.PlotCurveItem] = []
        self._curve = pg.PlotCurveItem(antialias=False)
        self.calibrated.getPlotItem().vb.addItem(self._curve, ignoreBounds=True)
        self._lay_out()
        self.draft.session.document_changed.connect(lambda _: self._look_again())
        self.accept_button.clicked.connect(self.accept)
        self.leave_button.clicked.connect(self.left)
        frame.themes.changed.connect(self.wear)
        self.wear(frame.theme)

    # -- building ----------------------------------------------------------------------------------------------------

    def _lay_out(self) -> None:
        font = self.title.font()
        font.setBold(True)
        font.setPointSizeF(font.pointSizeF() * 1.25)
        self.title.setFont(font)
        for label in (self.title, self.summary):
            label.setWordWrap(True)
        self.summary.setProperty("tone", "quiet")
        inside = QWidget()
        column = QVBoxLayout(inside)
        column.setContentsMargins(16, 12, 16, 12)
        column.setSpacing(8)
        for widget in (self.title, self.summary):
            column.addWidget(widget)
        column.addLayout(self.doubts)
        column.addWidget(self.channels)
        column.addWidget(_heading("Kept layout"))
        column.addWidget(self.kept)
        for name, words in (("calibration", "Calibration"), ("cutting", "Cutting into traces"), ("intake", "Files")):
            column.addWidget(_heading(words))
            column.addWidget(self.forms[name])
        column.addStretch(1)
        area = QScrollArea()
        area.setWidget(inside)
        area.setWidgetResizable(True)
        area.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        area.setMinimumWidth(380)
        split = QSplitter(Qt.Orientation.Horizontal)
        split.addWidget(area)
        split.addWidget(self._preview_side())
        split.setSizes([440, 520])
        outer = QVBoxLayout(self)
        outer.setContentsMargins(0, 0, 0, 0)
        outer.addWidget(split, 1)
        outer.addLayout(self._buttons())

    def _preview_side(self) -> QWidget:
        side = QWidget()
        column = QVBoxLayout(side)
        column.setContentsMargins(8, 12, 16, 8)
        column.setSpacing(4)
        for words, plot in (("As recorded", self.raw), ("Calibrated, first traces", self.calibrated)):
            column.addWidget(_heading(words))
            plot.setAccessibleName(words)
            column.addWidget(plot, 1)
        return side

    def _buttons(self) -> QHBoxLayout:
        row = QHBoxLayout()
        row.setContentsMargins(16, 4, 16, 12)
        row.addStretch(1)
        row.addWidget(self.leave_button)
        row.addWidget(self.accept_button)
        for button in (self.accept_button, self.leave_button):
            button.setAutoDefault(True)
        return row

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        for plot in (self.raw, self.calibrated):
            plot.setBackground(theme.palette.panel)
            for side in ("left", "bottom"):
                plot.getPlotItem().getAxis(side).wear(theme)
        self._curve.setPen(theme.pen("ink"))
        for place, item in enumerate(self._raw_items):
            item.setPen(self._raw_pen(place))

    def _raw_pen(self, place: int) -> Any:
        theme = self.frame.theme
        kinds = (("ink", False), ("selected", False), ("fit", True), ("quiet", True))
        meaning, dashed = kinds[place % len(kinds)]
        return theme.pen(meaning, dashed=dashed)

    # -- looking -----------------------------------------------------------------------------------------------------

    def check(self, paths: list[str], recipe: Recipe) -> None:
        """Look at files with a recipe to begin with."""
        self.paths, self.picture = list(paths), None
        self.draft.session.undo.clear()
        self.draft.session.change_recipe("begin", recipe)
        self.title.setText("Looking at the files …")
        self.summary.setText("")
        self._say_doubts([])
        self.kept.begin()
        self.accept_button.setEnabled(False)
        self._look_again()

    def _look_again(self) -> None:
        if not self.paths:
            return
        paths, recipe, remembered = list(self.paths), self.draft.session.document.recipe, self.remembered.entries()

        def task(work: Any, _: Callable[[Any], None]) -> CheckPicture:
            return check_picture(paths, recipe, work, remembered)

        self.frame.session.jobs.submit(CHECK, "checking files", task, self._show, self._failed)

    def _failed(self, error: MesetaError) -> None:
        self.title.setText("These files cannot be read")
        self._say_doubts([str(error)])
        self.accept_button.setEnabled(False)

    def _show(self, picture: CheckPicture) -> None:
        first_look, self.picture = self.picture is None, picture
        self.channels.setVisible(bool(picture.described) or picture.misfit is None)
        if picture.misfit is not None:
            self.title.setText("These files do not fit the kept layout")
            self.summary.setText("Correct it, keep them as another, read them by another layout, or leave.")
        elif not picture.described:
            known = bool(self.channels.roles)
            self.title.setText("These files cannot be read like this" if known else "These files are not recognised")
            self.summary.setText("Correct what is wrong below, choose a reader or a layout, or leave.")
        else:
            self._say_recognised(picture)
        self._say_doubts(picture.sentences())
        self.kept.show_picture(picture)
        self.accept_button.setEnabled(picture.readable)
        self._draw(picture)
        if first_look:
            (self.accept_button if picture.readable else self.leave_button).setFocus()

    def _say_recognised(self, picture: CheckPicture) -> None:
        first = picture.described[0]
        more = f" and {typeset.integer(picture.files - 1)} more" if picture.files > 1 else ""
        self.title.setText(f"{first.file}{more}")
        closings = typeset.integer(first.traces - first.openings)
        traces = f"{typeset.integer(first.openings)} opening and {closings} closing traces"
        found = f"{first.reader}: {first.layout}. {typeset.integer(first.samples)} samples, {traces}."
        source = f" Conductance from {first.conductance_from}; {first.drive}." if first.conductance_from else ""
        beside = first.said_of_itself()
        self.summary.setText(found + source + (f" Known of it: {beside}." if beside else ""))
        self.channels.show_channels(first)

    def _say_doubts(self, sentences: list[str]) -> None:
        emptied(self.doubts)
        for sentence in sentences:
            label = QLabel(f"? {sentence}")
            label.setWordWrap(True)
            label.setProperty("tone", "doubtful")
            label.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
            self.doubts.addWidget(label)

    def _draw(self, picture: CheckPicture) -> None:
        box = self.raw.getPlotItem().vb
        for item in self._raw_items:
            box.removeItem(item)
        self._raw_items = []
        for place, raw in enumerate(picture.raw[:4]):
            item = pg.PlotCurveItem(antialias=False, pen=self._raw_pen(place))
            item.setData(raw.curve.x, raw.curve.g0, connect="finite")
            box.addItem(item, ignoreBounds=True)
            self._raw_items.append(item)
        names = [f"{raw.name} ({raw.unit})" if raw.unit else raw.name for raw in picture.raw[:4]]
        self.raw.getPlotItem().getAxis("bottom").say(
            "sample of the recording" + (f": {', '.join(names)}" if names else "")
        )
        _frame_all(box, [(raw.curve.x, raw.curve.g0) for raw in picture.raw[:4]])
        curve = picture.calibrated
        if curve is None:
            self._curve.setData([], [])
            return
        u = heights(curve.g0, "logarithmic", _LOWEST_U)
        self._curve.setData(curve.x, u, connect="finite")
        unit = picture.drive_unit
        words = "displacement from the start (nm)" if unit == "nm" else f"drive from the start ({unit})"
        self.calibrated.getPlotItem().getAxis("bottom").say(words)
        _frame_all(self.calibrated.getPlotItem().vb, [(curve.x, np.where(u > _LOWEST_U, u, np.nan))])

    def accept(self) -> None:
        """Read the files with the draft."""
        if self.picture is not None and self.picture.readable:
            paths, self.paths = self.paths, []
            recipe = self.draft.session.document.recipe
            self.remembered.add(recipe.intake.layouts_in_use())
            self.accepted.emit(paths, recipe)


def _heading(words: str) -> QLabel:
    label = QLabel(words)
    label.setProperty("tone", "title")
    return label


def _plot(left: pg.AxisItem) -> pg.PlotWidget:
    bottom = PlainAxis("bottom", "sample of the recording", whole=True)
    plot = pg.PlotWidget(viewBox=GestureBox(), axisItems={"left": left, "bottom": bottom}, background=None)
    item = plot.getPlotItem()
    item.hideButtons()
    item.setMenuEnabled(False)
    item.layout.setContentsMargins(0, 4, 8, 3)
    left.setWidth(64)
    bottom.setHeight(38)
    plot.setMinimumSize(160, 90)
    plot.setFrameShape(pg.QtWidgets.QFrame.Shape.NoFrame)
    return plot


def _calibrated_plot() -> tuple[pg.PlotWidget, ConductanceAxis]:
    conductance = ConductanceAxis()
    plot = _plot(conductance)
    plot.getPlotItem().setAxisItems({"bottom": PlainAxis("bottom", "displacement from the start (nm)")})
    plot.getPlotItem().getAxis("bottom").setHeight(38)
    return plot, conductance


def _frame_all(box: pg.ViewBox, curves: list[tuple[Any, Any]]) -> None:
    """Show all of some curves."""
    xs = [np.asarray(x)[np.isfinite(x)] for x, _ in curves if len(x)]
    ys = [np.asarray(y)[np.isfinite(y)] for _, y in curves if len(y)]
    if not any(len(x) for x in xs) or not any(len(y) for y in ys):
        return
    x, y = np.concatenate(xs), np.concatenate(ys)
    box.setXRange(float(x.min()), float(max(x.max(), x.min() + 1e-9)), padding=0.01)
    box.setYRange(float(y.min()), float(max(y.max(), y.min() + 1e-9)), padding=0.04)
