"""The form of one section of the recipe, made from its fields."""

from __future__ import annotations

from collections.abc import Collection
from typing import Any

from PySide6.QtWidgets import (
    QGridLayout,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QSizePolicy,
    QToolButton,
    QVBoxLayout,
    QWidget,
)

from meseta import typeset
from meseta.errors import MesetaError
from meseta.recipe import FieldInfo, Section
from meseta.window.forms.editors import make_editor
from meseta.window.frame import Frame
from meseta.window.session import Change

__all__ = ["SectionForm"]


class _Row:
    """One setting: changed marker, title, editor with unit, reset; what is wrong with it below."""

    def __init__(self, form: SectionForm, info: FieldInfo) -> None:
        self._form, self.info = form, info
        self.title = QLabel(info.title)
        self.title.setWordWrap(True)
        self.title.setMinimumWidth(40)
        self.title.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        self.unit = QLabel(typeset.unit_text(info.unit))
        self.unit.setProperty("tone", "quiet")
        self.wrong = QLabel("")
        self.wrong.setProperty("tone", "fit")
        self.wrong.setWordWrap(True)
        self.wrong.hide()
        self.editor = make_editor(info, self._propose, self.complain)
        self.title.setBuddy(self.editor.widget)
        self.reset = QToolButton()
        self.reset.setText("↺")
        self.reset.setAutoRaise(True)
        self.reset.setFixedWidth(20)
        self.reset.setAccessibleName(f"Reset {info.title}")
        self.reset.clicked.connect(self._reset)
        tip = _tip(info)
        for widget in (self.title, self.editor.widget, self.unit):
            widget.setToolTip(tip)

    def heading(self) -> QHBoxLayout:
        """Return title and reset side by side: a reset that appears takes room from its own title only."""
        heading = QHBoxLayout()
        heading.setSpacing(2)
        heading.addWidget(self.title, 1)
        heading.addWidget(self.reset)
        return heading

    def _propose(self, value: Any) -> None:
        try:
            self._form.frame.session.change_setting(self._form.section, self.info.name, value, _named(self.info, value))
            self.complain("")
        except MesetaError as error:
            self.complain(
                f"{error.what.partition(' cannot be ')[2] or error.what}: {error.remedy}"
                if error.remedy
                else error.what
            )

    def complain(self, text: str) -> None:
        """Say under the editor what is wrong with what was typed; an empty text takes it away."""
        self.wrong.setText(text)
        self.wrong.setVisible(bool(text))
        widget = self.editor.widget
        widget.setProperty("wrong", bool(text))
        widget.style().unpolish(widget)
        widget.style().polish(widget)

    def _reset(self) -> None:
        default = self.info.default
        plain = default.model_dump() if hasattr(default, "model_dump") else default
        self._form.frame.session.change_setting(
            self._form.section, self.info.name, plain, f"{self.info.title} back to its default"
        )

    def show(self, value: Any) -> None:
        """Show the recipe's value, and whether it differs from the default."""
        self.editor.show(value)
        self.complain("")
        changed = value != self.info.default
        self.title.setText(f"• {self.info.title}" if changed else self.info.title)
        self.reset.setVisible(changed)
        default = "not set" if self.info.default in (None, [], {}) else self.info.default
        self.reset.setToolTip(f"Reset to the default: {default} {typeset.unit_text(self.info.unit)}".rstrip())


class SectionForm(QWidget):
    """All settings of one section, but those left out, which have a place of their own."""

    def __init__(
        self, frame: Frame, section: str, settings: type[Section], help_page: str, leave_out: Collection[str] = ()
    ) -> None:
        super().__init__()
        self.frame, self.section = frame, section
        self.rows = [_Row(self, info) for info in settings.fields() if info.name not in leave_out]
        grid = QGridLayout()
        grid.setContentsMargins(0, 0, 0, 0)
        grid.setHorizontalSpacing(4)
        grid.setVerticalSpacing(4)
        line = 0
        for row in self.rows:
            line = self._place(grid, line, row)
        grid.setColumnStretch(0, 1)
        column = QVBoxLayout(self)
        column.setContentsMargins(12, 4, 0, 8)
        column.setSpacing(8)
        column.addLayout(grid)
        column.addLayout(self._buttons(help_page))
        frame.session.document_changed.connect(self._document_changed)
        self.show_values()

    @staticmethod
    def _place(grid: QGridLayout, line: int, row: _Row) -> int:
        if row.info.kind not in ("number", "integer", "truth"):
            grid.addLayout(row.heading(), line, 0, 1, 3)
            grid.addWidget(row.editor.widget, line + 1, 0, 1, 3)
            grid.addWidget(row.wrong, line + 2, 0, 1, 3)
            return line + 3
        grid.addLayout(row.heading(), line, 0)
        row.editor.widget.setFixedWidth(76)
        grid.addWidget(row.editor.widget, line, 1)
        grid.addWidget(row.unit, line, 2)
        grid.addWidget(row.wrong, line + 1, 0, 1, 3)
        return line + 2

    def _buttons(self, help_page: str) -> QHBoxLayout:
        about, reset = QPushButton("About this step"), QPushButton("Reset all")
        about.clicked.connect(lambda: self.frame.show_help(help_page))
        reset.clicked.connect(self._reset_all)
        buttons = QHBoxLayout()
        buttons.setSpacing(8)
        buttons.addWidget(about)
        buttons.addWidget(reset)
        buttons.addStretch(1)
        return buttons

    def _reset_all(self) -> None:
        session = self.frame.session
        recipe = session.document.recipe
        defaults = type(getattr(recipe, self.section))().model_dump()
        values = {row.info.name: defaults[row.info.name] for row in self.rows}
        session.change_recipe(f"reset {self.section.replace('_', ' ')}", recipe.with_values(self.section, **values))

    def _document_changed(self, change: Change) -> None:
        if getattr(change.before.recipe, self.section) != getattr(change.after.recipe, self.section):
            self.show_values()

    def show_values(self) -> None:
        """Show the recipe's values."""
        settings = getattr(self.frame.session.document.recipe, self.section)
        for row in self.rows:
            row.show(getattr(settings, row.info.name))


def _tip(info: FieldInfo) -> str:
    parts = [info.help]
    allowed = info.range_text()
    if allowed and info.kind != "truth":
        parts.append(f"Allowed: {allowed}{f' {typeset.unit_text(info.unit)}' if info.unit else ''}.")
    if info.unset:
        parts.append(f"Not set: {info.unset}.")
    return f"<p>{'</p><p>'.join(part for part in parts if part)}</p>"


def _named(info: FieldInfo, value: Any) -> str:
    """Return a setting and its value as undo names the change."""
    if isinstance(value, bool) or value is None or isinstance(value, list | dict):
        return info.title
    shown = typeset.number(value) if isinstance(value, float) else str(value).replace("_", " ")
    unit = f" {typeset.unit_text(info.unit)}" if info.unit else ""
    return f"{info.title} to {shown}{unit}"
