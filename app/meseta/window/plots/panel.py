"""The panel that every plot is: a quiet heading, the plot, and words where there is nothing to draw yet."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QPointF, QRectF, Qt, QTimer
from PySide6.QtGui import QContextMenuEvent, QGuiApplication, QResizeEvent
from PySide6.QtWidgets import QFileDialog, QHBoxLayout, QLabel, QMenu, QSizePolicy, QVBoxLayout, QWidget

from meseta import typeset
from meseta.window.elided import Elided
from meseta.window.frame import Frame
from meseta.window.plots.gestures import GestureBox
from meseta.window.plots.ticks import Axis, ConductanceAxis
from meseta.window.session import Hover, Span
from meseta.window.theme import Theme

__all__ = ["HEADING_MARGINS", "PlotData", "PlotPanel", "SpinePanel", "show_below"]

GUIDES_LOGARITHMIC = (1, 2, 3)
GUIDES_LINEAR = tuple(range(1, 11))
BOTTOM_PIXELS = 38
TOP_PIXELS = 4
HEADER_PIXELS = 28
HEADING_MARGINS = 28
"""Pixels of a heading that are no words: margins and the space between."""


@dataclass(frozen=True)
class PlotData:
    """The numbers behind a plot, as columns, for copying and export."""

    name: str
    columns: dict[str, npt.NDArray[Any]]


class PlotPanel(QWidget):
    """Heading, plot and empty state.  Subclasses fill the plot and say what its data are."""

    title = ""
    shorter: tuple[str, ...] = ()
    """Shorter forms of the heading for narrow panels, longest first."""
    help_page = ""
    object_name = "plot"

    def __init__(self, frame: Frame, bottom: pg.AxisItem, left: pg.AxisItem) -> None:
        super().__init__()
        self.frame, self.session = frame, frame.session
        self.setObjectName(self.object_name)
        self.setProperty("role", "panel")
        self.setAttribute(Qt.WidgetAttribute.WA_StyledBackground, True)
        self.setAccessibleName(self.title)
        self.box = GestureBox()
        self.left, self.bottom = left, bottom
        self.plot = pg.PlotWidget(viewBox=self.box, axisItems={"left": left, "bottom": bottom}, background=None)
        self._prepare_plot()
        self.header = QWidget()
        self.heading = Elided(self.title, "title", self.shorter)
        self.note = Elided("")
        self.note.hide()
        self.state = Elided("", "doubtful", shorter=("…",))
        self.state.hide()
        self.corner = QHBoxLayout()
        self.empty = QLabel("", self.plot)
        self._lay_out()
        self._titled = True
        frame.themes.changed.connect(self.wear)

    def _prepare_plot(self) -> None:
        item = self.plot.getPlotItem()
        item.hideButtons()
        item.setMenuEnabled(False)
        item.setContentsMargins(0, TOP_PIXELS, 0, 0)
        item.layout.setContentsMargins(0, TOP_PIXELS, 8, 3)
        self.bottom.setHeight(BOTTOM_PIXELS)
        self.plot.setContextMenuPolicy(Qt.ContextMenuPolicy.NoContextMenu)
        self.plot.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.plot.setFrameShape(pg.QtWidgets.QFrame.Shape.NoFrame)
        self.plot.setAccessibleName(self.title)
        self.plot.setMinimumSize(120, 90)
        self.plot.scene().sigMouseMoved.connect(self._mouse_moved)

    def _lay_out(self) -> None:
        self.header.setProperty("role", "panel")
        self.header.setAttribute(Qt.WidgetAttribute.WA_StyledBackground, True)
        self.header.setFixedHeight(max(HEADER_PIXELS, self.fontMetrics().height() + 10))
        top = QHBoxLayout(self.header)
        top.setContentsMargins(12, 4, 8, 0)
        top.setSpacing(8)
        top.addWidget(self.heading, 1)
        top.addWidget(self.note, 6)
        top.addWidget(self.state)
        self.corner.setSpacing(4)
        top.addLayout(self.corner)
        self.empty.setAlignment(Qt.AlignmentFlag.AlignCenter)
        self.empty.setWordWrap(True)
        self.empty.setProperty("tone", "quiet")
        self.empty.setAttribute(Qt.WidgetAttribute.WA_TransparentForMouseEvents)
        self.empty.hide()
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(0)
        column.addWidget(self.header)
        column.addWidget(self.plot, 1)

    # -- to be said by subclasses ------------------------------------------------------------------------------------

    def data(self) -> PlotData | None:
        """Return the numbers behind the plot; None where there are none."""
        return None

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        self.plot.setBackground(theme.palette.panel)
        self.left.wear(theme)
        self.bottom.wear(theme)

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Return what the pointer points at."""
        return None

    def menu_entries(self) -> list[tuple[str, Callable[[], None]]]:
        """Return further entries of the context menu."""
        return []

    # -- words -------------------------------------------------------------------------------------------------------

    def say_empty(self, text: str) -> None:
        """Show what to do next in place of a picture; an empty text shows the picture."""
        if text != self.empty.text():
            self.empty.setText(text)
        self.empty.setVisible(bool(text))
        self._place_empty()

    def say_state(self, text: str) -> None:
        """Show a word of doubt beside the heading ("out of date")."""
        self.state.say(text)
        self.state.setVisible(bool(text))

    def say_note(self, text: str) -> None:
        """Write a quiet line beside the heading; all of it is its tool tip where it does not fit."""
        self.note.say(text)
        self.note.setVisible(bool(text))
        wide = QSizePolicy.Policy.Preferred if text or self.shorter else QSizePolicy.Policy.Ignored
        self.heading.setSizePolicy(wide, QSizePolicy.Policy.Fixed)
        top = self.header.layout()
        if isinstance(top, QHBoxLayout):
            top.setStretch(0, 0 if text else 1)

    def say_heading(self, text: str) -> None:
        """Write the heading."""
        self.heading.say(text)
        self.title_said(self._titled)

    def title_said(self, said: bool) -> None:
        """Leave the heading out where a tab says the same; one that says more than the title stays."""
        self._titled = said
        self.heading.setVisible(said or self.heading.text() != self.title)

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Keep the words in the middle."""
        super().resizeEvent(event)
        self._place_empty()

    def _place_empty(self) -> None:
        width, height = self.plot.width(), self.plot.height()
        self.empty.setGeometry(24, 0, max(width - 48, 40), max(height - BOTTOM_PIXELS, 40))

    # -- mouse and menu ----------------------------------------------------------------------------------------------

    def _mouse_moved(self, place: QPointF) -> None:
        if not self.box.sceneBoundingRect().contains(place):
            return
        point = self.box.mapSceneToView(place)
        self.session.hover(self.hover_at(point.x(), point.y()))

    def leaveEvent(self, event: Any) -> None:
        """Take the hover line away."""
        super().leaveEvent(event)
        self.session.hover(None)

    def contextMenuEvent(self, event: QContextMenuEvent) -> None:
        """Offer the data, the picture and the help."""
        menu = self.context_menu()
        menu.popup(event.globalPos())
        menu.aboutToHide.connect(lambda: QTimer.singleShot(0, menu.deleteLater))

    def context_menu(self) -> QMenu:
        """Return the menu of the right button."""
        menu = QMenu(self)
        for text, function in self.menu_entries():
            menu.addAction(text, function)
        if not menu.isEmpty():
            menu.addSeparator()
        copy = menu.addAction("Copy data", self.copy_data)
        save = menu.addAction("Export data as CSV …", self.export_data)
        for action in (copy, save):
            action.setEnabled(self.data() is not None)
        menu.addAction("Copy picture", self.copy_picture)
        menu.addAction("Save picture …", self.save_picture)
        if self.help_page:
            menu.addSeparator()
            menu.addAction(
                f"About the {self.title[:1].lower()}{self.title[1:]}", lambda: self.frame.show_help(self.help_page)
            )
        return menu

    def copy_data(self) -> None:
        """Put the numbers on the clipboard, tab-separated, with a heading line."""
        data = self.data()
        if data is None:
            return
        rows = zip(*(column.tolist() for column in data.columns.values()), strict=True)
        lines = ["\t".join(data.columns), *("\t".join(_cell(value) for value in row) for row in rows)]
        QGuiApplication.clipboard().setText("\n".join(lines))
        self.frame.say(f"{typeset.integer(len(lines) - 1)} rows of the {data.name} copied")

    def export_data(self) -> None:
        """Write the numbers as CSV where the user says."""
        data = self.data()
        if data is not None:
            self.frame.export_columns(data.name, data.columns)

    def copy_picture(self) -> None:
        """Put the panel on the clipboard as a picture."""
        QGuiApplication.clipboard().setPixmap(self.grab())
        self.frame.say("picture copied")

    def save_picture(self) -> None:
        """Save the panel as a PNG picture where the user says."""
        path, _ = QFileDialog.getSaveFileName(self, "Save picture", f"{self.object_name}.png", "PNG (*.png)")
        if path and not self.grab().save(path):
            self.frame.say(f"{path} could not be written")


def _cell(value: Any) -> str:
    if isinstance(value, float):
        return "" if np.isnan(value) else repr(value)
    return str(value)


class SpinePanel(PlotPanel):
    """A panel on the shared conductance axis: guides at n G0, the hover line, zoom and pan in common."""

    def __init__(self, frame: Frame, bottom: pg.AxisItem) -> None:
        self.conductance = ConductanceAxis()
        super().__init__(frame, bottom, self.conductance)
        self.guides: list[pg.InfiniteLine] = []
        self.hover_line = pg.InfiniteLine(angle=0, movable=False)
        self.hover_line.setZValue(40)
        self.hover_line.hide()
        self.box.addItem(self.hover_line, ignoreBounds=True)
        self.show_scale(True)
        self._make_guides()
        session = self.session
        session.span_changed.connect(self._span_changed)
        session.hover_moved.connect(self._hover_moved)
        self.box.zoomed.connect(self._zoomed)
        self.box.moved.connect(self._moved)
        self.box.double_clicked.connect(self.double_clicked)
        self._span_changed(session.span)

    def show_scale(self, shown: bool) -> None:
        """Show the tick labels (the leftmost panel) or ticks alone (the others)."""
        self.conductance.setStyle(showValues=shown)
        self.conductance.show_name(shown)
        self.conductance.setWidth(64 if shown else 8)

    def _make_guides(self) -> None:
        for line in self.guides:
            self.box.removeItem(line)
        numbers = GUIDES_LOGARITHMIC if self.session.axis == "logarithmic" else GUIDES_LINEAR
        self.guides = []
        for n in numbers:
            height = float(np.log10(n)) if self.session.axis == "logarithmic" else float(n)
            line = pg.InfiniteLine(pos=height, angle=0, movable=False, pen=self.frame.theme.pen("hairline"))
            line.setZValue(-20 if not self.guides_above else 5)
            self.box.addItem(line, ignoreBounds=True)
            self.guides.append(line)

    guides_above = False

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        super().wear(theme)
        self.hover_line.setPen(theme.pen("quiet", dotted=True))
        for line in self.guides:
            line.setPen(theme.pen("hairline"))

    def _span_changed(self, span: Span) -> None:
        logarithmic = self.session.axis == "logarithmic"
        if logarithmic != self.conductance.logarithmic:
            self.conductance.set_logarithmic(logarithmic)
            self._make_guides()
        self.box.setYRange(span.low, span.high, padding=0)

    def _hover_moved(self, hover: Hover | None) -> None:
        if hover is None:
            self.hover_line.hide()
            return
        self.hover_line.setPos(hover.u)
        self.hover_line.show()

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Return the height of the pointer on the conductance axis."""
        return Hover(y)

    def _zoomed(self, x_factor: float, y_factor: float, x: float, y: float) -> None:
        if y_factor != 1.0:
            self.session.set_span(self.session.span.zoomed(y_factor, y))
        if x_factor != 1.0:
            self.zoom_across(x_factor, x)

    def _moved(self, x: float, y: float) -> None:
        self.session.set_span(self.session.span.moved(y))
        self.move_across(x)

    def double_clicked(self, x: float, y: float) -> None:
        """Show the whole of both axes."""
        self.frame.reset_view()

    def zoom_across(self, factor: float, around: float) -> None:
        """Zoom the axis that is this panel's own."""

    def move_across(self, by: float) -> None:
        """Move the axis that is this panel's own."""


