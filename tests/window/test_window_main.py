"""A session in the window, driven with real mouse and keys; its numbers equal those of the engine."""

from __future__ import annotations

import numpy as np
import pytest
from driving import click, drag, place_of, point_at, press, wheel
from PySide6.QtCore import QMimeData, QPointF, Qt, QUrl
from PySide6.QtGui import QDropEvent, QGuiApplication
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication, QDialog, QInputDialog, QMessageBox

from meseta import histograms
from meseta.analysis import Analysis
from meseta.recipe import Recipe
from meseta.window.conditions import Condition, ConditionSet
from meseta.window.session import Hover
from meseta.window.status import readout

Key, Shift, Ctrl = Qt.Key, Qt.KeyboardModifier.ShiftModifier, Qt.KeyboardModifier.ControlModifier


def panel(window, name):
    return window.widgets[name]


# -- results ---------------------------------------------------------------------------------------------------------


def test_what_is_shown_is_what_the_engine_computes(window, mixture):
    alone = Analysis(mixture, window.session.document.recipe)
    session = window.session
    assert np.array_equal(session.result("plateaus").level_g0, alone.plateaus().level_g0)
    histogram = alone.histogram()
    assert np.array_equal(session.result("histogram").counts, histogram.counts)
    x, y = panel(window, "histogram").whole.getData()
    strong = histogram.traces_in_bin >= histogram.weak_traces
    drawn = x[~np.isnan(x)]
    assert np.array_equal(drawn, np.repeat(histogram.density[strong], 2))
    assert np.array_equal(np.unique(y), histogram.grid.u_edges)
    two = alone.result("displacement_histogram")
    assert np.array_equal(panel(window, "displacement").data().columns["counts"], two.counts.ravel())
    peaks = alone.result("peaks").table
    assert np.array_equal(panel(window, "peaks").table.model.data_columns["position_g0"], peaks.position_g0)


def test_every_step_says_its_state_and_one_line(window):
    cards = panel(window, "steps").cards
    assert set(cards) == set(Recipe.model_fields)
    assert cards["plateaus"].head.state == "current"
    found = len(window.session.result("plateaus"))
    assert cards["plateaus"].head.line.text() == f"{found} found"
    assert cards["selection"].head.line.text().startswith("60 of 60 kept")
    assert cards["correlation"].head.state == "none"


def test_out_of_date_results_stay_visible_and_marked(window, settle):
    session = window.session
    before = session.result("plateaus")
    session.change_setting("plateaus", "sensitivity", 8.0, "Sensitivity to 8")
    assert session.result("plateaus") is before
    assert session.state("plateaus") in ("working", "out of date")
    window.jobs.cancel()
    assert session.state("plateaus") == "out of date"
    settle(window)
    panel(window, "steps").refresh()
    assert panel(window, "steps").cards["plateaus"].head.line.text().startswith("out of date")
    window.run_action("recompute")
    settle(window)
    assert session.state("plateaus") == "current"
    expected = Analysis(session.traces, session.document.recipe).plateaus()
    assert np.array_equal(session.result("plateaus").level_g0, expected.level_g0)


# -- walking ---------------------------------------------------------------------------------------------------------


def test_arrow_keys_walk_through_traces_and_draw_them(window, settle, mixture):
    for key, expected in ((Key.Key_Right, 1), (Key.Key_Right, 2), (Key.Key_Left, 1)):
        press(window, key)
        assert window.session.current == expected
    press(window, Key.Key_End, Ctrl)
    assert window.session.current == 59
    press(window, Key.Key_Right)
    assert window.session.current == 59
    settle(window)
    picture = window.session.picture
    assert picture.trace == 59
    table = window.session.result("plateaus")
    assert np.array_equal(picture.plateaus.level_g0, table.level_g0[table.trace == 59])
    shown = panel(window, "trace").data().columns
    conductance = mixture.trace_conductance(59)
    assert np.nanmax(shown["conductance_g0"]) == conductance.max()
    assert panel(window, "trace").heading.text() == "Trace 59"


