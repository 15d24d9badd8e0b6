"""Starting the window: the application, its look, and what happens to a fault that nobody caught."""

from __future__ import annotations

import gc
import sys
from collections.abc import Callable
from pathlib import Path
from types import TracebackType
from typing import Any

import platformdirs
from PySide6.QtCore import QSettings, Qt, QTimer
from PySide6.QtGui import QGuiApplication, QIcon
from PySide6.QtWidgets import QApplication

from meseta.errors import WorkError
from meseta.recipe import Recipe
from meseta.resources import resource
from meseta.window.jobs import Channel
from meseta.window.main_window import MainWindow
from meseta.window.theme import ThemeKeeper

__all__ = ["make_application", "make_window", "open_window"]

PREPARE = Channel("prepare", quick=True, lasting=True)
SWITCH_SECOND = 0.0005
"""How long a worker's Python code keeps the interpreter once the window's thread asks for it: painting asks often."""


AFTER_PAINT_MS = 50
"""The engine is loaded once the window stands: both need the interpreter, and the window goes first."""


def make_application() -> QApplication:
    """Return the application, made with the look of Meseta."""
    sys.setswitchinterval(SWITCH_SECOND)
    found = QApplication.instance()
    if isinstance(found, QApplication):
        return found
    QGuiApplication.setHighDpiScaleFactorRoundingPolicy(Qt.HighDpiScaleFactorRoundingPolicy.PassThrough)
    application = QApplication(sys.argv[:1])
    application.setApplicationName("Meseta")
    application.setOrganizationName("Meseta")
    application.setStyle("Fusion")
    application.setWindowIcon(QIcon(str(resource("icons", "meseta.svg"))))
    return application


def make_window(
    application: QApplication,
    settings: QSettings | None = None,
    recovery: Path | None = None,
    recipe: Recipe | None = None,
) -> MainWindow:
    """Return a window that is not shown yet.

    Parameters
    ----------
    application : QApplication
    settings : QSettings, optional
        Where the arrangement is remembered; the user's own where not given.
    recovery : Path, optional
        File for what an interrupted session leaves; in the user's folder where not given.
    recipe : Recipe, optional
        Settings to begin with.
    """
    settings = settings or QSettings()
    appearance = str(settings.value("appearance", "system"))
    themes = ThemeKeeper(application, appearance if appearance in ("light", "dark") else "system")  # type: ignore[arg-type]
    themes.apply()
    recovery = recovery or platformdirs.user_state_path("meseta") / "unfinished.json"
    return MainWindow(themes, settings, recovery, recipe)


def open_window(paths: list[str], recipe: Recipe | None = None) -> int:
    """Run the window until it is closed.

    Parameters
    ----------
    paths : list of str
        A study, or files and folders to open; may be empty.
    recipe : Recipe, optional
        Settings to begin with; a study has its own.

    Returns
    -------
    int
        Exit code of the application.
    """
    application = make_application()
    window = make_window(application, recipe=recipe)
    sys.excepthook = _shown_in(window, sys.excepthook)
    window.show()
    QTimer.singleShot(AFTER_PAINT_MS, window, lambda: prepare(window))
    window.commands.offer_recovery()
    window.commands.offer_following()
    if paths:
        QTimer.singleShot(0, window, lambda: window.commands.check_paths(paths, recipe))
    return int(application.exec())


def prepare(window: MainWindow) -> None:
    """Load what the first request would otherwise wait for, off the window's thread."""

    def task(work: Any, _: Callable[[Any], None]) -> int:
        from meseta import analysis, kernels, study

        def report(done: int, total: int) -> None:
            work.tell("getting ready (the first start takes a minute)", done, total, "parts")

        assert analysis is not None and study is not None
        return kernels.compile_all(report)

    # What is loaded by now stays: the collector need not look at a million lasting objects, which would stop every
    # thread for a tenth of a second each time.
    window.jobs.submit(PREPARE, "getting ready", task, lambda _: gc.freeze())


def _shown_in(window: MainWindow, earlier: Callable[..., Any]) -> Callable[..., Any]:
    """Return a hook that shows a fault in words, and still prints it for whoever reports it."""

    def hook(kind: type[BaseException], error: BaseException, trace: TracebackType | None) -> None:
        earlier(kind, error, trace)
        if isinstance(error, Exception):
            window.status.complain(
                WorkError(
                    f"a fault in Meseta ({kind.__name__}: {error})", "", "please report it; your data are unchanged"
                )
            )

    return hook