class DrivePanel(SpinePanel):
    """A panel whose own axis is the displacement, which it shares with others of its kind."""

    def __init__(self, frame: Frame, bottom: pg.AxisItem) -> None:
        super().__init__(frame, bottom)
        self.session.drive_span_changed.connect(self._drive_span_changed)
        self._drive_span_changed(self.session.drive_span)

    def _drive_span_changed(self, span: tuple[float, float]) -> None:
        self.box.setXRange(*span, padding=0)

    def zoom_across(self, factor: float, around: float) -> None:
        """Zoom the displacement axis."""
        low, high = self.session.drive_span
        self.session.set_drive_span(around - (around - low) * factor, around + (high - around) * factor)

    def move_across(self, by: float) -> None:
        """Move along the displacement axis."""
        low, high = self.session.drive_span
        self.session.set_drive_span(low + by, high + by)

    def hover_at(self, x: float, y: float) -> Hover | None:
        """Return conductance and displacement under the pointer."""
        return Hover(y, x, self.session.drive_unit)


def show_below(item: pg.PlotItem, shown: bool) -> None:
    """Show or hide a plot below the first one; axes hidden with it lost their room, and ask for it again."""
    if shown == item.isVisible():
        return
    item.setVisible(shown)
    for name in ("left", "bottom") if shown else ():
        axis = item.getAxis(name)
        if isinstance(axis, Axis):
            axis.refit()


def rectangle(x0: float, x1: float, y0: float, y1: float) -> QRectF:
    """Return the rectangle between two corners."""
    return QRectF(min(x0, x1), min(y0, y1), abs(x1 - x0), abs(y1 - y0))
