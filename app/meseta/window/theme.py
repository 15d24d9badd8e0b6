"""Light and dark: the palette of Meseta handed to Qt and to the plots, following the system."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pyqtgraph as pg
from PySide6.QtCore import QObject, Qt, Signal
from PySide6.QtGui import QColor, QFont, QFontDatabase, QGuiApplication, QPalette, QPen
from PySide6.QtWidgets import QApplication

from meseta.colours import DARK, LIGHT, Palette, ramp, rgb_of_hex
from meseta.resources import resource

__all__ = ["Appearance", "Theme", "ThemeKeeper", "fixed_digits"]

Appearance = Literal["system", "light", "dark"]


@dataclass(frozen=True)
class Theme:
    """One palette and what is made of it once: colours, pens, ramps."""

    palette: Palette
    dark: bool

    def colour(self, meaning: str, alpha: int = 255) -> QColor:
        """Return the colour of a meaning ("selected", "fit" ...)."""
        colour = QColor(getattr(self.palette, meaning))
        colour.setAlpha(alpha)
        return colour

    def pen(self, meaning: str, *, dashed: bool = False, dotted: bool = False, alpha: int = 255) -> QPen:
        """Return a pen one device pixel wide: wider ones are slow on long curves."""
        style = Qt.PenStyle.DashLine if dashed else Qt.PenStyle.DotLine if dotted else Qt.PenStyle.SolidLine
        return pg.mkPen(self.colour(meaning, alpha), width=1, style=style)

    def curve_pen(self, meaning: str, *, dashed: bool = False, dotted: bool = False) -> QPen:
        """Return a pen for curves of a few hundred points: as thick to the eye on a fine screen as on a coarse one."""
        pen = self.pen(meaning, dashed=dashed, dotted=dotted)
        screen = QGuiApplication.primaryScreen()
        pen.setWidth(max(1, round(screen.devicePixelRatio())) if screen is not None else 1)
        return pen

    def wide_pen(self, meaning: str, width: float = 2.0, *, dashed: bool = False) -> QPen:
        """Return a wider pen, for the few short strokes that must stand out."""
        return pg.mkPen(
            self.colour(meaning), width=width, style=Qt.PenStyle.DashLine if dashed else Qt.PenStyle.SolidLine
        )

    def lookup(self, name: str) -> npt.NDArray[np.uint8]:
        """Return a (256, 4) table of a colour map whose zero is the paper."""
        return _table(ramp(name, self.dark, 256))

    @cached_property
    def grey_lookup(self) -> npt.NDArray[np.uint8]:
        """(256, 4) from the paper to the colour of all traces, for what is not selected."""
        paper, grey = rgb_of_hex(self.palette.panel), rgb_of_hex(self.palette.every)
        share = np.linspace(0, 1, 256)[:, None]
        return _table(paper * (1 - share) + grey * share)

    @cached_property
    def over_lookup(self) -> npt.NDArray[np.uint8]:
        """(256, 4) of the selected colour from clear to full, to lie over something else."""
        table = np.empty((256, 4), np.uint8)
        table[:, :3] = np.round(rgb_of_hex(self.palette.selected) * 255)
        table[:, 3] = np.linspace(0, 255, 256).astype(np.uint8)
        return table

    def qt_palette(self) -> QPalette:
        """Return the palette of the widgets."""
        palette, role = QPalette(), QPalette.ColorRole
        ink, quiet = self.colour("ink"), self.colour("quiet")
        ground, panel, hairline = self.colour("ground"), self.colour("panel"), self.colour("hairline")
        for which, colour in (
            (role.Window, ground), (role.WindowText, ink), (role.Base, panel), (role.AlternateBase, ground),
            (role.Text, ink), (role.Button, ground), (role.ButtonText, ink), (role.ToolTipBase, panel),
            (role.ToolTipText, ink), (role.PlaceholderText, quiet), (role.Mid, hairline), (role.Midlight, hairline),
            (role.Light, panel), (role.Dark, hairline), (role.Shadow, hairline), (role.BrightText, panel),
            (role.Highlight, self.colour("selected")), (role.HighlightedText, panel),
            (role.Link, self.colour("selected")), (role.LinkVisited, self.colour("selected")),
        ):  # fmt: skip
            palette.setColor(which, colour)
        for which in (role.WindowText, role.Text, role.ButtonText):
            palette.setColor(QPalette.ColorGroup.Disabled, which, quiet)
        return palette

    def style_sheet(self) -> str:
        """Return the few rules that the palette cannot express: calm surface, hairlines, no frames."""
        colours = {name: getattr(self.palette, name) for name in Palette.__annotations__}
        # A drop-down box that a sheet styles loses the arrow of the style: without one it looks like a line to type in.
        chevron = resource("icons", "chevron.svg").as_posix()
        tick = resource("icons", "tick-dark.svg" if self.dark else "tick-light.svg").as_posix()
        return _SHEET.format(**colours, chevron=chevron, tick=tick)


def _table(rgb: npt.NDArray[Any]) -> npt.NDArray[np.uint8]:
    table = np.full((len(rgb), 4), 255, np.uint8)
    table[:, :3] = np.round(np.asarray(rgb)[:, :3] * 255)
    return table


class ThemeKeeper(QObject):
    """Holds the theme in use, follows the system, and tells when it changes."""

    changed = Signal(object)

    def __init__(self, application: QApplication, appearance: Appearance = "system") -> None:
        super().__init__(application)
        self._application, self._appearance = application, appearance
        self.theme = self._made()
        application.styleHints().colorSchemeChanged.connect(self._system_changed)

    @property
    def appearance(self) -> Appearance:
        """What the user chose: as the system, light or dark."""
        return self._appearance

    def choose(self, appearance: Appearance) -> None:
        """Use another appearance from now on."""
        self._appearance = appearance
        self.apply()

    def apply(self) -> None:
        """Hand the theme to the application and tell everyone who draws."""
        self.theme = self._made()
        self._application.setPalette(self.theme.qt_palette())
        self._application.setStyleSheet(self.theme.style_sheet())
        self.changed.emit(self.theme)

    def _made(self) -> Theme:
        hints = QGuiApplication.styleHints()
        dark = self._appearance == "dark" or (
            self._appearance == "system" and hints.colorScheme() == Qt.ColorScheme.Dark
        )
        return Theme(DARK if dark else LIGHT, dark)

    def _system_changed(self) -> None:
        if self._appearance == "system":
            self.apply()


def fixed_digits(font: QFont) -> QFont:
    """Return a font whose figures have one width, so that columns of numbers stand in line."""
    result = QFont(font)
    if hasattr(result, "setFeature") and hasattr(QFont, "Tag"):
        result.setFeature(QFont.Tag("tnum"), 1)
    if not QFontDatabase.families():
        return font
    return result


_SHEET = """
QMainWindow, QDialog, QDockWidget, QStatusBar, QToolBar, QMenuBar {{ background: {ground}; color: {ink}; }}
QMainWindow::separator {{ background: {ground}; width: 4px; height: 4px; }}
QMainWindow::separator:hover {{ background: {hairline}; }}
QSplitter::handle {{ background: {ground}; }}
QToolBar {{ border: 0; border-bottom: 1px solid {hairline}; spacing: 4px; padding: 2px 8px; }}
QToolBar QToolButton {{ padding: 4px 8px; border: 1px solid transparent; border-radius: 3px; color: {ink}; }}
QToolBar QToolButton:hover {{ border-color: {hairline}; background: {panel}; }}
QToolBar QToolButton:checked {{ border-color: {selected}; color: {selected}; background: {panel}; }}
QToolBar QToolButton:disabled {{ color: {quiet}; }}
QToolBar QToolButton:focus {{ border-color: {selected}; }}
QStatusBar {{ border-top: 1px solid {hairline}; }}
QStatusBar::item {{ border: 0; }}
QDockWidget {{ titlebar-close-icon: none; titlebar-normal-icon: none; font-weight: bold; }}
QDockWidget::title {{ background: {ground}; padding: 4px 8px; text-align: left; }}
QTabBar {{ qproperty-drawBase: 0; }}
QTabBar::tab {{ background: {ground}; color: {quiet}; padding: 4px 8px; border: 0;
  border-bottom: 2px solid transparent; }}
