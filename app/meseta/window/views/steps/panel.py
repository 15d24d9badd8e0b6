"""The steps: lines of text with a coloured edge and one line of result; a click opens the form in place."""

from __future__ import annotations

from PySide6.QtCore import QSize, Qt, QTimer, Signal
from PySide6.QtGui import QKeyEvent, QMouseEvent, QPainter, QPaintEvent
from PySide6.QtWidgets import QLabel, QScrollArea, QSizePolicy, QVBoxLayout, QWidget

from meseta import typeset
from meseta.recipe import Recipe
from meseta.window.elided import Elided
from meseta.window.forms import SectionForm
from meseta.window.frame import Frame
from meseta.window.session import Change
from meseta.window.theme import Theme
from meseta.window.views.steps.lines import line_of

__all__ = ["StepsPanel"]

_EDGES = {"current": "selected", "working": "every", "out of date": "doubtful", "failed": "fit", "none": "hairline"}
_SIGNS = {"failed": "✖ ", "working": "", "out of date": "", "current": "", "none": ""}


class _Head(QWidget):
    """The clickable part of a card: edge, title, line of result."""

    pressed = Signal()

    def __init__(self, title: str) -> None:
        super().__init__()
        self.title, self.line = Elided(title, "title"), Elided()
        self.state, self.open = "none", False
        self.theme: Theme | None = None
        column = QVBoxLayout(self)
        column.setContentsMargins(12, 3, 4, 3)
        column.setSpacing(0)
        column.addWidget(self.title)
        column.addWidget(self.line)
        self.setFocusPolicy(Qt.FocusPolicy.TabFocus)
        self.setCursor(Qt.CursorShape.PointingHandCursor)
        self.setAccessibleName(title)
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Fixed)

    def tell(self, text: str, state: str) -> None:
        """Show a line and a state."""
        self.line.say(_SIGNS[state] + text, "doubtful" if state == "out of date" else "quiet")
        self.setAccessibleDescription(f"{state}: {text}")
        if state != self.state:
            self.state = state
            self.update()

    def paintEvent(self, event: QPaintEvent) -> None:
        """Paint the edge, and the paper behind an open step."""
        if self.theme is None:
            return
        theme = self.theme
        painter = QPainter(self)
        if self.open or self.hasFocus():
            painter.fillRect(self.rect(), theme.colour("panel"))
        painter.fillRect(0, 2, 3, self.height() - 4, theme.colour(_EDGES[self.state]))
        if self.hasFocus():
            painter.setPen(theme.pen("selected", dotted=True))
            painter.drawRect(self.rect().adjusted(0, 0, -1, -1))
        painter.end()

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        """Open or close the step."""
        if event.button() == Qt.MouseButton.LeftButton and self.rect().contains(event.position().toPoint()):
            self.pressed.emit()

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Open or close the step with Enter or Space; go to the next or the one before with the arrows."""
        if event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter, Qt.Key.Key_Space):
            self.pressed.emit()
        elif event.key() == Qt.Key.Key_Down:
            self.focusNextChild()
        elif event.key() == Qt.Key.Key_Up:
            self.focusPreviousChild()
        else:
            super().keyPressEvent(event)


class _Card(QWidget):
    """One step: its head, and its form once it was opened."""

    def __init__(self, panel: StepsPanel, section: str, title: str) -> None:
        super().__init__()
        self._panel, self.section, self.title = panel, section, title
        self.head = _Head(title)
        self.head.pressed.connect(lambda: panel.toggle(self.section))
        self.form: SectionForm | None = None
        self._column = QVBoxLayout(self)
        self._column.setContentsMargins(0, 0, 0, 0)
        self._column.setSpacing(0)
        self._column.addWidget(self.head)

    def set_open(self, open_: bool) -> None:
        """Show or hide the form."""
        if open_ and self.form is None:
            settings = type(getattr(self._panel.frame.session.document.recipe, self.section))
            self.form = SectionForm(self._panel.frame, self.section, settings, self.section)
            self._column.addWidget(self.form)
        if self.form is not None:
            self.form.setVisible(open_)
        self.head.open = open_
        self.head.update()


class StepsPanel(QWidget):
    """All steps, one open at a time."""

    def __init__(self, frame: Frame) -> None:
        super().__init__()
        self.frame = frame
        self.heading, self.under = QLabel("Meseta"), Elided()
        font = self.heading.font()
        font.setBold(True)
        font.setPointSizeF(font.pointSizeF() * 1.25)
        self.heading.setFont(font)
        self.heading.setWordWrap(True)
        self.cards = {name: _Card(self, name, Recipe.model_fields[name].title or name) for name in Recipe.model_fields}
        self.opened = ""
        self._lay_out()
        session = frame.session
        for signal in (session.traces_changed, session.states_changed):
            signal.connect(self.refresh_soon)
        session.result_changed.connect(lambda _: self.refresh_soon())
        session.document_changed.connect(self._document_changed)
        frame.themes.changed.connect(self.wear)
        self._soon = QTimer(self)
        self._soon.setSingleShot(True)
        self._soon.timeout.connect(self.refresh)
        self.wear(frame.theme)
        self.refresh()

    def _lay_out(self) -> None:
        inside = QWidget()
        column = QVBoxLayout(inside)
        column.setContentsMargins(8, 4, 8, 8)
        column.setSpacing(2)
        column.addWidget(self.heading)
        column.addWidget(self.under)
        column.addSpacing(8)
        for card in self.cards.values():
            column.addWidget(card)
        column.addStretch(1)
        self.area = QScrollArea()
        self.area.setWidget(inside)
        self.area.setWidgetResizable(True)
        self.area.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.area.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        outer = QVBoxLayout(self)
        outer.setContentsMargins(0, 0, 0, 0)
        outer.addWidget(self.area)
        self.setMinimumWidth(248)

    def sizeHint(self) -> QSize:
        """Ask for a narrow column."""
        return QSize(264, 600)

    def wear(self, theme: Theme) -> None:
        """Take the colours of a theme."""
        for card in self.cards.values():
            card.head.theme = theme
            card.head.update()

    def toggle(self, section: str) -> None:
        """Open a step's form, or close it if it is open."""
        self.open_step("" if section == self.opened else section)

    def open_step(self, section: str) -> None:
        """Open one step's form and close the others; an empty name closes all."""
        self.opened = section
        for name, card in self.cards.items():
            card.set_open(name == section)
        if section:
            card = self.cards[section]
            QTimer.singleShot(0, card, lambda: self._bring_into_view(section))

    def _bring_into_view(self, section: str) -> None:
        card = self.cards[section]
        self.area.ensureWidgetVisible(card, 0, 0)
        self.area.ensureWidgetVisible(card.head, 0, 8)

    def _document_changed(self, change: Change) -> None:
        if change.recipe or change.decisions:
            self.refresh_soon()

    def refresh_soon(self) -> None:
        """Write the lines again once the present events are done."""
        if not self._soon.isActive():
            self._soon.start(15)

    def refresh(self) -> None:
        """Write the lines of all steps."""
        session = self.frame.session
        traces = session.traces
        self.heading.setText(session.name or "Meseta")
        if traces is None:
            self.under.say("no recording open", "quiet")
        else:
            direction = session.document.recipe.histogram.direction
            plural = "s" if traces.traces != 1 else ""
            self.under.say(f"{typeset.integer(traces.traces)} trace{plural}, {direction}", "quiet")
        for name, card in self.cards.items():
            line = line_of(session, name)
            card.head.tell(line.text, line.state)
