"""A condition's numbers as a small form, for those who type rather than draw."""

from __future__ import annotations

from dataclasses import replace

from PySide6.QtWidgets import QCheckBox, QComboBox, QDialog, QDialogButtonBox, QFormLayout, QLabel, QLineEdit, QWidget

from meseta import typeset
from meseta.window.conditions import BOXES, WINDOWS, Condition, Kind

__all__ = ["ConditionEditor"]

_KINDS: tuple[tuple[Kind, str], ...] = (
    ("plateau", "a plateau in a conductance window"),
    ("passes", "samples in a window of conductance and displacement"),
    ("settles", "a plateau in a window of conductance and displacement"),
    ("range", "a stretch of the record"),
    ("rule", "a rule in words"),
)
_FIELDS: dict[str, tuple[str, ...]] = {
    "plateau": ("low_g0", "high_g0", "longer_than"),
    "passes": ("low_g0", "high_g0", "low_drive", "high_drive"),
    "settles": ("low_g0", "high_g0", "low_drive", "high_drive"),
    "range": ("first", "last"),
    "rule": ("text",),
}


class ConditionEditor(QDialog):
    """Kind, numbers and "not" of one condition."""

    def __init__(self, condition: Condition, parent: QWidget) -> None:
        super().__init__(parent)
        self.setWindowTitle("Condition")
        self._condition = condition
        self.kind = QComboBox()
        self.kind.addItems([words for _, words in _KINDS])
        self.kind.setCurrentIndex([kind for kind, _ in _KINDS].index(condition.kind))
        self.inverted = QCheckBox("not")
        self.inverted.setChecked(condition.inverted)
        titles = {
            "low_g0": f"from ({typeset.G0})",
            "high_g0": f"to ({typeset.G0})",
            "longer_than": f"longer than ({condition.unit})",
            "low_drive": f"displacement from ({condition.unit})",
            "high_drive": f"displacement to ({condition.unit})",
            "first": "first trace",
            "last": "last trace",
            "text": "rule",
        }
        self.edits = {name: QLineEdit(self._text(name)) for name in titles}
        self.wrong = QLabel("")
        self.wrong.setProperty("tone", "fit")
        self.wrong.setWordWrap(True)
        self._form = QFormLayout(self)
        self._form.addRow("traces with", self.kind)
        for name, title in titles.items():
            self.edits[name].setAccessibleName(title)
            self._form.addRow(title, self.edits[name])
        self._form.addRow("", self.inverted)
        self._form.addRow(self.wrong)
        buttons = QDialogButtonBox(QDialogButtonBox.StandardButton.Ok | QDialogButtonBox.StandardButton.Cancel)
        buttons.accepted.connect(self.accept)
        buttons.rejected.connect(self.reject)
        self._form.addRow(buttons)
        self.kind.currentIndexChanged.connect(self._arrange)
        self.setMinimumWidth(380)
        self._arrange()

    def _text(self, name: str) -> str:
        value = getattr(self._condition, name)
        return value if isinstance(value, str) else f"{value:.6g}"

    def _chosen(self) -> Kind:
        return _KINDS[self.kind.currentIndex()][0]

    def _arrange(self) -> None:
        for name, edit in self.edits.items():
            self._form.setRowVisible(edit, name in _FIELDS[self._chosen()])
        self.adjustSize()

    def condition(self) -> Condition:
        """Return the condition as typed.

        Raises
        ------
        ValueError
            Where something typed is not a number, or a window is empty.
        """
        kind = self._chosen()
        values: dict[str, float | int | str] = {}
        for name in _FIELDS[kind]:
            text = self.edits[name].text().strip()
            if name == "text":
                values[name] = text
            elif name in ("first", "last"):
                values[name] = int(text)
            else:
                values[name] = float(text)
        result = replace(self._condition, kind=kind, inverted=self.inverted.isChecked(), **values)  # type: ignore[arg-type]
        if kind in WINDOWS and not result.low_g0 < result.high_g0:
            raise ValueError("the conductance window is empty: write the lower end first")
        if kind in BOXES and not result.low_drive < result.high_drive:
            raise ValueError("the displacement window is empty: write the lower end first")
        if kind == "range" and result.first > result.last:
            raise ValueError("the stretch is empty: write the first trace first")
        if kind == "rule" and not result.text:
            raise ValueError("write a rule, for example rupture_found and plateaus >= 1")
        return result

    def accept(self) -> None:
        """Close if what was typed can be used, else say why not."""
        try:
            self.condition()
        except ValueError as error:
            self.wrong.setText(str(error))
            return
        super().accept()
