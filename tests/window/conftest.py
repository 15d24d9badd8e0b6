"""The window under test: offscreen, with simulated traces, its own settings and recovery file; leftovers are faults."""

from __future__ import annotations

import gc
import os
import threading

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")

import pyqtgraph
import pytest
from PySide6.QtCore import QSettings, QTimer
from PySide6.QtWidgets import QApplication

from meseta.simulate import simulate
from meseta.window.application import make_application, make_window
from meseta.window.session import Session
from meseta.window.visibility import Lazy

pyqtgraph.setConfigOption("mouseRateLimit", -1)  # no move of a test's mouse is left out, however fast it comes
WAIT_MS = 300_000
"""Upper bound of a wait on a condition: only a hang reaches it."""


@pytest.fixture(scope="session")
def qapp():
    """The application with the look of Meseta, instead of a bare one."""
    return make_application()


@pytest.fixture(scope="session")
def mixture():
    """Sixty simulated openings: metal, molecule and tunnelling."""
    return simulate("mixture", 60, 7).traces


@pytest.fixture
def place(tmp_path):
    """Where a window keeps its settings and its recovery file."""
    return tmp_path


@pytest.fixture
def make(qapp, qtbot, place):
    """Make windows, and end each of them; threads and timers that survive are a fault."""
    before = {thread for thread in threading.enumerate() if thread.name.startswith("meseta")}
    made = []

    def new():
        settings = QSettings(str(place / "window.ini"), QSettings.Format.IniFormat)
        window = make_window(qapp, settings, place / "unfinished.json")
        window.resize(1280, 800)
        window.show()
        made.append(window)
        return window

    yield new
    for window in made:
        window.session.undo.setClean()
        window.close()
        window.shut_down(forget=True)
        timers = [timer for timer in window.findChildren(QTimer) if timer.isActive() and timer.parent() is window.jobs]
        assert not timers, "a timer of the job runner survives its window"
        window.themes.deleteLater()
        window.deleteLater()
    QApplication.sendPostedEvents(None, 52)  # DeferredDelete
    qapp.processEvents()
    gc.collect()
    after = {thread for thread in threading.enumerate() if thread.name.startswith("meseta")}
    assert after <= before, f"threads survive: {after - before}"


@pytest.fixture
def settle(qtbot):
    """Wait until a window has no work left and has drawn what came of it."""

    def wait(window):
        qtbot.waitUntil(lambda: not window.jobs.busy, timeout=WAIT_MS)
        for _ in range(6):
            QApplication.processEvents()
        steps, lazy = window.widgets["steps"], window.findChildren(Lazy)

        def still() -> bool:
            return not (window.jobs.busy or steps._soon.isActive() or any(one.pending for one in lazy))

        qtbot.waitUntil(still, timeout=WAIT_MS)

    return wait


@pytest.fixture
def window(make, settle, mixture):
    """A window with the mixture open and everything worked out."""
    one = make()
    one.session.open_traces(mixture, "mixture")
    settle(one)
    assert one.session.errors == {}
    return one


@pytest.fixture
def session(window) -> Session:
    """The model of the open window."""
    return window.session