def test_plateaus_are_drawn_along_their_slope(window, settle):
    table = window.session.result("plateaus")
    sloped = int(table.trace[np.argmax(np.abs(np.nan_to_num(table.slope_decades_per_nm)))])
    window.session.go_to(sloped)
    settle(window)
    x, y = panel(window, "trace").levels.getData()
    x, y = x.reshape(-1, 3)[:, :2], y.reshape(-1, 3)[:, :2]
    own = table.take(table.trace == sloped)
    assert len(x) == len(own)
    assert np.allclose((y[:, 1] - y[:, 0]) / (x[:, 1] - x[:, 0]), own.slope_decades_per_nm, rtol=1e-9)
    assert np.allclose(y.mean(axis=1), np.log10(own.level_g0))


def test_reject_by_key_undo_and_redo_with_names(window, settle):
    session = window.session
    session.go_to(5)
    press(window, Key.Key_R)
    settle(window)
    assert not session.kept[5] and session.kept.sum() == 59
    assert window.actions_by_key["undo"].text() == "Undo: reject trace 5"
    press(window, Key.Key_Z, Ctrl)
    settle(window)
    assert session.kept.all()
    assert window.actions_by_key["redo"].text() == "Redo: reject trace 5"
    press(window, Key.Key_Z, Ctrl | Shift)
    settle(window)
    assert not session.kept[5]
    press(window, Key.Key_U)
    settle(window)
    assert session.kept.all()


# -- conditions ------------------------------------------------------------------------------------------------------


def test_a_window_drawn_on_the_histogram_picks_traces_everywhere(window, settle):
    session = window.session
    drag(panel(window, "histogram"), (0.0, -4.0), (1.0, -3.0))
    settle(window)
    (condition,) = session.document.conditions.conditions
    assert condition.kind == "plateau"
    pixel = panel(window, "histogram").box.viewPixelSize()[1]
    assert abs(np.log10(condition.low_g0) + 4) < 2 * pixel and abs(np.log10(condition.high_g0) + 3) < 2 * pixel
    table = session.result("plateaus")
    low, high = (float(f"{value:.5g}") for value in (condition.low_g0, condition.high_g0))
    expected = np.zeros(60, bool)
    expected[table.trace[(table.level_g0 >= low) & (table.level_g0 < high)]] = True
    assert 0 < expected.sum() < 60
    assert np.array_equal(session.subset.mask, expected)
    own = histograms.conductance_histogram(
        session.analysis.result("counts"), expected, session.document.recipe.histogram, None
    )
    assert np.array_equal(session.subset.histogram.counts, own.counts)
    x, _ = panel(window, "histogram").part.getData()
    assert np.array_equal(x, np.repeat(own.density, 2))
    assert panel(window, "trace").overlay.picture.asked == expected.sum()
    assert panel(window, "displacement").over.isVisible()
    assert (
        panel(window, "displacement").data().columns["counts"].sum() == panel(window, "displacement")._part.counts.sum()
    )
    assert panel(window, "strip").selected_ribbon.isVisible()
    assert panel(window, "conditions").picked.text().startswith(f"{expected.sum()} of 60 traces")


def test_a_drag_is_one_step_of_undo(window, settle):
    drag(panel(window, "histogram"), (0.0, -4.0), (1.0, -3.0), steps=12)
    assert window.session.undo.count() == 1
    assert window.session.undo.undoText() == "draw a window"
    press(window, Key.Key_Z, Ctrl)
    settle(window)
    assert window.session.document.conditions == ConditionSet()
    assert window.session.subset is None


def test_a_box_on_the_2d_histogram_and_a_stretch_of_the_record(window, settle):
    drag(panel(window, "displacement"), (0.05, -4.3), (0.6, -2.9))
    drag(panel(window, "strip"), (10.4, -3.0), (40.6, -3.0))
    settle(window)
    box, stretch = window.session.document.conditions.conditions
    assert box.kind == "passes" and abs(box.low_drive - 0.05) < 0.02 and abs(box.high_drive - 0.6) < 0.02
    assert (stretch.kind, stretch.first, stretch.last) == ("range", 10, 40)
    assert not window.session.subset.mask[:10].any() and not window.session.subset.mask[41:].any()


