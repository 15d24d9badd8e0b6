"""The main window: docks, menus, tool bar and status line, built from the tables of views and actions."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy.typing as npt
from PySide6.QtCore import QByteArray, QSettings, QSize, Qt, QTimer
from PySide6.QtGui import QAction, QActionGroup, QCloseEvent, QDragEnterEvent, QDropEvent, QKeySequence
from PySide6.QtWidgets import QDockWidget, QMainWindow, QMenu, QSizePolicy, QToolBar, QWidget

from meseta.errors import MesetaError
from meseta.recipe import Recipe
from meseta.window.actions import ACTIONS, MENUS, ActionSpec
from meseta.window.centre import Centre
from meseta.window.collector import Collector
from meseta.window.commands import Commands
from meseta.window.dock_title import DockTitle, name_docks
from meseta.window.following import Follower, FollowLine
from meseta.window.help import HelpBrowser
from meseta.window.jobs import JobRunner
from meseta.window.keeper import Keeper
from meseta.window.peak_editing import PeakEditor
from meseta.window.plots.panel import PlotPanel
from meseta.window.recent import RecentFiles
from meseta.window.session import Session
from meseta.window.status import StatusLine
from meseta.window.theme import Theme, ThemeKeeper
from meseta.window.views import VIEWS, View

__all__ = ["MainWindow"]

LAYOUT_VERSION = 4
"""Raised when docks are added or renamed, so that an older arrangement is not forced upon them."""

_AREAS = {
    "left": Qt.DockWidgetArea.LeftDockWidgetArea,
    "right": Qt.DockWidgetArea.RightDockWidgetArea,
    "below": Qt.DockWidgetArea.BottomDockWidgetArea,
}


class MainWindow(QMainWindow):
    """The window.  It holds the session and lends its views what :class:`~meseta.window.frame.Frame` promises."""

    def __init__(self, themes: ThemeKeeper, settings: QSettings, recovery: Path, recipe: Recipe | None = None) -> None:
        super().__init__()
        self.themes, self.settings = themes, settings
        self.jobs = JobRunner(self)
        self.collector = Collector(self.jobs)
        self.session = Session(self.jobs, recipe, self)
        self.keeper = Keeper(self.session, recovery)
        self.recent = RecentFiles(settings)
        self.follower = Follower(self.session, settings)
        self.commands = Commands(self, recovery)
        self.actions_by_key: dict[str, QAction] = {}
        self.docks: dict[str, QDockWidget] = {}
        self.widgets: dict[str, QWidget] = {}
        self.centre = Centre()
        self.status, self.follow_line = StatusLine(self.session), FollowLine(self.follower)
        self.help: HelpBrowser | None = None
        self._first_state = QByteArray()
        self._naming = QTimer(self)
        self._naming.setSingleShot(True)
        self._naming.setInterval(0)
        self._naming.timeout.connect(lambda: name_docks(self, list(self.docks.values())))
        self._build()
        self._connect()
        self._remember()

    # -- building ----------------------------------------------------------------------------------------------------

    def _build(self) -> None:
        self.setObjectName("meseta")
        self.setAcceptDrops(True)
        self.setDockNestingEnabled(True)
        self.setCentralWidget(self.centre)
        self.setStatusBar(self.status)
        self.status.insertWidget(0, self.follow_line, 1)
        self.setCorner(Qt.Corner.BottomLeftCorner, Qt.DockWidgetArea.LeftDockWidgetArea)
        self.setCorner(Qt.Corner.BottomRightCorner, Qt.DockWidgetArea.RightDockWidgetArea)
        self.setTabPosition(Qt.DockWidgetArea.AllDockWidgetAreas, _tabs_on_top())
        self._make_actions()
        for view in VIEWS:
            self._add_view(view)
        self._tab_docks()
        self._make_menus()
        self._make_bar()
        self._title()

    def _make_actions(self) -> None:
        for spec in ACTIONS:
            action = QAction(spec.text, self)
            action.setShortcuts([QKeySequence(keys) for keys in spec.keys])
            action.setProperty("menu", spec.menu)
            action.setToolTip(_tip(spec))
            action.setStatusTip("")
            action.triggered.connect(lambda _=False, key=spec.key: self.run_action(key))
            self.actions_by_key[spec.key] = action
            self.addAction(action)

    def _add_view(self, view: View) -> None:
        widget = view.make(self)
        self.widgets[view.name] = widget
        if view.area == "spine":
            self.centre.spine.add(view, widget)  # type: ignore[arg-type]
            toggle = QAction(view.title, self)
            toggle.setCheckable(True)
            toggle.setChecked(view.shown)
            toggle.toggled.connect(lambda shown, name=view.name: self.centre.spine.set_shown(name, shown))
            widget.setVisible(view.shown)
        else:
            dock = QDockWidget(view.title, self)
            dock.setObjectName(view.name)
            dock.setWidget(widget)
            dock.setAccessibleName(view.title)
            dock.setTitleBarWidget(widget.header if isinstance(widget, PlotPanel) else DockTitle(view.title))
            for moved in (dock.visibilityChanged, dock.topLevelChanged, dock.dockLocationChanged):
                moved.connect(self._naming.start)
            self.addDockWidget(_AREAS[view.area], dock)
            dock.setVisible(view.shown)
            self.docks[view.name] = dock
            toggle = dock.toggleViewAction()
            toggle.triggered.connect(lambda shown, one=view: self._make_room(one, shown))
            if view.steps:
                dock.visibilityChanged.connect(
                    lambda shown, one=view: self.session.pipeline.want(one.name, one.steps if shown else ())
                )
        toggle.setProperty("view", view.name)
        toggle.setProperty("menu", "Views")
        self.actions_by_key[f"view_{view.name}"] = toggle
        self.addAction(toggle)

    def _tab_docks(self) -> None:
        """Lay the tables of the right side over one another; conditions and groups stand below them."""
        right = [view.name for view in VIEWS if view.area == "right" and view.name not in ("conditions", "groups")]
        self.splitDockWidget(self.docks[right[0]], self.docks["conditions"], Qt.Orientation.Vertical)
        self.splitDockWidget(self.docks["conditions"], self.docks["groups"], Qt.Orientation.Vertical)
        for before, after in pairwise(right):
            self.tabifyDockWidget(self.docks[before], self.docks[after])
        self.docks[right[0]].raise_()

    def _size_docks(self) -> None:
        wide = max(self.width(), 1000)
        docks = self.docks
        self.resizeDocks(
            [docks["steps"], docks["peaks"]], [264, min(max(wide // 5, 252), 420)], Qt.Orientation.Horizontal
        )
        self.resizeDocks([docks["strip"]], [max(self.height() // 5, 130)], Qt.Orientation.Vertical)
        self.resizeDocks(
            [docks["peaks"], docks["conditions"], docks["groups"]], [300, 200, 130], Qt.Orientation.Vertical
        )

    def _make_room(self, view: View, shown: bool) -> None:
        """Bring a dock that was asked for to the front with the room its picture needs; take the room back after it."""
        dock = self.docks[view.name]
        if not shown:
            if view.room:
                self._size_docks()
            return
        dock.raise_()
        if view.room > dock.width() and not dock.isFloating():
            self.resizeDocks([dock], [min(view.room, self.width() * 2 // 5)], Qt.Orientation.Horizontal)
            below = [self.docks[name] for name in ("conditions", "groups")]
            self.resizeDocks([dock, *below], [self.height() * 3 // 5, 150, 100], Qt.Orientation.Vertical)

    def _make_menus(self) -> None:
        for name in MENUS:
            menu = self.menuBar().addMenu(name)
            for spec in (one for one in ACTIONS if one.menu == name):
                if spec.line_before:
                    menu.addSeparator()
                menu.addAction(self.actions_by_key[spec.key])
                if spec.key == "open_sample":
                    self.recent_menu = menu.addMenu("Open again")
            if name == "Look":
                self._add_view_menu(menu)
        self.recent_menu.aboutToShow.connect(self._fill_recent)

    def _add_view_menu(self, menu: QMenu) -> None:
        menu.addSeparator()
        for number, view in enumerate(VIEWS, 1):
            action = self.actions_by_key[f"view_{view.name}"]
            if number <= 9:
                action.setShortcut(QKeySequence(f"Ctrl+{number}"))
            menu.addAction(action)
        menu.addSeparator()
        appearances = menu.addMenu("Appearance")
        group = QActionGroup(self)
        for appearance, text in (("system", "As the system"), ("light", "Light"), ("dark", "Dark")):
            action = appearances.addAction(text)
            action.setCheckable(True)
            action.setChecked(self.themes.appearance == appearance)
            action.triggered.connect(lambda _=False, one=appearance: self._choose_appearance(one))
            group.addAction(action)

    def _make_bar(self) -> None:
        bar = QToolBar("Tools", self)
        bar.setObjectName("tools")
        bar.setMovable(False)
        bar.setToolButtonStyle(Qt.ToolButtonStyle.ToolButtonTextOnly)
        menu = ""
        for spec in ACTIONS:
            if not spec.bar:
                continue
            if menu and menu != spec.menu:
                bar.addSeparator()
            menu = spec.menu
            bar.addAction(self.actions_by_key[spec.key])
            self.actions_by_key[spec.key].setIconText(spec.bar)
            bar.widgetForAction(self.actions_by_key[spec.key]).setAccessibleName(spec.text)
        stretch = QWidget()
        stretch.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Preferred)
        bar.addWidget(stretch)
        find = self.actions_by_key["find_action"]
        find.setIconText("Find an action")
        bar.addAction(find)
        self.addToolBar(bar)

    def _connect(self) -> None:
        session = self.session
        for signal in (session.traces_changed, session.undo.indexChanged, session.undo.cleanChanged):
            signal.connect(self._refresh_actions)
        session.document_changed.connect(lambda _: self._refresh_actions())
        session.subset_changed.connect(lambda _: self._refresh_actions())
        PeakEditor.of(session).chosen_changed.connect(self._refresh_actions)
        session.traces_changed.connect(self._traces_changed)
        session.saved_changed.connect(lambda _: self._title())
        session.problem.connect(self.status.complain)
        session.result_changed.connect(lambda name: self.status.complain(None) if name == "peaks" else None)
        self.jobs.failed.connect(self.status.complain)
        self.keeper.failed.connect(self.status.complain)
        self.follower.changed.connect(self._refresh_actions)
        self.follow_line.list_asked.connect(lambda: self.run_action("left_out"))
        self.centre.first.chosen.connect(self.run_action)
        self._refresh_actions()

    # -- remembering -------------------------------------------------------------------------------------------------

    def _remember(self) -> None:
        """Take the place and arrangement of last time, if they belong to this arrangement of docks."""
        self.resize(1360, 860)
        geometry, state = self.settings.value("window/geometry"), self.settings.value("window/state")
        self._restored = False
        if isinstance(geometry, QByteArray):
            self.restoreGeometry(geometry)
        if isinstance(state, QByteArray):
            self._restored = self.restoreState(state, LAYOUT_VERSION)
        for name, panel in self.centre.spine.panels.items():
            first = next(view.shown for view in VIEWS if view.name == name)
            shown = self.settings.value(f"window/shown/{name}", first, bool)
            self.actions_by_key[f"view_{name}"].setChecked(bool(shown))
            panel.setVisible(bool(shown))
        self.centre.spine.show_one_scale()
        if not self._restored:
            self._size_docks()
        self._first_state = QByteArray() if self._restored else self.saveState(LAYOUT_VERSION)

    def _keep_arrangement(self) -> None:
        self.settings.setValue("window/geometry", self.saveGeometry())
        self.settings.setValue("window/state", self.saveState(LAYOUT_VERSION))
        for name, panel in self.centre.spine.panels.items():
            self.settings.setValue(f"window/shown/{name}", not panel.isHidden())
        self.settings.sync()

    def arrange_as_first(self) -> None:
        """Put every dock back where it stood at first."""
        for view in VIEWS:
            if view.area != "spine":
                dock = self.docks[view.name]
                dock.setFloating(False)
                self.addDockWidget(_AREAS[view.area], dock)
                dock.setVisible(view.shown)
            else:
                self.actions_by_key[f"view_{view.name}"].setChecked(view.shown)
        self._tab_docks()
        self._size_docks()

    def _choose_appearance(self, appearance: str) -> None:
        self.themes.choose(appearance)  # type: ignore[arg-type]
        self.settings.setValue("appearance", appearance)

    # -- what views may ask (Frame) ----------------------------------------------------------------------------------

    @property
    def theme(self) -> Theme:
        """The colours in use."""
        return self.themes.theme

    def say(self, text: str) -> None:
        """Show a passing remark in the status line."""
        self.status.showMessage(text, 5000)

    def show_help(self, page: str) -> None:
        """Open a page of the built-in help."""
        if self.help is None:
            self.help = HelpBrowser(self)
        self.help.open_page(page)

    def run_action(self, name: str) -> None:
        """Run one of the window's actions by its key."""
        function: Callable[[], None] = getattr(self.commands, f"do_{name}")
        try:
            function()
        except MesetaError as error:
            self.status.complain(error)

    def decide(self, rows: list[int], keep: bool | None) -> None:
        """Keep or reject traces by hand, or leave them to the rules (None)."""
        self.commands.decide(rows, keep)

    def look_at(self, conductance_g0: float) -> None:
        """Bring a conductance into view."""
        self.commands.look_at(conductance_g0)

    def reset_view(self) -> None:
        """Show the whole of both axes."""
        self.commands.do_whole()

    def export_columns(self, name: str, columns: Mapping[str, npt.NDArray[Any]]) -> None:
        """Ask where, and write columns as CSV off the window's thread."""
        self.commands.export_columns(name, columns)

    # -- following the session ---------------------------------------------------------------------------------------

    def _traces_changed(self) -> None:
        if self.session.traces is None:
            self.centre.show_first()
        else:
            self.centre.show_spine()
        self._title()

    def _title(self) -> None:
        session = self.session
        if session.traces is None:
            self.setWindowTitle("Meseta")
            return
        mark = "" if session.undo.isClean() else "*"
        self.setWindowTitle(f"{session.name}{mark} — Meseta")

    def _refresh_actions(self, *_: Any) -> None:
        session = self.session
        open_ = session.traces is not None
        usable = {
            "always": True,
            "open": open_,
            "conditions": open_ and bool(session.document.conditions.conditions),
            "subset": open_ and session.subset is not None,
            "peak": open_ and PeakEditor.of(session).chosen >= 0,
            "following": self.follower.active,
        }
        for spec in ACTIONS:
            self.actions_by_key[spec.key].setEnabled(usable.get(spec.when, True))
        undo, redo = self.actions_by_key["undo"], self.actions_by_key["redo"]
        undo.setEnabled(session.undo.canUndo())
        redo.setEnabled(session.undo.canRedo())
        undo.setText(f"Undo: {session.undo.undoText()}" if session.undo.canUndo() else "Undo")
        redo.setText(f"Redo: {session.undo.redoText()}" if session.undo.canRedo() else "Redo")

    def _fill_recent(self) -> None:
        self.recent_menu.clear()
        for paths in self.recent.entries():
            again = self.recent_menu.addAction(RecentFiles.title(paths))
            again.triggered.connect(lambda _=False, one=paths: self.commands.check_paths(one))
        if self.recent_menu.isEmpty():
            self.recent_menu.addAction("nothing opened yet").setEnabled(False)

    # -- files dropped, closing --------------------------------------------------------------------------------------

    def dragEnterEvent(self, event: QDragEnterEvent) -> None:
        """Take files and folders."""
        if any(url.isLocalFile() for url in event.mimeData().urls()):
            event.acceptProposedAction()

    def dropEvent(self, event: QDropEvent) -> None:
        """Open what was dropped."""
        paths = [url.toLocalFile() for url in event.mimeData().urls() if url.isLocalFile()]
        event.acceptProposedAction()
        QTimer.singleShot(0, self, lambda: self.commands.check_paths(paths))

    def closeEvent(self, event: QCloseEvent) -> None:
        """Ask about what is not saved, then stop all work and leave."""
        if not self.commands.may_leave():
            event.ignore()
            return
        self.commands.remember_place()
        self._keep_arrangement()
        self.shut_down(forget=True)
        event.accept()

    def shut_down(self, *, forget: bool) -> None:
        """Stop all work and wait for it."""
        self.jobs.close()
        self.follower.close()
        self.keeper.close(forget=forget)
        self.collector.close()

    def sizeHint(self) -> QSize:
        """Ask for a comfortable size."""
        return QSize(1360, 860)


def _tip(spec: ActionSpec) -> str:
    keys = f" ({QKeySequence(spec.keys[0]).toString(QKeySequence.SequenceFormat.NativeText)})" if spec.keys else ""
    return f"{spec.help or spec.text.rstrip(' …')}{keys}"


def _tabs_on_top() -> Any:
    from PySide6.QtWidgets import QTabWidget

    return QTabWidget.TabPosition.North
