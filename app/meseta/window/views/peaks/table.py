"""The peaks as a table, and below it what can be done to the chosen one and what the fit says of it."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from PySide6.QtCore import QItemSelectionModel, Qt
from PySide6.QtWidgets import QCheckBox, QComboBox, QGridLayout, QHBoxLayout, QLabel, QToolButton, QVBoxLayout, QWidget

from meseta import typeset
from meseta.window.elided import Elided
from meseta.window.frame import Frame
from meseta.window.peak_editing import TIES, PeakEditor, said_of
from meseta.window.tables.model import Column, plain
from meseta.window.tables.view import TablePanel
from meseta.window.visibility import Lazy

if TYPE_CHECKING:
    from meseta.peaks import PeakTable

__all__ = ["PeaksPanel"]

SHORT = {"none": "not tied", "multiples": "multiples", "ladder": "ladder"}
BUTTONS = (
    ("peak_add", "Add", "Ask for one more peak where the pointer last was (P, or double-click the histogram)"),
    ("peak_remove", "Remove", "Take the chosen peak out of the fit (Delete)"),
    ("peak_hold", "Hold", "Hold the chosen peak where it stands, or free it (H)"),
    ("peak_edit", "Edit …", "Name, start, bounds and what is held of the chosen peak (F2)"),
    ("peak_propose", "Propose", "Let the peaks be proposed from the histogram again"),
)


class PeaksPanel(QWidget):
    """Table, tools and verdict."""

    def __init__(self, frame: Frame) -> None:
        super().__init__()
        self.frame, self.editor = frame, PeakEditor.of(frame.session)
        self._table: PeakTable | None = None
        self._showing = False
        self.table = TablePanel(
            frame,
            "peaks",
            self._columns(),
            jump=self._look,
            filtered=False,
            empty="Peaks will stand here once the histogram is fitted. Double-click the histogram to ask for one.",
        )
        self.table.menu_entries = [
            ("Edit …", lambda: frame.run_action("peak_edit")),
            ("Hold or free", lambda: frame.run_action("peak_hold")),
            ("Remove", lambda: frame.run_action("peak_remove")),
        ]
        self.buttons = {key: self._button(key, text, tip) for key, text, tip in BUTTONS}
        self.tie, self.widths = QComboBox(), QCheckBox("equal widths")
        self.quoted = {name: QLabel("") for name in ("centre", "mode", "median")}
        self.verdict, self.note = QLabel(""), Elided("")
        self._prepare()
        self._lay_out()
        self.lazy = Lazy(self, self.refresh)
        self._connect()

    def _columns(self) -> tuple[Column, ...]:
        def digits(count: int) -> Any:
            return lambda value, _: typeset.number(float(value), count)

        return (
            Column("peak", "peak", plain),
            Column("position_g0", f"G / {typeset.G0}", self._position, "fitted centre, half width of 95 % in brackets"),
            Column("asked", "asked", plain, "what is asked of the peak: held, bounded, tied"),
            Column("mode_g0", "mode", digits(3), "highest point of the histogram near the peak, G0"),
            Column("plateau_median_g0", "plateaus", digits(3), "median conductance of the plateaus at the peak, G0"),
            Column("position_siemens", "siemens", lambda value, _: typeset.prefixed(float(value), "S")),
            Column("position_ohm", "ohm", lambda value, _: typeset.prefixed(float(value), "ohm")),
            Column("fwhm", "width", digits(2), "full width at half maximum, decades (logarithmic) or G0 (linear)"),
            Column("area_per_trace", "area", digits(3), "area a trace, in the histogram's unit"),
            Column("position_systematic_g0", "systematic", digits(2), "half spread over defensible choices, G0"),
            Column("status", "status", plain),
        )

    def _button(self, key: str, text: str, tip: str) -> QToolButton:
        button = QToolButton()
        button.setText(text)
        button.setToolTip(tip)
        button.setAccessibleName(tip)
        button.setAutoRaise(True)
        button.clicked.connect(lambda: self.frame.run_action(key))
        return button

    def _prepare(self) -> None:
        self.tie.addItems([SHORT[kind] for kind in TIES])
        for place, words in enumerate(TIES.values()):
            self.tie.setItemData(place, words, Qt.ItemDataRole.ToolTipRole)
        self.tie.setToolTip("How the positions of all peaks are tied (T, Shift+T)")
        self.widths.setToolTip("All peaks are equally wide relative to their position (W)")
        self.tie.setAccessibleName("How positions are tied")
        self.tie.setMinimumContentsLength(9)
        self.tie.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.tie.activated.connect(lambda index: self.editor.tie(list(TIES)[index]))
        self.widths.clicked.connect(self.editor.equal_widths)
        self.verdict.setWordWrap(True)
        self.verdict.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.verdict.setAccessibleName("Verdict on the chosen peak")

    def _lay_out(self) -> None:
        tools = QHBoxLayout()
        tools.setSpacing(0)
        for button in self.buttons.values():
            tools.addWidget(button)
        tools.addStretch(1)
        grid = QGridLayout()
        grid.setContentsMargins(0, 0, 0, 0)
        grid.setHorizontalSpacing(12)
        grid.setVerticalSpacing(0)
        titles = {"centre": "fitted centre", "mode": "mode", "median": "median plateau"}
        for place, (name, label) in enumerate(self.quoted.items()):
            title = QLabel(titles[name])
            title.setProperty("tone", "quiet")
            label.setAccessibleName(titles[name])
            grid.addWidget(title, 0, place)
            grid.addWidget(label, 1, place)
        grid.setColumnStretch(3, 1)
        self.three = QWidget()
        self.three.setLayout(grid)
        column = QVBoxLayout(self)
        column.setContentsMargins(8, 4, 8, 8)
        column.setSpacing(4)
        column.addWidget(self.table, 1)
        column.addLayout(tools)
        column.addWidget(self.three)
        column.addWidget(self.verdict)
        ties = QHBoxLayout()
        ties.setSpacing(8)
        ties.addWidget(self.tie, 1)
        ties.addWidget(self.widths)
        column.addLayout(ties)
        column.addWidget(self.note)

    def _connect(self) -> None:
        session = self.frame.session
        session.traces_changed.connect(self.lazy.ask)
        session.result_changed.connect(lambda name: self.lazy.ask() if name == "peaks" else None)
        session.document_changed.connect(lambda change: self.lazy.ask() if change.recipe else None)
        session.states_changed.connect(self._say)
        self.editor.chosen_changed.connect(lambda _: self._show_choice())
        self.table.view.selectionModel().selectionChanged.connect(lambda *_: self._chosen_in_table())

    # -- showing -----------------------------------------------------------------------------------------------------

    def _position(self, value: float, row: int) -> str:
        table = self._table
        if table is None:
            return typeset.number(float(value))
        return typeset.value_with_uncertainty(
            float(value), float(table.position_low_g0[row]), float(table.position_high_g0[row])
        )

    def refresh(self) -> None:
        """Show the fitted peaks."""
        fit = self.frame.session.result("peaks")
        self._table = None if fit is None else fit.table
        self._showing = True
        try:
            self.table.show_columns({} if self._table is None else {**self._table.columns(), "asked": self._asked()})
            self.tie.setCurrentIndex(list(TIES).index(self.editor.settings.tie))
            self.widths.setChecked(self.editor.settings.equal_relative_widths)
        finally:
            self._showing = False
        self._show_choice()

    def _asked(self) -> npt.NDArray[np.str_]:
        """Return what is asked of each peak of the table, in words."""
        table, starts = self._table, self.editor.starts()
        words = [""] * (0 if table is None else len(table))
        for place, start in enumerate(starts):
            row = self.editor.row_of(place)
            if 0 <= row < len(words):
                words[row] = said_of(start, self.editor.settings, place + 1) if self.editor.asked else "proposed"
        return np.array(words, np.str_)

    def _chosen_in_table(self) -> None:
        rows = self.table.chosen_rows()
        if not self._showing and len(rows) == 1:
            self.editor.choose(self.editor.place_of(rows[0]))

    def _show_choice(self) -> None:
        """Mark the chosen peak in the table, and say what the fit says of it."""
        chosen, row = self.editor.chosen, self.editor.row_of(self.editor.chosen)
        shown = self.table.model.shown_row(row) if row >= 0 else -1
        self._showing = True
        try:
            model = self.table.view.selectionModel()
            if shown >= 0:
                flags = QItemSelectionModel.SelectionFlag.ClearAndSelect | QItemSelectionModel.SelectionFlag.Rows
                model.setCurrentIndex(self.table.model.index(shown, 0), flags)
            else:
                model.clearSelection()
        finally:
            self._showing = False
        for key in ("peak_remove", "peak_hold", "peak_edit"):
            self.buttons[key].setEnabled(chosen >= 0)
        held = 0 <= chosen < len(self.editor.starts()) and self.editor.starts()[chosen].fixed
        self.buttons["peak_hold"].setText("Free" if held else "Hold")
        self.buttons["peak_propose"].setEnabled(self.editor.asked)
        self._say_quoted(row)
        self._say()

    def _say_quoted(self, row: int) -> None:
        """Write fitted centre, mode and median plateau conductance side by side."""
        self.three.setVisible(row >= 0 and self._table is not None)
        if row >= 0 and self._table is not None:
            table = self._table
            self.quoted["centre"].setText(self._position(float(table.position_g0[row]), row))
            self.quoted["mode"].setText(typeset.number(float(table.mode_g0[row])))
            self.quoted["median"].setText(typeset.number(float(table.plateau_median_g0[row])))
            self.three.setToolTip(
                f"In {typeset.G0}; three numbers that are not the same: the centre of the fit on the "
                f"{table.axis[row]} axis, the highest point of the histogram, and the median of "
                f"{typeset.integer(int(table.plateaus[row]))} plateaus."
            )

    def _say(self) -> None:
        session, editor = self.frame.session, self.editor
        state, fit, error = session.state("peaks"), session.result("peaks"), session.errors.get("peaks")
        row = editor.row_of(editor.chosen)
        if error is not None:
            note = str(error)
        elif fit is None or not len(fit.table):
            note = ""
        elif state != "current":
            note = "fitting again" if state == "working" else "out of date"
        else:
            said = "".join(f"{one[:1].upper()}{one[1:]}. " for one in fit.notes)
            note = f"{said}95 % intervals: {fit.table.resampling[0] or 'none'}. Fit on the {fit.table.axis[0]} axis."
        self.note.say(note, "quiet" if state == "current" else "doubtful")
        self.note.setVisible(bool(note))
        verdict = ""
        if fit is not None and 0 <= row < len(fit.table):
            verdict = f"{editor.name_of(editor.chosen)}: {fit.table.status[row]}"
        elif editor.chosen >= 0:
            verdict = f"{editor.name_of(editor.chosen)}: {editor.not_fitted}"
        elif fit is not None and len(fit.table) and not np.isfinite(fit.table.position_g0).any():
            verdict = str(fit.table.status[0])
        self.verdict.setText(verdict)
        self.verdict.setVisible(bool(verdict))

    def _look(self, row: int) -> None:
        if self._table is not None and np.isfinite(self._table.position_g0[row]):
            self.frame.look_at(float(self._table.position_g0[row]))
