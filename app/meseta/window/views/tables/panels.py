"""Tables of the right side, each filled from one result."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from PySide6.QtWidgets import QLabel, QVBoxLayout, QWidget

from meseta import typeset
from meseta.window.frame import Frame
from meseta.window.tables.model import Column, plain
from meseta.window.tables.view import TablePanel
from meseta.window.visibility import Lazy

if TYPE_CHECKING:
    from meseta.selection import Selection, SelectionTable

__all__ = ["PlateausTable", "RulesTable", "TracesTable"]


def _digits(count: int) -> Any:
    return lambda value, _: typeset.number(float(value), count)


class _Panel(QWidget):
    """A table with a line of words below it; filled only while it is seen."""

    def __init__(self, frame: Frame, table: TablePanel) -> None:
        super().__init__()
        self.frame, self.table, self.note = frame, table, QLabel("")
        self.note.setWordWrap(True)
        self.note.setProperty("tone", "quiet")
        self.note.hide()
        column = QVBoxLayout(self)
        column.setContentsMargins(8, 4, 8, 8)
        column.setSpacing(4)
        column.addWidget(table, 1)
        column.addWidget(self.note)
        self.lazy = Lazy(self, self.refresh)
        frame.session.traces_changed.connect(self.lazy.ask)

    def refresh(self) -> None:
        """Fill the table from the result as last shown."""

    def say(self, text: str) -> None:
        """Write the line below the table."""
        self.note.setText(text)
        self.note.setVisible(bool(text))


class PlateausTable(_Panel):
    """All plateaus."""

    def __init__(self, frame: Frame) -> None:
        columns = (
            Column("trace", "trace", plain),
            Column("level_g0", f"G / {typeset.G0}", _digits(3), "plateau conductance"),
            Column("length_drive", "length", _digits(3), "in the unit of the drive"),
            Column("slope_decades_per_nm", "slope", _digits(2), "decades per nm"),
            Column("noise_decades", "noise", _digits(2), "decades"),
            Column("kind", "kind", plain),
            Column("censored", "cut by", plain, "what cut the plateau short"),
            Column("number", "from end", plain, "1 is the last plateau of its trace"),
            Column("score", "score", _digits(2)),
        )
        table = TablePanel(
            frame, "plateaus", columns, jump=self._jump, empty="Plateaus will stand here once they are found."
        )
        super().__init__(frame, table)
        frame.session.result_changed.connect(lambda name: self.lazy.ask() if name == "plateaus" else None)

    def refresh(self) -> None:
        """Show the plateaus as last found."""
        found = self.frame.session.result("plateaus")
        self.table.show_columns({} if found is None else found.columns())

    def _jump(self, row: int) -> None:
        self.frame.session.go_to(int(self.table.model.data_columns["trace"][row]))


class TracesTable(_Panel):
    """One row a trace: what it is, whether it is kept, and why not."""

    def __init__(self, frame: Frame) -> None:
        columns = (
            Column("trace", "trace", plain),
            Column("kept", "kept", plain),
            Column("reason", "reason", plain, "the first rule that dropped the trace"),
            Column("group", "group", plain),
            Column("plateaus", "plateaus", plain),
            Column("samples", "samples", plain),
            Column("direction", "direction", plain),
            Column("specimen", "specimen", plain),
            Column("session", "session", plain),
            Column("source", "recording", plain),
            Column("record_start", "first sample", plain),
        )
        table = TablePanel(
            frame, "traces", columns, jump=frame.session.go_to, empty="Traces will stand here once a recording is open."
        )
        super().__init__(frame, table)
        table.menu_entries = [
            ("Reject", lambda: frame.decide(table.chosen_rows(), False)),
            ("Keep", lambda: frame.decide(table.chosen_rows(), True)),
            ("Leave to the rules", lambda: frame.decide(table.chosen_rows(), None)),
        ]
        names = ("selection", "plateaus")
        frame.session.result_changed.connect(lambda name: self.lazy.ask() if name in names else None)

    def refresh(self) -> None:
        """Show the traces and what was decided about them."""
        traces = self.frame.session.traces
        self.table.show_columns({} if traces is None else self._columns())

    def _columns(self) -> dict[str, npt.NDArray[Any]]:
        session = self.frame.session
        traces = session.traces
        assert traces is not None
        count = traces.traces
        selection: Selection | None = session.result("selection")
        fits = selection is not None and len(selection.kept) == count
        plateaus = session.result("plateaus")
        found = np.zeros(count, np.int64)
        if plateaus is not None and len(plateaus) and int(plateaus.trace[-1]) < count:
            found = np.bincount(plateaus.trace, minlength=count)
        names = np.array([source.name for source in traces.sources] or [""])
        return {
            "trace": np.arange(count),
            "kept": selection.kept if fits and selection is not None else np.ones(count, bool),
            "reason": selection.reason if fits and selection is not None else np.full(count, ""),
            "group": selection.group if fits and selection is not None else np.full(count, ""),
            "plateaus": found,
            "samples": traces.lengths,
            "direction": traces.table["direction"],
            "specimen": traces.table["specimen"],
            "session": traces.table["session"],
            "source": names[np.clip(traces.table["source"], 0, len(names) - 1)],
            "record_start": traces.table["record_start"],
        }


class RulesTable(_Panel):
    """What each rule took."""

    def __init__(self, frame: Frame) -> None:
        columns = (
            Column("rule", "rule", plain),
            Column("dropped_alone", "alone", plain, "traces that this rule alone would drop"),
            Column("dropped_in_sequence", "in turn", plain, "traces that this rule drops after those before it"),
            Column("left", "left", plain, "traces left after this rule"),
        )
        empty = "What each rule took will stand here."
        table = TablePanel(frame, "rules", columns, filtered=False, empty=empty, elastic="rule")
        super().__init__(frame, table)
        frame.session.result_changed.connect(lambda name: self.lazy.ask() if name == "selection" else None)

    def refresh(self) -> None:
        """Show what the rules took."""
        selection: Selection | None = self.frame.session.result("selection")
        steps: SelectionTable | None = None if selection is None else selection.steps
        self.table.show_columns({} if steps is None else steps.columns())
        unmatched = () if selection is None else selection.unmatched
        self.say(
            f"{len(unmatched)} decisions concern traces that are not here (after re-cutting)." if unmatched else ""
        )
