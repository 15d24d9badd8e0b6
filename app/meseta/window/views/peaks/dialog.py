"""The numbers of one peak as a small form."""

from __future__ import annotations

from PySide6.QtWidgets import QCheckBox, QDialog, QDialogButtonBox, QFormLayout, QLabel, QLineEdit, QWidget

from meseta import typeset
from meseta.recipe.peaks import PeakStart
from meseta.window.peak_editing import PeakEditor

__all__ = ["PeakDialog", "edit_peak"]


class PeakDialog(QDialog):
    """Name, start, bounds, and what is held of one peak."""

    def __init__(self, start: PeakStart, title: str, axis: str, parent: QWidget) -> None:
        super().__init__(parent)
        self.setWindowTitle(title[:1].upper() + title[1:])
        self._start = start
        width_unit = "decades" if axis == "logarithmic" else typeset.G0
        titles = {
            "name": "name",
            "position_g0": f"begins at ({typeset.G0})",
            "width": f"width, sigma ({width_unit})",
            "low_g0": f"not below ({typeset.G0})",
            "high_g0": f"not above ({typeset.G0})",
            "multiple": "which multiple, if tied",
        }
        self.edits = {name: QLineEdit(_text(getattr(start, name))) for name in titles}
        self.fixed, self.fixed_width = QCheckBox("hold the position"), QCheckBox("hold the width")
        self.fixed.setChecked(start.fixed)
        self.fixed_width.setChecked(start.fixed_width)
        self.tied = QCheckBox("takes part in a tie of positions")
        self.tied.setChecked(start.tied)
        self.wrong = QLabel("")
        self.wrong.setProperty("tone", "fit")
        self.wrong.setWordWrap(True)
        form = QFormLayout(self)
        for name, words in titles.items():
            self.edits[name].setAccessibleName(words)
            self.edits[name].setPlaceholderText("" if name in ("name", "position_g0") else "open")
            form.addRow(words, self.edits[name])
        self.edits["multiple"].setPlaceholderText("in their order")
        self.edits["width"].setPlaceholderText("from the histogram")
        form.addRow("", self.fixed)
        form.addRow("", self.fixed_width)
        form.addRow("", self.tied)
        form.addRow(self.wrong)
        buttons = QDialogButtonBox(QDialogButtonBox.StandardButton.Ok | QDialogButtonBox.StandardButton.Cancel)
        buttons.accepted.connect(self.accept)
        buttons.rejected.connect(self.reject)
        form.addRow(buttons)
        self.setMinimumWidth(340)
        self.edits["position_g0"].setFocus()

    def start(self) -> PeakStart:
        """Return the peak as typed.

        Raises
        ------
        ValueError
            In words, where something typed cannot be used.
        """
        numbers = {name: _number(self.edits[name].text()) for name in self.edits if name != "name"}
        position, low, high, width = (numbers[name] for name in ("position_g0", "low_g0", "high_g0", "width"))
        if position is None:
            raise ValueError("write where the fit begins, in G0")
        for name, words in (("position_g0", "a conductance"), ("low_g0", "a bound"), ("high_g0", "a bound")):
            if numbers[name] is not None and not numbers[name] > 0:  # type: ignore[operator]
                raise ValueError(f"{words} is above zero")
        if low is not None and high is not None and low >= high:
            raise ValueError("the bounds are empty: write the lower end first")
        if (low is not None and position < low) or (high is not None and position > high):
            raise ValueError("the fit begins outside its bounds")
        for name in ("width", "multiple"):
            if numbers[name] is not None and not numbers[name] > 0:  # type: ignore[operator]
                raise ValueError(f"a {name} is above zero")
        if self.fixed_width.isChecked() and width is None:
            raise ValueError("write the width that is to be held")
        return PeakStart(
            name=self.edits["name"].text().strip(),
            position_g0=position,
            width=width,
            low_g0=low,
            high_g0=high,
            multiple=numbers["multiple"],
            fixed=self.fixed.isChecked(),
            fixed_width=self.fixed_width.isChecked(),
            tied=self.tied.isChecked(),
            tied_width=self._start.tied_width,
        )

    def accept(self) -> None:
        """Close if what was typed can be used, else say why not."""
        try:
            self.start()
        except ValueError as error:
            self.wrong.setText(str(error))
            return
        super().accept()


def edit_peak(editor: PeakEditor, place: int, parent: QWidget) -> PeakDialog | None:
    """Ask for the numbers of a peak; they are written when the form is accepted."""
    starts = editor.starts()
    if not 0 <= place < len(starts):
        return None
    dialog = PeakDialog(starts[place], editor.name_of(place), editor.axis, parent)
    dialog.accepted.connect(lambda: editor.replace(place, dialog.start()))
    dialog.finished.connect(dialog.deleteLater)
    dialog.open()
    return dialog


def _text(value: str | float | None) -> str:
    return "" if value is None else value if isinstance(value, str) else f"{value:.6g}"


def _number(text: str) -> float | None:
    plain = text.strip().replace(",", ".").replace(typeset.MINUS, "-")
    if not plain:
        return None
    try:
        value = float(plain)
    except ValueError:
        raise ValueError(f"'{text.strip()}' is not a number") from None
    if not abs(value) < float("inf"):
        raise ValueError(f"'{text.strip()}' is not a finite number")
    return value
