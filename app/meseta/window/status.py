"""The status line: what the pointer points at, what is worked on, and what went wrong."""

from __future__ import annotations

import math

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QHBoxLayout, QLabel, QProgressBar, QStatusBar, QToolButton, QWidget

from meseta import typeset
from meseta.errors import MesetaError
from meseta.window.session import Hover, Session
from meseta.work import Progress

__all__ = ["StatusLine", "readout"]


def readout(hover: Hover, axis: str) -> str:
    """Return what stands under the pointer: G0, siemens, ohm, displacement."""
    value_g0 = 10.0**hover.u if axis == "logarithmic" else hover.u
    from meseta import quantities

    siemens = value_g0 * quantities.G0_SIEMENS
    ohm = 1.0 / siemens if siemens else math.inf
    parts = [typeset.conductance(value_g0), typeset.prefixed(siemens, "S"), typeset.prefixed(ohm, "ohm")]
    if math.isfinite(hover.drive):
        parts.append(f"{hover.drive:.3f}".replace("-", typeset.MINUS) + f"{typeset.THIN_SPACE}{hover.unit}")
    return "    ".join(parts)


class StatusLine(QStatusBar):
    """The line at the foot of the window."""

    def __init__(self, session: Session) -> None:
        super().__init__()
        self._session = session
        self.pointer = QLabel("")
        self.pointer.setAccessibleName("Under the pointer")
        self.pointer.setMinimumWidth(self.pointer.fontMetrics().horizontalAdvance("0") * 52)
        self.pointer.setAlignment(Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)
        self.pointer.setContentsMargins(0, 0, 12, 0)
        self.work_label, self.bar, self.stop = QLabel(""), QProgressBar(), QToolButton()
        self.bar.setTextVisible(False)
        self.bar.setFixedWidth(160)
        self.bar.setAccessibleName("Progress")
        self.stop.setText("Stop")
        self.stop.setAccessibleName("Stop the work under way")
        self.stop.clicked.connect(lambda: session.jobs.cancel())
        self.work = QWidget()
        row = QHBoxLayout(self.work)
        row.setContentsMargins(8, 0, 8, 0)
        for widget in (self.work_label, self.bar, self.stop):
            row.addWidget(widget)
        self.work.hide()
        self.trouble = QLabel("")
        self.trouble.setProperty("tone", "fit")
        self.trouble.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        self.trouble.hide()
        self.addWidget(self.work)
        self.addWidget(self.trouble, 1)
        self.addPermanentWidget(self.pointer)
        self.setSizeGripEnabled(False)
        session.hover_moved.connect(self._show_hover)
        session.jobs.progressed.connect(self._show_progress)

    def _show_hover(self, hover: Hover | None) -> None:
        self.pointer.setText("" if hover is None else readout(hover, self._session.axis))

    def _show_progress(self, progress: Progress | None) -> None:
        self.work.setVisible(progress is not None)
        if progress is None:
            return
        self.stop.setVisible(self._session.jobs.stoppable)
        words = progress.label
        if progress.total:
            words += f", {typeset.integer(progress.done)} of {typeset.integer(progress.total)} {progress.unit}"
        self.work_label.setText(words)
        self.bar.setRange(0, progress.total or 0)
        self.bar.setValue(min(progress.done, progress.total))

    def complain(self, error: MesetaError | None) -> None:
        """Show an error in words until the next one, or until something succeeds."""
        text = "" if error is None else str(error)
        self.trouble.setText(
            self.fontMetrics().elidedText(text, Qt.TextElideMode.ElideMiddle, max(self.width() - 520, 240))
        )
        self.trouble.setToolTip(text)
        self.trouble.setVisible(bool(text))