def test_conditions_become_a_rule_whose_result_equals_theirs(window, settle):
    session = window.session
    session.change_conditions("draw", ConditionSet((Condition("plateau", 1e-4, 1e-3),)))
    settle(window)
    mask = session.subset.mask.copy()
    press(window, Key.Key_R, Ctrl)
    settle(window)
    assert len(session.document.recipe.selection.rules) == 1
    assert np.array_equal(session.kept, mask)
    assert not session.document.conditions.active  # switched off, not thrown away
    rules = panel(window, "rules").table.model.data_columns
    assert (
        rules["left"][-1] == mask.sum()
        and session.result("selection").steps.dropped_in_sequence.sum() == 60 - mask.sum()
    )
    again = Analysis(session.traces, Recipe.parse(session.document.recipe.text()))
    assert np.array_equal(session.result("histogram").counts, again.histogram().counts)


def test_groups_have_a_symbol_and_come_back_as_a_condition(window, settle):
    session = window.session
    session.change_conditions("draw", ConditionSet((Condition("plateau", 1e-4, 1e-3),)))
    settle(window)
    mask = session.subset.mask.copy()
    window.commands.make_group("molecule")
    session.change_conditions("clear", ConditionSet())
    settle(window)
    table = panel(window, "groups").table
    assert table.model.data_columns["traces"][0] == mask.sum()
    assert table.model.index(0, 0).data() == "● molecule"
    panel(window, "groups")._show("molecule")
    settle(window)
    assert np.array_equal(session.subset.mask, mask)


def test_conditions_are_switched_and_combined_by_their_panel(window, settle):
    session, conditions = window.session, panel(window, "conditions")
    session.change_conditions(
        "two", ConditionSet((Condition("plateau", 1e-4, 1e-3), Condition("range", first=0, last=19)))
    )
    settle(window)
    both = session.subset.mask.copy()
    conditions.joined.setCurrentIndex(1)
    conditions.joined.activated.emit(1)
    settle(window)
    either = session.subset.mask.copy()
    assert either.sum() > both.sum() and either[:20].all()
    conditions.lines.itemAt(0).widget().box.click()
    settle(window)
    assert session.subset.mask.sum() == 20
    conditions.invert(1)
    settle(window)
    assert session.subset.mask.sum() == 40
    press(window, Key.Key_C)
    settle(window)
    assert session.subset is None
    press(window, Key.Key_C)
    settle(window)
    assert session.subset.mask.sum() == 40


def test_a_rule_that_is_not_understood_is_explained_beside_the_conditions(window, settle):
    window.session.change_conditions("typed", ConditionSet((Condition("rule", text="platos >= 1"),)))
    settle(window)
    assert "platos" in panel(window, "conditions").wrong.text()
    assert "plateaus" in panel(window, "conditions").wrong.text()
    assert window.session.subset is None


# -- axes ------------------------------------------------------------------------------------------------------------


def test_one_switch_changes_all_plots_to_the_linear_axis(window, settle):
    press(window, Key.Key_L)
    settle(window)
    session = window.session
    assert session.axis == "linear"
    assert session.result("histogram").grid.axis == "linear"
    for name in ("trace", "displacement", "histogram"):
        assert not panel(window, name).conductance.logarithmic
        assert panel(window, name).box.viewRange()[1] == pytest.approx([session.span.low, session.span.high])
    _, y = panel(window, "trace").curve.getData()
    assert np.nanmax(y) == pytest.approx(float(np.nanmax(session.picture.curve.g0)))
    press(window, Key.Key_L)
    settle(window)
    assert session.axis == "logarithmic" and session.state("histogram") == "current"


def test_the_wheel_zooms_all_plots_on_the_conductance_axis(window):
    before = window.session.span
    wheel(panel(window, "displacement"), 0.5, -3.0, 3)
    after = window.session.span
    assert after.high - after.low < before.high - before.low
    for name in ("trace", "displacement", "histogram"):
        assert panel(window, name).box.viewRange()[1] == pytest.approx([after.low, after.high])
    drive = window.session.drive_span
    wheel(panel(window, "trace"), 0.5, -3.0, 3, Ctrl)
    assert window.session.drive_span != drive and window.session.span == after
    assert panel(window, "displacement").box.viewRange()[0] == pytest.approx(window.session.drive_span)
    press(window, Key.Key_0)
    assert window.session.span == window.session.default_span()


def test_shift_drag_moves_and_draws_no_window(window):
    before = window.session.span
    drag(panel(window, "trace"), (0.5, -3.0), (0.5, -4.0), modifiers=Shift)
    assert window.session.document.conditions == ConditionSet()
    assert window.session.span.low == pytest.approx(before.low + 1.0, abs=0.1)


