"""Groups: named sets of traces with a colour and a symbol."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from PySide6.QtCore import QSize
from PySide6.QtWidgets import QVBoxLayout, QWidget

from meseta import typeset
from meseta.window.conditions import Condition
from meseta.window.frame import Frame
from meseta.window.groups import symbol_of
from meseta.window.session import Change
from meseta.window.tables.model import Column, plain
from meseta.window.tables.view import TablePanel

__all__ = ["GroupsPanel"]


class GroupsPanel(QWidget):
    """The groups and their sizes."""

    def __init__(self, frame: Frame) -> None:
        super().__init__()
        self.frame = frame
        columns = (
            Column("group", "group", lambda value, _: f"{symbol_of(frame.session, str(value))} {value}"),
            Column("traces", "traces", plain),
            Column(
                "share",
                "share",
                lambda value, _: typeset.percent(float(value), 1.0),
                "of the traces of the analysed direction",
            ),
        )
        self.table = TablePanel(
            frame,
            "groups",
            columns,
            jump=self._show_group,
            filtered=False,
            empty="Make a group of the traces that conditions pick; it gets a colour and a symbol.",
        )
        self.table.menu_entries = [
            ("Show as a condition", self._show_chosen),
            ("Remove the group", self._remove_chosen),
        ]
        column = QVBoxLayout(self)
        column.setContentsMargins(8, 4, 8, 8)
        column.addWidget(self.table)
        frame.session.traces_changed.connect(self.refresh)
        frame.session.document_changed.connect(self._document_changed)
        self.refresh()

    def sizeHint(self) -> QSize:
        """Ask for a modest part of the right side."""
        return QSize(300, 140)

    def _document_changed(self, change: Change) -> None:
        if change.decisions or change.before.recipe.histogram.direction != change.after.recipe.histogram.direction:
            self.refresh()

    def refresh(self) -> None:
        """Show the groups."""
        session = self.frame.session
        groups = session.document.decisions.groups
        if not groups or session.traces is None:
            self.table.show_columns({})
            return
        analysed = session.traces.table["direction"] == session.document.recipe.histogram.direction
        rows = [list(session.rows_of(set(group.members)).values()) for group in groups.values()]
        inside = np.array([int(np.count_nonzero(analysed[one])) for one in rows], np.int64)
        self.table.show_columns(
            {
                "group": np.array(list(groups)),
                "traces": np.array([len(one) for one in rows], np.int64),
                "share": inside / max(int(np.count_nonzero(analysed)), 1),
            }
        )

    def _names(self) -> list[str]:
        names = list(self.frame.session.document.decisions.groups)
        return [names[row] for row in self.table.chosen_rows()]

    def _show_group(self, row: int) -> None:
        name = str(self.table.model.data_columns["group"][row])
        self._show(name)

    def _show(self, name: str) -> None:
        session = self.frame.session
        quoted = name.replace('"', '""')
        condition = Condition("rule", text=f'in_group("{quoted}")', name=f"in the group {name}")
        session.change_conditions("show a group", session.document.conditions.added(condition))

    def _show_chosen(self) -> None:
        for name in self._names():
            self._show(name)

    def _remove_chosen(self) -> None:
        session = self.frame.session
        decisions = session.document.decisions
        for name in self._names():
            decisions = decisions.without_group(name)
        if decisions != session.document.decisions:
            session.change("remove a group", replace(session.document, decisions=decisions))