QTabBar::tab:selected {{ color: {ink}; border-bottom: 2px solid {selected}; }}
QTabBar::tab:hover {{ color: {ink}; }}
QTabWidget::pane {{ border: 0; }}
QScrollArea {{ border: 0; background: {ground}; }}
QTableView {{ background: {panel}; color: {ink}; border: 1px solid {hairline}; gridline-color: {hairline};
  selection-background-color: {selected}; selection-color: {panel}; alternate-background-color: {panel}; }}
QTableView::item {{ padding: 0 4px; }}
QHeaderView {{ background: {panel}; }}
QHeaderView::section {{ background: {panel}; color: {quiet}; border: 0;
  border-bottom: 1px solid {hairline}; padding: 4px 8px; }}
QTableCornerButton::section {{ background: {panel}; border: 0; }}
QLineEdit, QComboBox, QAbstractSpinBox, QPlainTextEdit, QTextBrowser, QListView {{ background: {panel}; color: {ink};
  border: 1px solid {hairline}; border-radius: 2px; padding: 2px 4px; selection-background-color: {selected};
  selection-color: {panel}; }}
QLineEdit:focus, QComboBox:focus, QAbstractSpinBox:focus, QPlainTextEdit:focus, QListView:focus, QTableView:focus,
QTextBrowser:focus {{ border-color: {selected}; }}
QLineEdit[wrong="true"] {{ border: 1px solid {fit}; }}
QComboBox::drop-down {{ border: 0; width: 16px; }}
QComboBox::down-arrow {{ image: url("{chevron}"); width: 10px; height: 10px; }}
QDialogButtonBox {{ dialogbuttonbox-buttons-have-icons: 0; }}
QCheckBox::indicator {{ background: {panel}; border: 1px solid {quiet}; border-radius: 2px;
  width: 12px; height: 12px; }}