def test_hover_reads_the_same_height_everywhere(window):
    trace = panel(window, "trace")
    point_at(trace, 0.42, np.log10(3.4e-4))
    lines = [panel(window, name).hover_line for name in ("trace", "displacement", "histogram")]
    assert all(line.isVisible() for line in lines)
    assert len({line.value() for line in lines}) == 1
    assert (
        window.status.pointer.text() == readout(Hover(lines[0].value(), 0.42), "logarithmic")
        or "nm" in window.status.pointer.text()
    )


def test_the_readout_speaks_g0_siemens_ohm_and_nm():
    s = "\u202f"
    # 3.4e-4 G0 = 3.4e-4 x 77.480917 uS = 26.34 nS, 1 / that = 37.96 Mohm (CODATA 2022 value of G0).
    text = readout(Hover(float(np.log10(3.4e-4)), 0.4201), "logarithmic")
    assert text.split("    ") == [f"3.40{s}×{s}10⁻⁴{s}G₀", f"26.3{s}nS", f"38.0{s}MΩ", f"0.420{s}nm"]


# -- strip, peaks, tables --------------------------------------------------------------------------------------------


def test_a_click_on_the_strip_goes_to_that_trace(window):
    click(panel(window, "strip"), 33.5, -2.0)
    assert window.session.current == 33
    assert panel(window, "strip").position.value() == 33.5


def test_events_are_marked_on_the_strip(window, settle, monkeypatch):
    monkeypatch.setattr(QInputDialog, "getText", lambda *_, **__: ("new tip", True))
    window.session.go_to(12)
    press(window, Key.Key_E)
    (line,) = panel(window, "strip").events
    assert line.value() == 12 and line.label.toPlainText() == "new tip"
    window.session.undo.undo()
    assert panel(window, "strip").events == []


def test_dragging_a_peak_handle_writes_a_starting_value_and_fits_again(window, settle):
    fit = panel(window, "histogram").fit
    count = len(fit.handles)
    assert count >= 1
    handle = fit.handles[0]
    start = (float(handle.pos().x()), float(handle.pos().y()))
    drag(panel(window, "histogram"), start, (start[0], start[1] + 0.2))
    starts = window.session.document.recipe.peaks.peaks
    assert len(starts) == count
    moved = min(starts, key=lambda one: abs(np.log10(one.position_g0) - start[1] - 0.2))
    assert abs(np.log10(moved.position_g0) - start[1] - 0.2) < 0.03
    assert window.session.undo.undoText().startswith("move ")
    settle(window)
    assert window.session.state("peaks") in ("current", "failed")


def test_the_tables_jump_to_the_trace(window):
    table = panel(window, "plateaus").table
    window.docks["plateaus"].raise_()
    panel(window, "plateaus").refresh()
    row = len(window.session.result("plateaus")) - 1
    table._activated(table.model.index(table.model.shown_row(row), 0))
    assert window.session.current == window.session.result("plateaus").trace[row]


def test_no_number_of_a_table_loses_its_power_of_ten(window):
    window.docks["plateaus"].raise_()
    panel(window, "plateaus").refresh()
    view, model = panel(window, "plateaus").table.view, panel(window, "plateaus").table.model
    place = [column.name for column in model.columns].index("level_g0")
    texts = [model.index(row, place).data() for row in range(model.rowCount())]
    assert any("×" in text for text in texts[1:])
    assert view.columnWidth(place) >= max(view.fontMetrics().horizontalAdvance(text) for text in texts)


def test_copied_rows_read_back_as_the_numbers_of_the_result(window):
    panel(window, "plateaus").refresh()
    panel(window, "plateaus").table.copy()
    lines = QGuiApplication.clipboard().text().splitlines()
    table = window.session.result("plateaus")
    names = lines[0].split("\t")
    assert len(lines) == len(table) + 1
    levels = [float(line.split("\t")[names.index("level_g0")]) for line in lines[1:]]
    assert np.array_equal(levels, table.level_g0)


def test_copied_plot_data_read_back(window):
    panel(window, "histogram").copy_data()
    lines = QGuiApplication.clipboard().text().splitlines()
    column = lines[0].split("\t").index("counts")
    assert [int(line.split("\t")[column]) for line in lines[1:]] == window.session.result("histogram").counts.tolist()


