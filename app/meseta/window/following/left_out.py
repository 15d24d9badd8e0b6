"""The list of files that could not be read, each with what is wrong and what to do."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QDialog, QHeaderView, QLabel, QTreeWidget, QTreeWidgetItem, QVBoxLayout, QWidget

from meseta import typeset
from meseta.errors import MesetaError

__all__ = ["LeftOut"]

SHOWN_FILES = 1000
HEADINGS = ("file", "what is wrong", "what to do")


class LeftOut(QDialog):
    """Stays beside the window and grows with what it lists."""

    def __init__(self, parent: QWidget) -> None:
        super().__init__(parent)
        self.setWindowTitle("Files left out")
        self.resize(820, 320)
        self.words, self.table = QLabel(""), QTreeWidget()
        self.table.setHeaderLabels(HEADINGS)
        self.table.setRootIsDecorated(False)
        self.table.setWordWrap(True)
        self.table.setTextElideMode(Qt.TextElideMode.ElideMiddle)
        self.table.setAccessibleName("Files left out")
        self.table.header().setSectionResizeMode(QHeaderView.ResizeMode.Stretch)
        column = QVBoxLayout(self)
        column.addWidget(self.words)
        column.addWidget(self.table)

    def show_files(self, errors: Sequence[MesetaError]) -> None:
        """List what is wrong with files."""
        more = f"; the first {typeset.integer(SHOWN_FILES)} are listed" if len(errors) > SHOWN_FILES else ""
        self.words.setText(f"{typeset.integer(len(errors))} left out{more}" if errors else "Every file was read.")
        rows = [(error.where, str(error.what), error.remedy) for error in errors[:SHOWN_FILES]]
        shown = [self._row(place) for place in range(self.table.topLevelItemCount())]
        if rows == shown:
            return
        self.table.clear()
        for row in rows:
            item = QTreeWidgetItem(list(row))
            for place, text in enumerate(row):
                item.setToolTip(place, text)
            self.table.addTopLevelItem(item)

    def _row(self, place: int) -> tuple[str, ...]:
        item = self.table.topLevelItem(place)
        assert item is not None
        return tuple(item.text(column) for column in range(len(HEADINGS)))
