"""Conditions as sentences: on and off, not, and/or, what they pick, and how to keep them as a rule or a group."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from PySide6.QtCore import QSize, Qt
from PySide6.QtWidgets import (
    QCheckBox,
    QComboBox,
    QHBoxLayout,
    QInputDialog,
    QLabel,
    QMenu,
    QPushButton,
    QScrollArea,
    QSizePolicy,
    QToolButton,
    QVBoxLayout,
    QWidget,
)

from meseta import typeset
from meseta.errors import MesetaError
from meseta.window.conditions import BOXES, Condition, ConditionSet
from meseta.window.frame import Frame
from meseta.window.layouts import emptied
from meseta.window.pictures import SubsetPicture
from meseta.window.session import Change
from meseta.window.views.conditions.editor import ConditionEditor

__all__ = ["ConditionsPanel"]

EMPTY = (
    "Draw a window on a plot: the traces with a plateau there are picked out everywhere. "
    "Windows combine; keep them as a rule or a group."
)


class _Line(QWidget):
    """One condition: a box to switch it on and off, its sentence, a menu."""

    def __init__(self, panel: ConditionsPanel, index: int, condition: Condition) -> None:
        super().__init__()
        self.box = QCheckBox()
        self.box.setChecked(condition.on)
        self.box.setAccessibleName(condition.sentence())
        self.box.toggled.connect(lambda on: panel.switch(index, on))
        label = QLabel(condition.name or condition.sentence())
        label.setWordWrap(True)
        label.setToolTip(condition.sentence())
        label.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        if not condition.on:
            label.setProperty("tone", "quiet")
        button = QToolButton()
        button.setText("⋯")
        button.setAutoRaise(True)
        button.setAccessibleName("More about this condition")
        button.setPopupMode(QToolButton.ToolButtonPopupMode.InstantPopup)
        menu = QMenu(button)
        menu.addAction("Edit …", lambda: panel.edit(index))
        menu.addAction(
            "Turn round (not)" if not condition.inverted else "Turn round again", lambda: panel.invert(index)
        )
        if condition.kind in BOXES:
            other = "Ask for a plateau there" if condition.kind == "passes" else "Ask only to pass there"
            menu.addAction(other, lambda: panel.turn_box(index))
        menu.addAction("Name …", lambda: panel.rename(index))
        menu.addAction("Remove", lambda: panel.remove(index))
        button.setMenu(menu)
        row = QHBoxLayout(self)
        row.setContentsMargins(0, 0, 0, 0)
        row.setSpacing(4)
        row.addWidget(self.box, 0, Qt.AlignmentFlag.AlignTop)
        row.addWidget(label, 1)
        row.addWidget(button, 0, Qt.AlignmentFlag.AlignTop)


class ConditionsPanel(QWidget):
    """All conditions and what they pick."""

    def __init__(self, frame: Frame) -> None:
        super().__init__()
        self.frame = frame
        self.lines = QVBoxLayout()
        self.lines.setSpacing(4)
        self.picked = QLabel("")
        self.picked.setProperty("tone", "selected")
        self.picked.setWordWrap(True)
        self.wrong = QLabel("")
        self.wrong.setProperty("tone", "fit")
        self.wrong.setWordWrap(True)
        self.empty = QLabel(EMPTY)
        self.empty.setProperty("tone", "quiet")
        self.empty.setWordWrap(True)
        self.joined = QComboBox()
        self.joined.addItems(["all of these (and)", "any of these (or)"])
        self.joined.setAccessibleName("How conditions are combined")
        self.joined.activated.connect(self._join)
        self._lay_out()
        session = frame.session
        session.document_changed.connect(self._document_changed)
        session.traces_changed.connect(self.refresh)
        session.subset_changed.connect(self._show_subset)
        session.condition_problem.connect(self._show_problem)
        self.refresh()

    def sizeHint(self) -> QSize:
        """Ask for a modest part of the right side."""
        return QSize(300, 220)

    def _lay_out(self) -> None:
        inside = QWidget()
        column = QVBoxLayout(inside)
        column.setContentsMargins(8, 4, 8, 4)
        column.setSpacing(8)
        for widget in (self.empty, self.joined):
            column.addWidget(widget)
        column.addLayout(self.lines)
        column.addWidget(self.picked)
        column.addWidget(self.wrong)
        column.addStretch(1)
        area = QScrollArea()
        area.setWidget(inside)
        area.setWidgetResizable(True)
        area.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        area.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        outer = QVBoxLayout(self)
        outer.setContentsMargins(0, 0, 0, 0)
        outer.setSpacing(0)
        outer.addWidget(area)
        buttons = self._buttons()  # stay in sight however many conditions there are
        buttons.setContentsMargins(8, 4, 8, 8)
        outer.addLayout(buttons)

    def _buttons(self) -> QHBoxLayout:
        self.add = QPushButton("Add …")
        self.rule, self.group, self.clear = (
            QPushButton("To rule"),
            QPushButton("To group"),
            QPushButton("Clear"),
        )
        self.add.setToolTip("Add a condition by typing its numbers")
        self.rule.setToolTip("Only these traces take part in the result from now on; a step of undo")
        self.group.setToolTip("Give these traces a name, colour and symbol; nothing else changes")
        self.add.clicked.connect(self.add_typed)
        self.rule.clicked.connect(lambda: self.frame.run_action("make_rule"))
        self.group.clicked.connect(lambda: self.frame.run_action("make_group"))
        self.clear.clicked.connect(lambda: self.frame.run_action("clear_conditions"))
        buttons = QHBoxLayout()
        buttons.setSpacing(4)
        for button in (self.add, self.rule, self.group, self.clear):
            button.setStyleSheet("padding-left: 6px; padding-right: 6px;")
            buttons.addWidget(button)
        buttons.addStretch(1)
        return buttons

    # -- showing -----------------------------------------------------------------------------------------------------

    @property
    def conditions(self) -> ConditionSet:
        """The conditions of the document."""
        return self.frame.session.document.conditions

    def _document_changed(self, change: Change) -> None:
        if change.conditions:
            self.refresh()

    def refresh(self) -> None:
        """Write the sentences again."""
        emptied(self.lines)
        shown = self.conditions
        for index, condition in enumerate(shown.conditions):
            self.lines.addWidget(_Line(self, index, condition))
        any_ = bool(shown.conditions)
        self.empty.setVisible(not any_)
        self.joined.setVisible(len(shown.conditions) > 1)
        self.joined.setCurrentIndex(0 if shown.joined == "and" else 1)
        open_ = self.frame.session.traces is not None
        self.add.setEnabled(open_)
        for button in (self.rule, self.group):
            button.setEnabled(bool(shown.active) and open_)
        self.clear.setEnabled(any_)
        if not shown.active:
            self.picked.setText("")
            self.wrong.setText("")
        self.picked.setVisible(bool(shown.active))

    def _show_subset(self, subset: SubsetPicture | None) -> None:
        self.wrong.setText("")
        if subset is None:
            self.picked.setText("")
            return
        count = int(np.count_nonzero(subset.mask))
        share = typeset.percent(count, subset.of)
        self.picked.setText(f"{typeset.integer(count)} of {typeset.integer(subset.of)} traces ({share})")

    def _show_problem(self, error: MesetaError) -> None:
        self.picked.setText("")
        self.wrong.setText(f"{error.what}. {error.remedy}".strip())

    # -- changing ----------------------------------------------------------------------------------------------------

    def _change(self, text: str, conditions: ConditionSet) -> None:
        self.frame.session.change_conditions(text, conditions)

    def _join(self, index: int) -> None:
        self._change("combine conditions", replace(self.conditions, joined="and" if index == 0 else "or"))

    def switch(self, index: int, on: bool) -> None:
        """Switch a condition on or off."""
        condition = replace(self.conditions.conditions[index], on=on)
        self._change(f"switch a condition {'on' if on else 'off'}", self.conditions.changed(index, condition))

    def invert(self, index: int) -> None:
        """Turn a condition round."""
        condition = self.conditions.conditions[index]
        self._change(
            "turn a condition round",
            self.conditions.changed(index, replace(condition, inverted=not condition.inverted)),
        )

    def turn_box(self, index: int) -> None:
        """Ask for a plateau in a box instead of samples, or the other way round."""
        condition = self.conditions.conditions[index]
        other = replace(condition, kind="settles" if condition.kind == "passes" else "passes")
        self._change(
            "ask for a plateau" if other.kind == "settles" else "ask to pass", self.conditions.changed(index, other)
        )

    def remove(self, index: int) -> None:
        """Remove a condition."""
        self._change("remove a condition", self.conditions.without(index))

    def rename(self, index: int) -> None:
        """Ask for a name."""
        condition = self.conditions.conditions[index]
        name, given = QInputDialog.getText(self, "Name of the condition", condition.sentence(), text=condition.name)
        if given:
            self._change("name a condition", self.conditions.changed(index, replace(condition, name=name.strip())))

    def edit(self, index: int) -> None:
        """Edit a condition's numbers."""
        editor = ConditionEditor(self.conditions.conditions[index], self)
        if editor.exec():
            self._change("edit a condition", self.conditions.changed(index, editor.condition()))

    def add_typed(self) -> None:
        """Add a condition by its numbers."""
        editor = ConditionEditor(Condition("plateau", 1e-5, 1e-3, unit=self.frame.session.drive_unit), self)
        if editor.exec():
            self._change("add a condition", self.conditions.added(editor.condition()))