# -- files -----------------------------------------------------------------------------------------------------------


def test_a_study_is_saved_and_opened_exactly_where_it_was(window, make, settle, tmp_path, qtbot):
    path = str(tmp_path / "night.h5")
    session = window.session
    session.change_setting("plateaus", "sensitivity", 6.0, "Sensitivity to 6")
    session.go_to(3)
    press(window, Key.Key_R)
    settle(window)
    window.commands.save_to(path)
    settle(window)
    assert session.study_path == path and session.undo.isClean()
    session.go_to(4)
    press(window, Key.Key_R)  # goes to the journal of the study, without saving
    settle(window)
    counts = session.result("histogram").counts
    assert window.close()
    again = make()
    again.commands.open_paths([path])
    settle(again)
    assert again.session.errors == {}
    assert again.session.document.recipe.plateaus.sensitivity == 6.0
    assert np.flatnonzero(~again.session.kept).tolist() == [3, 4]
    assert np.array_equal(again.session.result("histogram").counts, counts)


def test_a_dropped_file_is_opened(make, settle, tmp_path, mixture):
    from meseta.study import write_study

    path = tmp_path / "dropped.h5"
    write_study(path, Analysis(mixture))
    window = make()
    data = QMimeData()
    data.setUrls([QUrl.fromLocalFile(str(path))])
    centre = QPointF(600, 400)
    event = QDropEvent(
        centre, Qt.DropAction.CopyAction, data, Qt.MouseButton.LeftButton, Qt.KeyboardModifier.NoModifier
    )
    window.dropEvent(event)
    QApplication.processEvents()
    settle(window)
    assert window.session.traces.traces == 60
    assert window.recent.entries()[0] == [str(path)]


def test_a_file_that_is_none_is_refused_in_words(make, settle, tmp_path):
    window = make()
    path = tmp_path / "nothing.csv"
    path.write_bytes(b"\x00\x01\x02 no recording")
    window.commands.open_paths([str(path)])
    settle(window)
    assert window.session.traces is None
    assert "nothing.csv" in window.status.trouble.toolTip()
    for box in window.findChildren(QMessageBox):
        box.close()


def test_the_whole_result_is_exported_and_equal(window, settle, tmp_path):
    import csv

    folder = tmp_path / "result"
    window.commands.export_to(str(folder))
    settle(window)
    with (folder / "histogram.csv").open() as lines:
        counts = [int(row["counts"]) for row in csv.DictReader(lines)]
    assert counts == window.session.result("histogram").counts.tolist()
    assert Recipe.load(folder / "recipe.toml") == window.session.document.recipe


def test_an_interrupted_session_is_taken_up_again(make, settle, tmp_path, place, mixture):
    from meseta.study import write_study

    path = tmp_path / "raw.h5"
    write_study(path, Analysis(mixture))
    window = make()
    window.session.open_traces(mixture, "raw")
    window.keeper.open(None, (str(path),))
    settle(window)
    window.session.go_to(7)
    window.commands.do_reject()
    window.shut_down(forget=False)  # as after a crash: nothing was saved, the recovery file is there
    assert (place / "unfinished.json").exists()
    again = make()
    again.commands.offer_recovery()
    again.run_action("recover")
    settle(again)
    assert again.session.current == 7
    assert np.flatnonzero(~again.session.kept).tolist() == [7]


# -- the frame -------------------------------------------------------------------------------------------------------


def test_the_first_page_says_what_to_do(make):
    window = make()
    assert window.centre.currentWidget() is window.centre.first
    assert not window.actions_by_key["save"].isEnabled()
    assert window.windowTitle() == "Meseta"


def test_docks_come_back_where_they_were_and_can_be_arranged_as_first(make, settle):
    window = make()
    window.docks["groups"].hide()
    window.actions_by_key["view_displacement"].setChecked(False)
    window.close()
    again = make()
    assert again.docks["groups"].isHidden()
    assert panel(again, "displacement").isHidden()
    again.run_action("arrange")
    QApplication.processEvents()
    assert not again.docks["groups"].isHidden() and not panel(again, "displacement").isHidden()


