"""What moves the peaks: one row a choice, one column a peak, "moves by ..."."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from PySide6.QtWidgets import QLabel, QVBoxLayout, QWidget

from meseta import typeset
from meseta.window.frame import Frame
from meseta.window.tables.model import Column, plain
from meseta.window.tables.view import TablePanel
from meseta.window.visibility import Lazy

if TYPE_CHECKING:
    from meseta.peaks import PeakFit

__all__ = ["SystematicPanel"]


def moved(value: float, _: int = 0) -> str:
    """Return by how much a position moves, with its sign."""
    text = typeset.number(float(value), 2)
    return f"+{text}" if value > 0 else text


class SystematicPanel(QWidget):
    """The systematic part of every position."""

    def __init__(self, frame: Frame) -> None:
        super().__init__()
        self.frame = frame
        self.table = TablePanel(
            frame,
            "systematic part",
            (Column("choice", "changed", plain),),
            filtered=False,
            empty="By how much each peak moves with other choices will stand here once peaks are fitted.",
        )
        self.note = QLabel("")
        self.note.setWordWrap(True)
        self.note.setProperty("tone", "quiet")
        column = QVBoxLayout(self)
        column.setContentsMargins(8, 4, 8, 8)
        column.setSpacing(4)
        column.addWidget(self.table, 1)
        column.addWidget(self.note)
        self.lazy = Lazy(self, self.refresh)
        session = frame.session
        session.result_changed.connect(lambda name: self.lazy.ask() if name == "peaks" else None)
        session.traces_changed.connect(self.lazy.ask)
        session.states_changed.connect(self._say)

    def refresh(self) -> None:
        """Show the shifts of the fit as last shown."""
        fit: PeakFit | None = self.frame.session.result("peaks")
        if fit is None or not fit.shifts:
            self.table.show_columns({})
            self._say()
            return
        names = [str(name) for name in fit.table.peak]
        peaks = tuple(
            Column(f"peak_{place}_g0", f"{name}, {typeset.G0}", moved, f"by how much peak {name} moves, G0")
            for place, name in enumerate(names, 1)
        )
        self.table.model.beginResetModel()
        self.table.model.columns = (
            Column("choice", "changed", plain),
            *peaks,
            Column("kind", "kind", plain, "what the choice belongs to: fit, analysis, calibration"),
            Column("counted", "counted", plain, "whether it is part of the systematic uncertainty"),
        )
        self.table.model.endResetModel()
        data = {
            "choice": np.array([shift.choice for shift in fit.shifts]),
            "kind": np.array([shift.kind for shift in fit.shifts]),
            "counted": np.array([shift.counted for shift in fit.shifts], bool),
        }
        for place in range(len(names)):
            data[f"peak_{place + 1}_g0"] = np.array([shift.moves_by_g0[place] for shift in fit.shifts], float)
        self.table.show_columns(data)
        self._say()

    def _say(self) -> None:
        session = self.frame.session
        fit, state = session.result("peaks"), session.state("peaks")
        note = ""
        if fit is not None and fit.shifts:
            note = (
                "Position less position as chosen. An en dash: that fit failed or could not be defended. "
                "Stands apart from the 95 % interval."
            )
            note = f"out of date. {note}" if state in ("out of date", "working") else note
        self.note.setText(note)
        self.note.setVisible(bool(note))
