"""What a reader of the window sees: titles once, headings and columns whole, negated windows apart, a light start."""

from __future__ import annotations

import subprocess
import sys

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QApplication

from meseta.window.conditions import Condition, ConditionSet
from meseta.window.elided import Elided
from meseta.window.jobs import Channel, JobRunner


def test_the_window_stands_before_the_engine_is_loaded():
    """numba and scipy take longer to load than all else; they come once the window is shown."""
    code = (
        "import sys, tempfile, pathlib\n"
        "from PySide6.QtCore import QSettings\n"
        "from meseta.window.application import make_application, make_window\n"
        "application, place = make_application(), pathlib.Path(tempfile.mkdtemp())\n"
        "settings = QSettings(str(place / 'window.ini'), QSettings.Format.IniFormat)\n"
        "window = make_window(application, settings, place / 'unfinished.json')\n"
        "window.show()\n"
        "application.processEvents()\n"
        "print(sorted({'numba', 'scipy', 'h5py', 'pyarrow', 'matplotlib'} & set(sys.modules)))\n"
        "window.close()\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_a_heading_takes_the_longest_form_that_fits(qapp):
    heading = Elided("Conductance histogram", "title", ("1D histogram", "1D"))
    heading.setFont(qapp.font())
    width = heading.fontMetrics().horizontalAdvance
    for given, painted in ((400, "Conductance histogram"), (width("1D histogram") + 2, "1D histogram")):
        heading.resize(given, 20)
        assert heading.painted() == painted
    heading.resize(heading.minimumSizeHint())
    assert heading.painted() == "1D"


def test_a_negated_window_is_hatched_and_dashed(window, settle):
    plain, inverted = Condition("plateau", 1e-4, 1e-3), Condition("plateau", 1e-2, 1e-1, inverted=True)
    window.session.change_conditions("draw two windows", ConditionSet((plain, inverted)))
    settle(window)
    one, other = window.widgets["histogram"].tool._bands[:2]
    assert one.pen().style() == Qt.PenStyle.SolidLine
    assert one.brush().style() == Qt.BrushStyle.SolidPattern
    assert other.pen().style() == Qt.PenStyle.DashLine
    assert other.brush().style() == Qt.BrushStyle.BDiagPattern
    window.session.change_conditions("turn it round", ConditionSet((plain,)))


def test_a_dock_under_a_tab_does_not_say_its_title_twice(window, settle):
    QApplication.processEvents()
    tabbed, alone = (window.docks[name].titleBarWidget() for name in ("peaks", "conditions"))
    assert not tabbed.said
    assert alone.said
    for name in ("plateaus", "traces", "rules"):
        window.docks[name].hide()
    settle(window)
    assert window.docks["peaks"].titleBarWidget().said


def test_no_column_of_a_table_is_cut(window, settle):
    for name in ("peaks", "plateaus", "traces"):
        window.docks[name].raise_()
        settle(window)
        view = window.widgets[name].table.view
        edge, begins = view.viewport().width(), 0
        for column in range(view.model().columnCount()):
            ends = begins + view.columnWidth(column)
            # whole, or beyond the edge; the pixels of a division without rest do not show a number
            assert ends <= edge or begins >= edge - view.model().columnCount()
            begins = ends


def test_a_plot_below_another_has_room_for_its_axes(window, settle):
    for name, lower in (("record", "item"), ("lengths", "item")):
        window.actions_by_key[f"view_{name}"].trigger()
        settle(window)
        item = getattr(window.widgets[name], lower)
        assert item.isVisible()
        assert item.getAxis("left").minimumWidth() > 20
        assert item.getAxis("bottom").minimumHeight() > 10
        window.actions_by_key[f"view_{name}"].trigger()


def test_getting_ready_goes_on_when_a_recording_is_opened(qtbot):
    jobs, told = JobRunner(), []
    lasting, other = Channel("ready", quick=True, lasting=True), Channel("other", quick=True)

    def wait(work, _):
        work.cancel.wait(0.3)
        work.check()
        return "done"

    jobs.submit(lasting, "getting ready", wait, told.append)
    jobs.submit(other, "something", wait, told.append)
    assert jobs.stoppable
    jobs.cancel()
    qtbot.waitUntil(lambda: not jobs.busy, timeout=60_000)
    assert told == ["done"]
    assert not jobs.stoppable
    jobs.close()