def test_only_the_leftmost_visible_plot_shows_the_scale(window):
    window.actions_by_key["view_trace"].setChecked(False)
    assert panel(window, "displacement").conductance.maximumWidth() > 40
    assert panel(window, "histogram").conductance.maximumWidth() < 20
    window.actions_by_key["view_trace"].setChecked(True)
    assert panel(window, "displacement").conductance.maximumWidth() < 20


def test_an_action_is_found_by_a_word_and_run(window):
    press(window, Key.Key_F3)
    from meseta.window.finder import ActionFinder

    (finder,) = [dialog for dialog in window.findChildren(QDialog) if isinstance(dialog, ActionFinder)]
    QTest.keyClicks(finder.line, "last trace")
    QTest.keyClick(finder.line, Key.Key_Return)
    assert window.session.current == 59


def test_no_two_actions_share_a_key_and_all_have_words(window):
    keys = [keys.toString() for action in window.actions_by_key.values() for keys in action.shortcuts()]
    assert len(keys) == len(set(keys))
    assert all(action.text() for action in window.actions_by_key.values())


def test_closing_during_work_is_safe(make, mixture):
    window = make()
    window.session.open_traces(mixture, "mixture")
    assert window.jobs.busy
    window.session.undo.setClean()
    assert window.close()
    assert not window.jobs.busy


def test_every_panel_offers_data_picture_and_help(window):
    for name in ("trace", "displacement", "histogram", "strip"):
        texts = [action.text() for action in panel(window, name).context_menu().actions()]
        assert "Copy data" in texts and "Copy picture" in texts
        assert any(text.startswith("About the") for text in texts)


def test_widgets_that_take_the_focus_have_names(window):
    from PySide6.QtWidgets import QAbstractButton, QComboBox, QLineEdit, QTableView, QWidget

    panel(window, "steps").open_step("plateaus")
    nameless = [
        widget
        for widget in window.findChildren(QWidget)
        if isinstance(widget, QAbstractButton | QComboBox | QLineEdit | QTableView)
        and widget.isVisible()
        and not (widget.accessibleName() or getattr(widget, "text", str)())
        and "qt_" not in widget.objectName()
        and type(widget).__name__
        not in ("QTableCornerButton", "CornerButton", "QToolButton", "QAbstractButton", "QLineEditIconButton")
    ]
    assert [(type(w).__name__, w.objectName()) for w in nameless] == []


def test_pixels_and_numbers_agree(window):
    one = panel(window, "histogram")
    spot = place_of(one, 0.0, -3.0)
    back = one.box.mapSceneToView(one.plot.mapToScene(spot))
    assert abs(back.y() + 3.0) <= one.box.viewPixelSize()[1]


def test_a_further_view_is_computed_only_while_it_is_seen(window, settle):
    session = window.session
    assert session.result("correlation_histogram") is None
    window.docks["correlation"].show()
    window.docks["correlation"].raise_()
    settle(window)
    shown = session.result("correlation_histogram")
    alone = Analysis(session.traces, session.document.recipe).result("correlation_histogram")
    assert np.array_equal(shown.correlation, alone.correlation, equal_nan=True)
    assert panel(window, "correlation").data().columns["correlation"].size == shown.grid.bins**2
    window.docks["correlation"].hide()
    assert "correlation_histogram" not in session.pipeline.names


def test_arrow_keys_walk_over_the_analysed_direction_only(make, settle, mixture):
    import dataclasses

    directions = np.where(np.arange(mixture.traces) % 2, "closing", "opening")
    both = dataclasses.replace(mixture, table={**mixture.table, "direction": directions})
    window = make()
    window.session.open_traces(both, "both ways")
    settle(window)
    window.session.step(1)
    assert window.session.current == 2
    window.session.step(-1)
    assert window.session.current == 0


def test_a_group_and_the_conditions_it_was_made_of_state_one_share(make, settle, mixture):
    import dataclasses

    directions = np.where(np.arange(mixture.traces) % 2, "closing", "opening")
    both = dataclasses.replace(mixture, table={**mixture.table, "direction": directions})
    window = make()
    window.session.open_traces(both, "both ways")
    window.session.change_conditions("draw a window", ConditionSet((Condition("plateau", 1e-4, 1e-3),)))
    settle(window)
    window.commands.make_group("molecule")
    settle(window)
    share = panel(window, "groups").table.model.index(0, 2).data()
    assert share.rstrip("%").strip() != "0.0" and f"({share})" in panel(window, "conditions").picked.text()
