"""The middle of the window: the plots on the shared conductance axis side by side, or the first page."""

from __future__ import annotations

from PySide6.QtCore import Qt, Signal
from PySide6.QtWidgets import QHBoxLayout, QLabel, QPushButton, QSplitter, QStackedWidget, QVBoxLayout, QWidget

from meseta.window.plots.panel import SpinePanel
from meseta.window.views import View

__all__ = ["Centre", "FirstPage", "Spine"]


class Spine(QSplitter):
    """The plots side by side; only the leftmost one that is visible shows the scale."""

    def __init__(self) -> None:
        super().__init__(Qt.Orientation.Horizontal)
        self.setChildrenCollapsible(False)
        self.setHandleWidth(4)
        self.setMinimumHeight(220)
        self.panels: dict[str, SpinePanel] = {}

    def add(self, view: View, panel: SpinePanel) -> None:
        """Put a panel at the right end."""
        self.panels[view.name] = panel
        self.addWidget(panel)
        self.setStretchFactor(self.count() - 1, view.stretch)
        self.show_one_scale()

    def set_shown(self, name: str, shown: bool) -> None:
        """Show or hide a panel."""
        self.panels[name].setVisible(shown)
        self.show_one_scale()

    def show_one_scale(self) -> None:
        """Give the tick labels to the leftmost panel that is not hidden."""
        first = True
        for place in range(self.count()):
            panel = self.widget(place)
            if isinstance(panel, SpinePanel) and not panel.isHidden():
                panel.show_scale(first)
                first = False


class FirstPage(QWidget):
    """What stands there before anything is open: what to do first."""

    chosen = Signal(str)
    """Key of an action."""

    def __init__(self) -> None:
        super().__init__()
        self.setProperty("role", "panel")
        self.setAttribute(Qt.WidgetAttribute.WA_StyledBackground, True)
        title = QLabel("Drop recordings here")
        font = title.font()
        font.setPointSizeF(font.pointSizeF() * 1.25)
        font.setBold(True)
        title.setFont(font)
        words = QLabel(
            "Files, a folder, or a study. Meseta shows what it recognised before it reads, "
            "finds the plateaus and builds the histograms."
        )
        words.setWordWrap(True)
        words.setProperty("tone", "quiet")
        self.buttons = QVBoxLayout()
        self.buttons.setSpacing(8)
        for key, text in (
            ("open", "Open files …"),
            ("open_folder", "Open a folder …"),
            ("open_sample", "Try the bundled recordings"),
        ):
            self.offer(key, text)
        inner = QVBoxLayout()
        inner.setSpacing(12)
        for widget in (title, words):
            inner.addWidget(widget)
        inner.addLayout(self.buttons)
        box = QWidget()
        box.setLayout(inner)
        box.setMaximumWidth(420)
        row = QHBoxLayout()
        row.addStretch(1)
        row.addWidget(box, 3)
        row.addStretch(1)
        column = QVBoxLayout(self)
        column.addStretch(2)
        column.addLayout(row)
        column.addStretch(3)

    def offer(self, key: str, text: str) -> None:
        """Add one more thing to do."""
        button = QPushButton(text)
        button.clicked.connect(lambda: self.chosen.emit(key))
        self.buttons.addWidget(button)


class Centre(QStackedWidget):
    """First page, file check or plots."""

    def __init__(self) -> None:
        super().__init__()
        self.first, self.spine = FirstPage(), Spine()
        self.check: QWidget | None = None
        self.addWidget(self.first)
        self.addWidget(self.spine)

    def show_first(self) -> None:
        """Show what to do first."""
        self.setCurrentWidget(self.first)

    def show_check(self, check: QWidget) -> None:
        """Show the file check."""
        if self.check is None:
            self.check = check
            self.addWidget(check)
        self.setCurrentWidget(check)

    def show_spine(self) -> None:
        """Show the plots."""
        self.setCurrentWidget(self.spine)