QCheckBox::indicator:hover, QCheckBox:focus::indicator {{ border-color: {selected}; }}
QCheckBox::indicator:checked {{ background: {selected}; border-color: {selected}; image: url("{tick}"); }}
QCheckBox::indicator:disabled {{ border-color: {hairline}; }}
QCheckBox::indicator:checked:disabled {{ background: {quiet}; border-color: {quiet}; }}
QPushButton {{ background: {panel}; color: {ink}; border: 1px solid {hairline}; border-radius: 3px;
  padding: 4px 12px; }}
QPushButton:hover {{ border-color: {quiet}; }}
QPushButton:focus {{ border-color: {selected}; }}
QPushButton:default {{ border-color: {selected}; color: {selected}; }}
QPushButton:disabled {{ color: {quiet}; }}
QProgressBar {{ background: {hairline}; border: 0; border-radius: 2px; max-height: 6px; min-height: 6px; }}
QProgressBar::chunk {{ background: {selected}; border-radius: 2px; }}
QToolTip {{ background: {panel}; color: {ink}; border: 1px solid {hairline}; padding: 4px; }}
QMenu {{ background: {panel}; color: {ink}; border: 1px solid {hairline}; }}
QMenu::item {{ padding: 4px 24px 4px 16px; }}
QMenu::item:selected {{ background: {selected}; color: {panel}; }}
QMenu::item:disabled {{ color: {quiet}; }}
QMenu::separator {{ height: 1px; background: {hairline}; margin: 4px 8px; }}
QMenuBar::item {{ padding: 4px 8px; background: transparent; }}
QMenuBar::item:selected {{ background: {panel}; }}
QLabel[tone="quiet"] {{ color: {quiet}; }}
QLabel[tone="selected"] {{ color: {selected}; font-weight: bold; }}
QLabel[tone="fit"] {{ color: {fit}; }}
QLabel[tone="doubtful"] {{ color: {doubtful}; }}
QLabel[tone="title"] {{ font-weight: bold; }}
QFrame[role="panel"], QWidget[role="panel"] {{ background: {panel}; }}
"""
