"""A table with its filter line: sort by heading, filter, jump to the trace, copy, export."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt
from PySide6.QtCore import QEvent, QModelIndex, QObject, QPoint, Qt, QTimer
from PySide6.QtGui import QGuiApplication, QKeySequence, QShortcut
from PySide6.QtWidgets import (
    QAbstractItemView,
    QHBoxLayout,
    QHeaderView,
    QLabel,
    QLineEdit,
    QMenu,
    QTableView,
    QVBoxLayout,
    QWidget,
)

from meseta import typeset
from meseta.errors import CallError
from meseta.window.frame import Frame
from meseta.window.tables.filters import mask_for
from meseta.window.tables.model import Column, ColumnModel
from meseta.window.theme import fixed_digits

__all__ = ["TablePanel"]

COPIED_AT_MOST = 1_000_000
CELL_MARGINS = 18
"""Pixels of a column that are no text."""
TYPICAL_ROWS = 40
"""Rows looked at for the width of a column."""
EXTREMES_AMONG = 5_000
"""Rows among which the extremes are looked for."""


class TablePanel(QWidget):
    """A table and its filter line.

    Parameters
    ----------
    frame : Frame
    name : str
        As messages and exports call it ("plateaus").
    columns : tuple of Column
    jump : callable, optional
        Takes a row of the data: what Enter or a double click does.
    empty : str
        What stands there while there is nothing.
    filtered : bool
        Whether it has a filter line.
    elastic : str
        Column of long texts that takes the width the others leave, broken into lines.
    """

    def __init__(
        self,
        frame: Frame,
        name: str,
        columns: tuple[Column, ...],
        *,
        jump: Callable[[int], None] | None = None,
        empty: str = "",
        filtered: bool = True,
        elastic: str = "",
    ) -> None:
        super().__init__()
        self.frame, self.name, self._jump, self._empty = frame, name, jump, empty
        self.model = ColumnModel(columns)
        self.view = QTableView()
        self.filter = QLineEdit()
        self.count = QLabel("")
        self.words = QLabel(empty)
        self._widths: list[int] = []
        self._by_hand = self._sharing = False
        self._elastic = bool(elastic)
        self._prepare(filtered)
        self.view.viewport().installEventFilter(self)
        self.view.horizontalHeader().sectionResized.connect(self._resized)
        if elastic:
            self._stretch(elastic)
        self.menu_entries: list[tuple[str, Callable[[], None]]] = []
        self._later = QTimer(self)
        self._later.setSingleShot(True)
        self._later.setInterval(150)
        self._later.timeout.connect(self._apply_filter)

    def _prepare(self, filtered: bool) -> None:
        view = self.view
        view.setModel(self.model)
        view.setAccessibleName(f"Table of {self.name}")
        view.setFont(fixed_digits(view.font()))
        view.setSortingEnabled(True)
        view.horizontalHeader().setSortIndicator(-1, Qt.SortOrder.AscendingOrder)
        view.horizontalHeader().setHighlightSections(False)
        view.horizontalHeader().setStretchLastSection(True)
        view.verticalHeader().hide()
        view.verticalHeader().setDefaultSectionSize(view.fontMetrics().height() + 8)
        view.setShowGrid(False)
        view.setWordWrap(False)
        view.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        view.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
        view.setContextMenuPolicy(Qt.ContextMenuPolicy.CustomContextMenu)
        view.customContextMenuRequested.connect(self._menu)
        view.setTabKeyNavigation(False)
        view.activated.connect(self._activated)
        view.setHorizontalScrollMode(QAbstractItemView.ScrollMode.ScrollPerPixel)
        copy = QShortcut(QKeySequence(QKeySequence.StandardKey.Copy), view)
        copy.setContext(Qt.ShortcutContext.WidgetShortcut)
        copy.activated.connect(self.copy)
        self.filter.setPlaceholderText("filter: level_g0 > 1e-4 and …" if self.name == "plateaus" else "filter")
        self.filter.setAccessibleName(f"Filter the {self.name}")
        self.filter.setClearButtonEnabled(True)
        self.filter.textChanged.connect(lambda _: self._later.start())
        self.count.setProperty("tone", "quiet")
        self.words.setProperty("tone", "quiet")
        self.words.setWordWrap(True)
        self.words.setAlignment(Qt.AlignmentFlag.AlignTop)
        line = QHBoxLayout()
        line.addWidget(self.filter, 1)
        line.addWidget(self.count)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(4)
        if filtered:
            column.addLayout(line)
        column.addWidget(self.view, 1)
        column.addWidget(self.words, 1)
        self.filter.setVisible(filtered)
        self._say()

    def _stretch(self, name: str) -> None:
        header = self.view.horizontalHeader()
        header.setStretchLastSection(False)
        place = [column.name for column in self.model.columns].index(name)
        header.setSectionResizeMode(place, QHeaderView.ResizeMode.Stretch)
        self.view.setWordWrap(True)
        self.view.setShowGrid(True)
        self.view.verticalHeader().setSectionResizeMode(QHeaderView.ResizeMode.ResizeToContents)

    # -- content -----------------------------------------------------------------------------------------------------

    def show_columns(self, data: Mapping[str, npt.NDArray[Any]]) -> None:
        """Show other data under the same filter and order."""
        self.model.set_columns(data)
        self._apply_filter()
        self._fit_columns()

    def _fit_columns(self) -> None:
        if self._by_hand:
            return
        metrics = self.view.fontMetrics()
        widths: list[int] = []
        for place, column in enumerate(self.model.columns):
            values = self.model.data_columns.get(column.name, ())
            # Whatever the order and the filter, no number may lose its end: "5.34 …" hides the power of ten.
            shown = [column.title, *(str(column.show(values[row], row) or "") for row in _typical(np.asarray(values)))]
            width = max(metrics.horizontalAdvance(text) for text in shown) + CELL_MARGINS
            widths.append(0 if self.view.isColumnHidden(place) else min(max(width, 44), 220))
        self._widths = widths
        self._share_width()

    def _share_width(self) -> None:
        """Give the width to whole columns: what does not fit begins beyond the edge, to be scrolled to, never cut."""
        if self._by_hand or not self._widths:
            return
        reach = np.cumsum(self._widths)
        whole = max(int(np.searchsorted(reach, self.view.viewport().width(), side="right")), 1)
        spare = self.view.viewport().width() - int(reach[whole - 1])
        shown = sum(width > 0 for width in self._widths[:whole])
        self._sharing = True
        for place, width in enumerate(self._widths):
            more = spare // max(shown, 1) if place < whole < len(self._widths) and width else 0
            self.view.setColumnWidth(place, width + max(more, 0))
        self._sharing = False

    def _resized(self, place: int, *_: int) -> None:
        """Remember that the user chose the widths: they stay."""
        pulled = bool(QGuiApplication.mouseButtons() & Qt.MouseButton.LeftButton)
        if pulled and not self._sharing and place < len(self.model.columns) - 1:
            self._by_hand = True

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """Share the width anew when there is more or less of it."""
        if event.type() == QEvent.Type.Resize and not self._elastic:
            self._share_width()
        return False

    def _apply_filter(self) -> None:
        try:
            mask = mask_for(self.filter.text(), self.model.data_columns) if self.model.data_columns else None
        except CallError as error:
            self.count.setText("?")
            self.filter.setToolTip(str(error))
            self._mark(True)
            return
        self.filter.setToolTip("Comparisons of columns joined by 'and', or words to look for")
        self._mark(False)
        self.model.set_mask(mask)
        self._say()

    def _mark(self, wrong: bool) -> None:
        if self.filter.property("wrong") != wrong:
            self.filter.setProperty("wrong", wrong)
            self.filter.style().unpolish(self.filter)
            self.filter.style().polish(self.filter)

    def _say(self) -> None:
        rows, shown = self.model.rows, self.model.rowCount()
        self.view.setVisible(bool(rows))
        self.words.setVisible(not rows)
        self.count.setText(
            typeset.integer(rows) if shown == rows else f"{typeset.integer(shown)} of {typeset.integer(rows)}"
        )

    # -- doing -------------------------------------------------------------------------------------------------------

    def chosen_rows(self) -> list[int]:
        """Return the rows of the data that are selected."""
        return [self.model.row_of(index.row()) for index in self.view.selectionModel().selectedRows()]

    def _activated(self, index: QModelIndex) -> None:
        if self._jump is not None and index.isValid():
            self._jump(self.model.row_of(index.row()))

    def copy(self) -> None:
        """Copy the selected rows, or all that are shown, tab-separated with a heading line."""
        chosen = [index.row() for index in self.view.selectionModel().selectedRows()]
        rows = sorted(chosen) if chosen else range(min(self.model.rowCount(), COPIED_AT_MOST))
        names = list(self.model.data_columns)
        columns = [self.model.data_columns[name] for name in names]
        lines = ["\t".join(names)]
        for shown in rows:
            row = self.model.row_of(shown)
            lines.append("\t".join(_cell(column[row]) for column in columns))
        QGuiApplication.clipboard().setText("\n".join(lines))
        self.frame.say(f"{typeset.integer(len(lines) - 1)} rows of the {self.name} copied")

    def export(self) -> None:
        """Write the rows that are shown as CSV."""
        self.frame.export_columns(self.name, self.model.shown_columns())

    def _menu(self, place: QPoint) -> None:
        menu = QMenu(self)
        index = self.view.indexAt(place)
        if self._jump is not None and index.isValid():
            menu.addAction("Go to the trace", lambda: self._activated(index))
        for text, function in self.menu_entries:
            menu.addAction(text, function)
        menu.addAction("Copy", self.copy)
        menu.addAction("Export as CSV …", self.export)
        menu.popup(self.view.viewport().mapToGlobal(place))
        menu.aboutToHide.connect(lambda: QTimer.singleShot(0, menu.deleteLater))


def _typical(values: npt.NDArray[Any]) -> list[int]:
    """Return rows that stand for all in width: some over the whole, the extremes, and the number nearest to zero."""
    rows = set(np.linspace(0, len(values) - 1, min(len(values), TYPICAL_ROWS)).astype(int).tolist())
    if values.dtype.kind in "iuf":
        known = np.arange(0, len(values), max(len(values) // EXTREMES_AMONG, 1))
        known = known[np.isfinite(values[known]) & (values[known] != 0)]
        if len(known):
            numbers = values[known]
            rows |= {int(known[place]) for place in (numbers.argmin(), numbers.argmax(), np.abs(numbers).argmin())}
    return sorted(rows)


def _cell(value: Any) -> str:
    text = str(value.item() if hasattr(value, "item") else value)
    return "" if text == "nan" else text
