"""Traces that arrive while reading goes on, and traces made anew by another calibration."""

from __future__ import annotations

import numpy as np
import pytest
from driving import press
from PySide6.QtCore import Qt
from PySide6.QtWidgets import QApplication

from meseta import study
from meseta.analysis import Analysis
from meseta.resources import sample
from meseta.traces import TraceIdentity
from meseta.window import opening
from meseta.window.conditions import Condition, ConditionSet
from meseta.window.session import Span

FOLDER = sample() / "bench_check"


@pytest.fixture
def eager(monkeypatch):
    """Show what is read so far after every file."""
    monkeypatch.setattr(opening, "FIRST_SECOND", 0.0)
    monkeypatch.setattr(opening, "NEXT_SECOND", 0.0)


@pytest.fixture
def opened(make, settle):
    """A window with a folder of recordings open."""
    window = make()
    window.commands.open_paths([str(FOLDER)])
    settle(window)
    assert window.session.errors == {}
    return window


def test_traces_arrive_while_reading_goes_on(make, settle, eager):
    window, sizes = make(), []
    window.session.traces_changed.connect(lambda: sizes.append(window.session.traces.traces))
    states = []
    window.session.result_changed.connect(
        lambda name: states.append(window.session.shown["histogram"].provisional) if name == "histogram" else None
    )
    window.commands.open_paths([str(FOLDER)])
    settle(window)
    whole = study.read([str(FOLDER)], window.session.document.recipe)
    assert len(sizes) > 1 and sizes == sorted(sizes) and sizes[-1] == whole.traces
    assert sizes[0] < whole.traces
    assert not window.session.growing and not states[-1]
    assert window.session.traces.key == whole.key
    histogram = Analysis(whole, window.session.document.recipe).histogram()
    assert np.array_equal(window.session.result("histogram").counts, histogram.counts)


def test_current_trace_and_conditions_survive_growth(opened, settle):
    session = opened.session
    whole = session.traces
    session.open_traces(whole.take(np.arange(8)), "growing", growing=True)
    settle(opened)
    assert session.shown["histogram"].provisional and session.state("plateaus") == "none"
    session.go_to(5)
    conditions = ConditionSet((Condition("plateau", 0.5, 1.5),))
    session.change_conditions("draw", conditions)
    session.replace_traces(whole, session.document.recipe)
    settle(opened)
    assert session.current == 5 and session.document.conditions == conditions
    assert session.state("peaks") == "current" and len(session.subset.mask) == whole.traces
    assert session.undo.undoText() == "draw"


def test_reading_that_is_stopped_leaves_what_was_read(make, settle, eager, qtbot):
    window = make()
    session = window.session
    seen = []

    def stop(opened):
        seen.append(opened.traces.traces)
        if len(seen) == 1:
            window.run_action("stop")

    shown = window.commands._opened_in_part
    window.commands._opened_in_part = lambda opened: (shown(opened), stop(opened))
    window.commands.open_paths([str(FOLDER)])
    settle(window)
    assert 0 < session.traces.traces < 20 and session.traces.traces == seen[0]
    assert not session.growing
    press(window, Qt.Key.Key_F5)
    settle(window)
    assert session.state("peaks") == "current"


def test_another_calibration_makes_the_traces_anew_and_is_undone(opened, settle):
    session, steps = opened.session, opened.widgets["steps"]
    before = session.traces
    session.go_to(7)
    here = session.traces.identity(7)
    session.change_setting("calibration", "series_resistance_ohm", 500.0, "Series resistance to 500 ohm")
    assert session.state("histogram") == "working" and session.result("histogram") is not None
    settle(opened)
    expected = study.read([str(FOLDER)], session.document.recipe)
    assert session.traces.key == expected.key != before.key
    assert np.array_equal(session.traces.conductance, expected.conductance, equal_nan=True)
    assert session.traces.identity(session.current) == here
    assert session.state("histogram") == "current" and steps.cards["calibration"].head.state == "current"
    assert np.array_equal(
        session.result("histogram").counts, Analysis(expected, session.document.recipe).histogram().counts
    )
    press(opened, Qt.Key.Key_Z, Qt.KeyboardModifier.ControlModifier)
    settle(opened)
    assert session.traces.key == before.key
    assert session.state("histogram") == "current"


def test_a_calibration_that_cannot_be_used_is_explained_on_its_step(opened, settle):
    session, steps = opened.session, opened.widgets["steps"]
    traces = session.traces
    recipe = session.document.recipe.with_values("intake", reader="hdf5")
    session.change_recipe("another reader", recipe)
    settle(opened)
    assert session.traces is traces and "traces" in session.errors
    assert session.state("histogram") == "out of date"
    assert steps.cards["intake"].head.state == "failed"
    session.undo.undo()
    settle(opened)
    assert session.state("histogram") == "current"
    assert steps.cards["intake"].head.state == "current"


def test_a_study_is_saved_with_its_recordings_and_derives_from_them(opened, settle, place):
    session, path = opened.session, place / "bench.h5"
    opened.commands.save_to(str(path))
    settle(opened)
    with study.Study.open(path, read_only=True) as kept:
        assert set(kept.sources.values()) == {"copied"}
    session.change_setting("calibration", "series_resistance_ohm", 500.0, "Series resistance to 500 ohm")
    settle(opened)
    expected = study.read([str(FOLDER)], session.document.recipe)
    assert np.array_equal(session.traces.conductance, expected.conductance, equal_nan=True)
    QApplication.processEvents()


def test_identities_are_found_again(mixture):
    names = mixture.identities()
    assert names == [mixture.identity(row).text() for row in range(mixture.traces)]
    assert mixture.identities([3, 1]) == [names[3], names[1]]
    assert mixture.row_of(TraceIdentity.parse(names[17])) == 17
    assert mixture.row_of(TraceIdentity("0" * 64, "", 0, "opening")) == -1


def test_a_recording_is_reopened_exactly_where_it_was_left(opened, make, settle):
    session = opened.session
    conditions = ConditionSet(
        (Condition("plateau", 0.5, 1.5), Condition("range", first=2, last=9, inverted=True)), "or"
    )
    session.change_conditions("draw", conditions)
    session.go_to(11)
    session.set_span(Span(-3.0, 0.5))
    session.set_drive_span(-0.2, 0.7)
    session.undo.setClean()
    opened.close()
    again = make()
    again.commands.open_paths([str(FOLDER)])
    settle(again)
    assert again.session.current == 11
    assert again.session.document.conditions == conditions and again.session.subset is not None
    assert again.session.span == Span(-3.0, 0.5) and again.session.drive_span == (-0.2, 0.7)


def test_a_session_taken_up_again_is_not_taken_for_saved(opened, make, settle, place):
    session = opened.session
    session.change_setting("plateaus", "sensitivity", 7.0, "Sensitivity to 7")
    session.change_conditions("draw", ConditionSet((Condition("plateau", 0.5, 1.5),)))
    session.go_to(4)
    opened.keeper._write_recovery()
    opened.shut_down(forget=False)
    again = make()
    again.run_action("recover")
    settle(again)
    assert again.session.document.recipe.plateaus.sensitivity == 7.0
    assert len(again.session.document.conditions.conditions) == 1 and again.session.current == 4
    assert not again.session.undo.isClean()
