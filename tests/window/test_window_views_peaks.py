"""Peaks in the window: edited by mouse and keys on the histogram and in the table, each edit a named step of undo."""

from __future__ import annotations

import numpy as np
import pytest
from driving import click, double_click, drag, point_at, press
from PySide6.QtCore import Qt

from meseta.analysis import Analysis, defensible_analyses
from meseta.window.peak_editing import PeakEditor

Key, Shift, Ctrl = Qt.Key, Qt.KeyboardModifier.ShiftModifier, Qt.KeyboardModifier.ControlModifier


@pytest.fixture
def editor(session) -> PeakEditor:
    return PeakEditor.of(session)


def test_a_double_click_on_the_histogram_asks_for_a_peak_there(window, session, editor, settle):
    panel = window.widgets["histogram"]
    before, span = len(editor.starts()), session.span
    double_click(panel, 1.0, -3.0)
    assert session.span == span  # and the view stays
    assert editor.chosen >= 0
    added = editor.starts()[editor.chosen]
    assert abs(np.log10(added.position_g0) + 3.0) < 2 * panel.box.viewPixelSize()[1]
    assert len(session.document.recipe.peaks.peaks) == before + 1
    assert session.undo.undoText().startswith("add a peak at ")
    settle(window)
    press(window, Key.Key_Z, Ctrl)
    assert session.document.recipe.peaks.peaks == []
    settle(window)
    assert len(panel.fit.handles) == before


def test_a_peak_by_keys_alone(window, session, editor, settle):
    panel = window.widgets["histogram"]
    panel.plot.setFocus()
    point_at(panel, 1.0, -3.0)
    start = editor.caret_u
    press(panel.plot, Key.Key_Up)
    press(panel.plot, Key.Key_Up, Shift)
    width = float(np.median(session.result("histogram").grid.widths))
    assert abs(editor.caret_u - start - 6 * max(width, panel.box.viewPixelSize()[1])) < 1e-6
    assert panel.hover_line.isVisible() and window.widgets["trace"].hover_line.value() == pytest.approx(editor.caret_u)
    press(window, Key.Key_P)
    chosen = editor.chosen
    assert np.log10(editor.starts()[chosen].position_g0) == pytest.approx(editor.caret_u)
    for key, modifiers, steps in ((Key.Key_Up, Ctrl, 1), (Key.Key_Up, Ctrl, 2), (Key.Key_Down, Ctrl, 1)):
        press(window, key, modifiers)
        place = np.log10(editor.starts()[editor.chosen].position_g0)
        assert place == pytest.approx(editor.caret_u + steps * width, abs=1e-6)
    assert session.undo.count() == 2  # moves of the same peak are one step
    press(window, Key.Key_Delete)
    assert session.undo.undoText().startswith("remove peak")
    settle(window)


def test_a_click_chooses_a_peak_in_histogram_and_table_alike(window, editor, settle):
    panel, table = window.widgets["histogram"], window.widgets["peaks"]
    handle = panel.fit.handles[0]
    click(panel, float(handle.pos().x()), float(handle.pos().y()))
    assert editor.chosen == 0 and handle.scale > panel.fit.handles[1].scale  # told by size, not by colour
    assert table.table.chosen_rows() == [editor.row_of(0)]
    assert table.verdict.text().startswith(editor.name_of(0))
    table.table.view.selectRow(1)
    assert editor.chosen == editor.place_of(table.table.model.row_of(1))
    press(window, Key.Key_N)
    assert editor.chosen == 2
    settle(window)


def test_the_three_numbers_stand_side_by_side_and_are_the_engines(window, session, editor, settle):
    editor.choose(0)
    fit = session.result("peaks").table
    panel = window.widgets["peaks"]
    from meseta import typeset

    assert panel.quoted["mode"].text() == typeset.number(float(fit.mode_g0[0]))
    assert panel.quoted["median"].text() == typeset.number(float(fit.plateau_median_g0[0]))
    assert panel.quoted["centre"].text() == typeset.value_with_uncertainty(
        float(fit.position_g0[0]), float(fit.position_low_g0[0]), float(fit.position_high_g0[0])
    )


def test_hold_writes_the_fitted_position_and_the_engine_holds_it(window, session, editor, settle):
    editor.choose(1)
    position = editor.position_of(1)
    press(window, Key.Key_H)
    assert session.undo.undoText().startswith("hold peak")
    settle(window)
    assert session.result("peaks").table.position_g0[1] == pytest.approx(position, rel=1e-9)
    assert editor.starts()[1].fixed
    words = window.widgets["peaks"].table.model.data_columns["asked"]
    assert words[1] == "held" and words[0] == "free"
    press(window, Key.Key_H)
    assert not editor.starts()[1].fixed and session.undo.undoText().startswith("free peak")
    settle(window)


