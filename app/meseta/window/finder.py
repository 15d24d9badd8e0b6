"""Find an action by a word of its name, and the sheet of keys."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from PySide6.QtCore import QEvent, QObject, Qt
from PySide6.QtGui import QAction, QKeySequence
from PySide6.QtWidgets import QDialog, QLineEdit, QListWidget, QListWidgetItem, QVBoxLayout, QWidget

__all__ = ["ActionFinder", "keys_page"]


class ActionFinder(QDialog):
    """A line to type in and the actions that have those words; Enter runs the first."""

    def __init__(self, actions: Sequence[QAction], parent: QWidget) -> None:
        super().__init__(parent)
        self.setWindowTitle("Find an action")
        self._actions = [action for action in actions if action.text()]
        self.line, self.list = QLineEdit(), QListWidget()
        self.line.setPlaceholderText("what do you want to do?")
        self.line.setAccessibleName("Words of the action")
        self.list.setAccessibleName("Actions found")
        self.list.setUniformItemSizes(True)
        column = QVBoxLayout(self)
        column.setContentsMargins(8, 8, 8, 8)
        column.addWidget(self.line)
        column.addWidget(self.list)
        self.line.textChanged.connect(self._fill)
        self.line.returnPressed.connect(self._run)
        self.list.itemActivated.connect(lambda _: self._run())
        self.line.installEventFilter(self)
        self.resize(460, 360)
        self._fill("")

    def _fill(self, text: str) -> None:
        words = text.lower().split()
        self.list.clear()
        for action in self._actions:
            name = action.text().replace("&", "")
            where = f"{name} {action.toolTip()} {action.property('menu') or ''}".lower()
            if all(word in where for word in words):
                keys = action.shortcut().toString(QKeySequence.SequenceFormat.NativeText)
                item = QListWidgetItem(f"{name}    {keys}" if keys else name)
                item.setData(Qt.ItemDataRole.UserRole, action)
                if not action.isEnabled():
                    item.setFlags(Qt.ItemFlag.NoItemFlags)
                self.list.addItem(item)
        for row in range(self.list.count()):
            if self.list.item(row).flags() & Qt.ItemFlag.ItemIsEnabled:
                self.list.setCurrentRow(row)
                break

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """Let the arrow keys walk the list while one types."""
        if event.type() == QEvent.Type.KeyPress:
            key: Any = event
            if key.key() in (Qt.Key.Key_Down, Qt.Key.Key_Up):
                step = 1 if key.key() == Qt.Key.Key_Down else -1
                self.list.setCurrentRow(min(max(self.list.currentRow() + step, 0), self.list.count() - 1))
                return True
        return super().eventFilter(watched, event)

    def _run(self) -> None:
        item = self.list.currentItem()
        action: QAction | None = item.data(Qt.ItemDataRole.UserRole) if item is not None else None
        self.accept()
        if action is not None and action.isEnabled():
            action.trigger()


def keys_page(actions: Sequence[QAction]) -> str:
    """Return the sheet of keys and mouse gestures as HTML."""
    rows = []
    menu = ""
    for action in actions:
        where = str(action.property("menu") or "")
        keys = ", ".join(one.toString(QKeySequence.SequenceFormat.NativeText) for one in action.shortcuts())
        if not keys:
            continue
        if where != menu:
            menu = where
            rows.append(f"<tr><td colspan=2><br><b>{menu}</b></td></tr>")
        name = action.text().replace("&", "").partition(": ")[0]  # undo and redo name what they would undo as well
        rows.append(f"<tr><td>{name}</td><td>&nbsp;&nbsp;{keys}</td></tr>")
    mouse = (
        ("drag on a plot", "draw a window: it becomes a condition"),
        ("drag on the record strip", "choose a stretch of the record"),
        ("click on the record strip", "go to that trace"),
        ("wheel", "zoom the conductance axis (on the strip: the record)"),
        ("Ctrl + wheel", "zoom the other axis"),
        ("Shift + drag, middle drag", "move the view"),
        ("double click", "show the whole (on the conductance histogram: add a peak, or edit the one there)"),
        ("drag a diamond of the fit", "begin the fit elsewhere"),
        ("Up, Down with the focus on the conductance histogram", "move the caret along the axis (with Shift by five)"),
        ("right click", "data, picture, help"),
    )
    gestures = "".join(f"<tr><td>{gesture}</td><td>&nbsp;&nbsp;{does}</td></tr>" for gesture, does in mouse)
    return f"<h2>Keys</h2><table>{''.join(rows)}</table><h2>Mouse</h2><table>{gestures}</table>"
