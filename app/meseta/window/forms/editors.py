"""One editor for each kind of setting.  It holds no value of its own: it shows the recipe's and proposes others."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from PySide6.QtCore import Qt
from PySide6.QtGui import QWheelEvent
from PySide6.QtWidgets import QCheckBox, QComboBox, QLineEdit, QPlainTextEdit, QWidget

from meseta.recipe import FieldInfo

__all__ = ["Editor", "make_editor"]

Propose = Callable[[Any], None]
"""Takes a proposed value; raises RecipeError where it is not allowed."""


class Editor:
    """An editor of one setting."""

    widget: QWidget

    def __init__(self, info: FieldInfo, propose: Propose, complain: Callable[[str], None]) -> None:
        self.info, self._propose, self._complain = info, propose, complain
        self._showing = False

    @contextmanager
    def showing(self) -> Iterator[None]:
        """Keep the editor from proposing what it is only shown."""
        before, self._showing = self._showing, True
        try:
            yield
        finally:
            self._showing = before

    def show(self, value: Any) -> None:
        """Show the recipe's value."""
        raise TypeError("an editor shows its own kind of value")

    def propose(self, value: Any) -> None:
        """Propose another value, unless it is only being shown."""
        if not self._showing:
            self._propose(value)


class NumberEditor(Editor):
    """A number as text: any notation, no limits of a spin box; the range is checked by the recipe."""

    def __init__(self, info: FieldInfo, propose: Propose, complain: Callable[[str], None]) -> None:
        super().__init__(info, propose, complain)
        self.edit = QLineEdit()
        self.edit.setAlignment(Qt.AlignmentFlag.AlignRight)
        self.edit.editingFinished.connect(self._finished)
        self.edit.textEdited.connect(lambda _: self._complain(""))
        if info.optional:
            self.edit.setPlaceholderText("not set")
        self.widget = self.edit
        self._shown = ""

    def show(self, value: Any) -> None:
        """Show a number, or nothing where it is not set."""
        self._shown = "" if value is None else _number_text(value)
        if self.edit.text() != self._shown:
            self.edit.setText(self._shown)

    def _finished(self) -> None:
        text = self.edit.text().strip().replace(",", ".").replace("−", "-")
        if text == self._shown:
            return
        if not text and self.info.optional:
            self.propose(None)
            return
        try:
            value = float(text)
            if not math.isfinite(value):
                raise ValueError
        except ValueError:
            self._complain(f"'{text}' is not a number")
            return
        if self.info.kind == "integer":
            if value != round(value):
                self._complain(f"'{text}' is not a whole number")
                return
            value = round(value)
        self.propose(value)


class TruthEditor(Editor):
    """A box to tick."""

    def __init__(self, info: FieldInfo, propose: Propose, complain: Callable[[str], None]) -> None:
        super().__init__(info, propose, complain)
        self.box = QCheckBox()
        self.box.toggled.connect(self.propose)
        self.widget = self.box

    def show(self, value: Any) -> None:
        """Show a truth."""
        with self.showing():
            self.box.setChecked(bool(value))