def test_bounds_are_lines_to_drag_and_the_fit_stays_inside(window, session, editor, settle):
    panel = window.widgets["histogram"]
    position = editor.position_of(0)
    editor.choose(0)
    editor.bound(0, position * 1.05, position * 2.0)
    settle(window)
    low = panel.fit.bounds.lines["low"]
    assert low.isVisible() and low.value() == pytest.approx(np.log10(position * 1.05))
    assert session.result("peaks").table.position_g0[0] >= position * 1.05 * (1 - 1e-9)
    drag(
        panel, (panel.box.viewRange()[0][1] * 0.7, low.value()), (panel.box.viewRange()[0][1] * 0.7, low.value() - 0.2)
    )
    start = editor.starts()[0]
    assert start.low_g0 == pytest.approx(position * 1.05 * 10**-0.2, rel=0.03)
    assert session.undo.undoText().startswith("bound peak")
    settle(window)


def test_ties_that_do_not_go_together_are_refused_in_words(window, session, editor, settle):
    count = session.undo.count()
    while len(editor.starts()) > 1:
        editor.remove(0)
    settle(window)
    count = session.undo.count()
    press(window, Key.Key_T)
    assert session.undo.count() == count and session.document.recipe.peaks.tie == "none"
    assert "one peak alone" in window.status.trouble.toolTip()


def test_multiples_are_tied_by_key_and_only_those_near_one(window, session, editor, settle):
    press(window, Key.Key_T)
    peaks = session.document.recipe.peaks
    assert peaks.tie == "multiples" and session.undo.undoText() == "tie the peaks: multiples of one conductance"
    settle(window)
    assert session.errors == {}
    table = session.result("peaks").table
    tied = [row for row, start in enumerate(editor.starts()) if start.tied]
    ratio = table.position_g0[tied] / np.array([editor.starts()[row].multiple for row in tied])
    assert np.allclose(ratio, ratio[0], rtol=1e-6)
    press(window, Key.Key_T)
    assert session.document.recipe.peaks.tie == "none"
    settle(window)


def test_the_form_of_a_peak_says_what_cannot_be(window, session, editor, settle):
    from meseta.window.views.peaks.dialog import PeakDialog

    editor.choose(0)
    press(window, Key.Key_F2)
    (dialog,) = (one for one in window.findChildren(PeakDialog) if one.isVisible())
    dialog.edits["low_g0"].setText("1e3")
    dialog.accept()
    assert dialog.isVisible() and "outside its bounds" in dialog.wrong.text()
    dialog.edits["low_g0"].setText("1e-9")
    dialog.edits["name"].setText("first")
    dialog.accept()
    assert not dialog.isVisible()
    start = session.document.recipe.peaks.peaks[0]
    assert (start.name, start.low_g0) == ("first", 1e-9)
    settle(window)
    assert session.result("peaks").table.peak[0] == "first"


def test_residuals_and_systematic_part_are_those_of_the_engine(window, session, mixture, settle):
    window.actions_by_key["view_residuals"].trigger()
    window.actions_by_key["view_systematic"].trigger()
    settle(window)
    alone = Analysis(mixture, session.document.recipe).result("peaks")
    panel = window.widgets["residuals"]
    assert panel.isVisible() and panel.box.viewRange()[1] == window.widgets["histogram"].box.viewRange()[1]
    assert np.array_equal(panel.data().columns["residual"], alone.residuals, equal_nan=True)
    x, _ = panel.line.getData()
    assert np.array_equal(x, np.repeat(alone.residuals, 2), equal_nan=True)
    data = window.widgets["systematic"].table.model.data_columns
    assert list(data["choice"]) == [shift.choice for shift in alone.shifts]
    assert np.array_equal(data["peak_1_g0"], [shift.moves_by_g0[0] for shift in alone.shifts], equal_nan=True)


def test_all_analyses_are_worked_out_only_while_seen_and_follow_the_chosen_peak(
    window, session, editor, mixture, settle
):
    panel = window.widgets["analyses"]
    assert panel.job.result is None
    window.actions_by_key["view_analyses"].trigger()
    settle(window)
    alone = defensible_analyses(Analysis(mixture, session.document.recipe))
    for place in (0, len(editor.starts()) - 1):
        editor.choose(place)
        name = str(session.result("peaks").table.peak[editor.row_of(place)])
        mine = alone.take(alone.peak == name)
        _, drawn = panel.points.getData()
        assert np.allclose(np.sort(drawn), np.sort(mine.position_g0[mine.defensible]))
        spread = alone.spread()
        row = list(spread.peak).index(name)
        if np.isfinite(spread.chosen_g0[row]):
            assert panel.chosen_line.value() == pytest.approx(float(spread.chosen_g0[row]))
    window.docks["analyses"].hide()
    settle(window)
    key = panel.job._key
    editor.add(1e-2)
    settle(window)
    assert panel.job._key == key and panel.job.state == "out of date"
