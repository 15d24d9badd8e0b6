"""A Qt model over columns of numpy arrays.  It keeps its own order of rows: sorting a million takes a blink."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from PySide6.QtCore import QAbstractTableModel, QModelIndex, QPersistentModelIndex, Qt

from meseta import typeset

__all__ = ["Column", "ColumnModel"]

Index = QModelIndex | QPersistentModelIndex


@dataclass(frozen=True)
class Column:
    """How a column is shown.

    Attributes
    ----------
    name : str
        Name in the table's data, and in exports.
    title : str
        As the heading shows it.
    show : callable
        (value, row of the data) -> text.
    help : str
        Tool tip of the heading.
    """

    name: str
    title: str
    show: Callable[[Any, int], str]
    help: str = ""


def plain(value: Any, _: int = 0) -> str:
    """Return a value as a cell shows it."""
    if isinstance(value, np.bool_ | bool):
        return "yes" if value else "no"
    if isinstance(value, np.integer | int):
        return typeset.integer(int(value))
    if isinstance(value, np.floating | float):
        return typeset.number(float(value))
    return str(value)


class ColumnModel(QAbstractTableModel):
    """Rows of equal-length columns, in an order and a choice of its own."""

    def __init__(self, columns: tuple[Column, ...]) -> None:
        super().__init__()
        self.columns = columns
        self.data_columns: Mapping[str, npt.NDArray[Any]] = {}
        self.order = np.empty(0, np.int64)
        self._mask: npt.NDArray[np.bool_] | None = None
        self._sorted_by, self._descending = "", False

    # -- content -----------------------------------------------------------------------------------------------------

    def set_columns(self, data: Mapping[str, npt.NDArray[Any]]) -> None:
        """Show other data, in the same order of sorting."""
        self.beginResetModel()
        self.data_columns = data
        self._mask = None
        self._arrange()
        self.endResetModel()

    def set_mask(self, mask: npt.NDArray[np.bool_] | None) -> None:
        """Show only the rows of a mask; None shows all."""
        self.beginResetModel()
        self._mask = mask
        self._arrange()
        self.endResetModel()

    @property
    def rows(self) -> int:
        """Rows in the data, shown or not."""
        return len(next(iter(self.data_columns.values()))) if self.data_columns else 0

    def _arrange(self) -> None:
        order = np.arange(self.rows, dtype=np.int64)
        if self._sorted_by in self.data_columns:
            column = np.asarray(self.data_columns[self._sorted_by])
            order = _sorted_rows(column, self._descending)
        if self._mask is not None and len(self._mask) == self.rows:
            order = order[self._mask[order]]
        self.order = order

    def shown_columns(self) -> dict[str, npt.NDArray[Any]]:
        """Return the data of the rows shown, in the order shown."""
        return {name: np.asarray(column)[self.order] for name, column in self.data_columns.items()}

    def row_of(self, shown: int) -> int:
        """Return the row of the data that stands in a row shown."""
        return int(self.order[shown])

    def shown_row(self, row: int) -> int:
        """Return where a row of the data is shown; -1 where it is not."""
        found = np.flatnonzero(self.order == row)
        return int(found[0]) if len(found) else -1

    # -- Qt's questions ----------------------------------------------------------------------------------------------

    def rowCount(self, parent: Index = QModelIndex()) -> int:  # noqa: B008 - Qt's name and form
        """Return the number of rows shown."""
        return 0 if parent.isValid() else len(self.order)

    def columnCount(self, parent: Index = QModelIndex()) -> int:  # noqa: B008 - Qt's name and form
        """Return the number of columns."""
        return 0 if parent.isValid() else len(self.columns)

    def data(self, index: Index, role: int = Qt.ItemDataRole.DisplayRole) -> Any:
        """Return the text of a cell, or how it stands."""
        if not index.isValid():
            return None
        column = self.columns[index.column()]
        if role in (Qt.ItemDataRole.DisplayRole, Qt.ItemDataRole.AccessibleTextRole, Qt.ItemDataRole.ToolTipRole):
            row = int(self.order[index.row()])
            return column.show(self.data_columns[column.name][row], row)
        if role == Qt.ItemDataRole.TextAlignmentRole:
            kind = np.asarray(self.data_columns[column.name]).dtype.kind
            side = Qt.AlignmentFlag.AlignRight if kind in "iuf" else Qt.AlignmentFlag.AlignLeft
            return int(side | Qt.AlignmentFlag.AlignVCenter)
        return None

    def headerData(self, section: int, orientation: Qt.Orientation, role: int = Qt.ItemDataRole.DisplayRole) -> Any:
        """Return the title of a column."""
        if orientation != Qt.Orientation.Horizontal:
            return None
        if role == Qt.ItemDataRole.DisplayRole:
            return self.columns[section].title
        if role == Qt.ItemDataRole.ToolTipRole:
            return self.columns[section].help or self.columns[section].name
        return None

    def sort(self, column: int, order: Qt.SortOrder = Qt.SortOrder.AscendingOrder) -> None:
        """Sort by a column; equal values keep the order of the data."""
        self.layoutAboutToBeChanged.emit()
        self._sorted_by = self.columns[column].name if 0 <= column < len(self.columns) else ""
        self._descending = order == Qt.SortOrder.DescendingOrder
        self._arrange()
        self.layoutChanged.emit()


def _sorted_rows(column: npt.NDArray[Any], descending: bool) -> npt.NDArray[np.int64]:
    """Return the rows in the order of their values, stable both ways; NaN last in either."""
    if column.dtype.kind == "f":
        known = ~np.isnan(column)
        rows, last = np.flatnonzero(known), np.flatnonzero(~known)
        values = -column[rows] if descending else column[rows]
        return np.concatenate([rows[np.argsort(values, kind="stable")], last])
    if not descending:
        return np.argsort(column, kind="stable")
    return len(column) - 1 - np.argsort(column[::-1], kind="stable")[::-1]