class _StillCombo(QComboBox):
    """A list of choices that a passing wheel does not change."""

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Leave the wheel to the scroll area."""
        event.ignore()


class ChoiceEditor(Editor):
    """A list of words."""

    def __init__(self, info: FieldInfo, propose: Propose, complain: Callable[[str], None]) -> None:
        super().__init__(info, propose, complain)
        self.combo = _StillCombo()
        self._values: list[Any] = ([None] if info.optional else []) + list(info.choices)
        self.combo.addItems(["not set" if v is None else str(v).replace("_", " ") for v in self._values])
        self.combo.setMinimumContentsLength(6)
        self.combo.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.combo.currentIndexChanged.connect(lambda index: self.propose(self._values[index]))
        self.widget = self.combo

    def show(self, value: Any) -> None:
        """Show a choice."""
        with self.showing():
            self.combo.setCurrentIndex(self._values.index(value) if value in self._values else -1)


class TextEditor(Editor):
    """A line of text."""

    def __init__(self, info: FieldInfo, propose: Propose, complain: Callable[[str], None]) -> None:
        super().__init__(info, propose, complain)
        self.edit = QLineEdit()
        if info.optional:
            self.edit.setPlaceholderText("not set")
        self.edit.editingFinished.connect(self._finished)
        self.widget = self.edit
        self._shown = ""

    def show(self, value: Any) -> None:
        """Show a text."""
        self._shown = value or ""
        if self.edit.text() != self._shown:
            self.edit.setText(self._shown)

    def _finished(self) -> None:
        text = self.edit.text()
        if text != self._shown:
            self.propose(None if not text and self.info.optional else text)


class LinesEditor(Editor):
    """A list of texts, one a line; tables and lists of tables as JSON."""

    def __init__(self, info: FieldInfo, propose: Propose, complain: Callable[[str], None]) -> None:
        super().__init__(info, propose, complain)
        self.edit = _Lines(self._finished)
        self.edit.setTabChangesFocus(True)
        self.edit.setFixedHeight(self.edit.fontMetrics().lineSpacing() * 4 + 12)
        self.widget = self.edit
        self._shown = ""
        self._plain = info.kind == "list"

    def show(self, value: Any) -> None:
        """Show a list, one entry a line, or a table as JSON."""
        entries = [one.model_dump(exclude_none=True) if hasattr(one, "model_dump") else one for one in _entries(value)]
        self._plain = self.info.kind == "list" and all(isinstance(one, str) for one in entries)
        if self._plain:
            self._shown = "\n".join(entries)
        elif self.info.kind == "list":
            self._shown = "\n".join(json.dumps(one) for one in entries)
        else:
            table = {
                name: one.model_dump() if hasattr(one, "model_dump") else one for name, one in (value or {}).items()
            }
            self._shown = "\n".join(f"{name} = {json.dumps(one)}" for name, one in table.items())
        if self.edit.toPlainText() != self._shown:
            self.edit.setPlainText(self._shown)

    def _finished(self) -> None:
        text = self.edit.toPlainText()
        if text == self._shown:
            return
        lines = [line.strip() for line in text.splitlines() if line.strip()]
        try:
            self.propose(self._read(lines))
        except ValueError as error:
            self._complain(f"this is not understood ({error})")

    def _read(self, lines: list[str]) -> Any:
        if self.info.kind == "list":
            return [json.loads(line) if line.startswith(("{", "[")) else line for line in lines]
        table = {}
        for line in lines:
            name, separator, value = line.partition("=")
            if not separator:
                raise ValueError(f"'{line}': write name = value")
            table[name.strip()] = json.loads(value)
        return table


class _Lines(QPlainTextEdit):
    def __init__(self, finished: Callable[[], None]) -> None:
        super().__init__()
        self._finished = finished

    def focusOutEvent(self, event: Any) -> None:
        """Propose the text when the user goes elsewhere."""
        super().focusOutEvent(event)
        self._finished()


def _entries(value: Any) -> list[Any]:
    return list(value) if isinstance(value, list | tuple) else []


def _number_text(value: float) -> str:
    return str(value) if isinstance(value, int) else f"{value:.6g}"


_EDITORS: dict[str, type[Editor]] = {
    "number": NumberEditor,
    "integer": NumberEditor,
    "truth": TruthEditor,
    "choice": ChoiceEditor,
    "text": TextEditor,
    "list": LinesEditor,
    "table": LinesEditor,
}


def make_editor(info: FieldInfo, propose: Propose, complain: Callable[[str], None]) -> Editor:
    """Return the editor for a setting."""
    editor = _EDITORS[info.kind](info, propose, complain)
    editor.widget.setMinimumWidth(72)
    editor.widget.setAccessibleName(info.title)
    editor.widget.setAccessibleDescription(info.help)
    return editor
