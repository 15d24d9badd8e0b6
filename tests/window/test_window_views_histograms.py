"""Correlation, memory, lengths, comparison and decay in the window: driven as a user would, numbers of the engine."""

from __future__ import annotations

import numpy as np
import pytest
from driving import click, place_of, press
from PySide6.QtCore import Qt
from PySide6.QtGui import QGuiApplication
from PySide6.QtWidgets import QApplication, QFileDialog

from meseta import histograms
from meseta.analysis import Analysis, compare_parts, compare_recordings, yield_in_window
from meseta.peaks import decay, read_points
from meseta.resources import sample
from meseta.simulate import simulate
from meseta.window.conditions import Condition, ConditionSet
from meseta.window.views.correlation.outline import outline
from meseta.window.views.decay.points import cells_of, pasted, points_of

Key, Ctrl = Qt.Key, Qt.KeyboardModifier.ControlModifier
MOLECULE = ConditionSet((Condition("plateau", 5e-5, 1e-3),))


def show(window, settle, name: str):
    window.actions_by_key[f"view_{name}"].trigger()
    settle(window)
    return window.widgets[name]


# -- correlation -----------------------------------------------------------------------------------------------------


def test_an_outline_is_the_border_of_the_chosen_cells():
    x, y = outline(np.array([[False, True], [False, True]]), np.array([0.0, 1.0, 3.0]))
    pieces = {tuple(sorted(pair)) for pair in zip(zip(x[::2], y[::2]), zip(x[1::2], y[1::2]), strict=True)}  # noqa: B905
    assert pieces == {
        ((0, 1), (0, 3)), ((3, 1), (3, 3)), ((0, 1), (1, 1)), ((1, 1), (3, 1)), ((0, 3), (1, 3)), ((1, 3), (3, 3)),
    }  # fmt: skip


def test_a_click_on_the_correlation_map_shows_the_histograms_of_the_pair(window, session, settle):
    panel = show(window, settle, "correlation")
    shown = session.result("correlation_histogram")
    click(panel, 0.0, -3.7)
    settle(window)
    first, second = panel.chosen
    assert first[0] <= 1.0 < first[1] and second[0] <= 10**-3.7 < second[1]
    expected = histograms.pair_histograms(
        session.analysis.result("counts"), session.kept, first, second, session.document.recipe.histogram
    )
    found = panel.pair.result
    assert np.array_equal(found.both.counts, expected.both.counts) and found.text == expected.text
    assert expected.text[1:] in panel.sentence.text()
    _, drawn = panel.pair_plot.curves["first"].getData()
    some = expected.first.yes.density > 0
    assert np.allclose(drawn[::2][some], np.log10(expected.first.yes.density[some]))
    dashes = {panel.pair_plot.curves[name].opts["pen"].style() for name in ("first", "second")}
    assert len(dashes) == 2  # told apart by dash as well
    x, _ = panel.edge.getData()
    assert len(x) == len(outline(shown.significant, shown.grid.u_edges)[0])


def test_the_pair_moves_with_the_arrow_keys_and_the_current_trace_stays(window, session, settle):
    panel = show(window, settle, "correlation")
    panel.choose_bins(-3.7, 0.0)
    before, current = panel.chosen, session.current
    panel.plot.setFocus()
    press(panel.plot, Key.Key_Right)
    press(panel.plot, Key.Key_Down)
    assert panel.chosen[0][0] == pytest.approx(before[0][1]) and panel.chosen[1][1] == pytest.approx(before[1][0])
    assert session.current == current
    settle(window)


def test_opening_with_closing_where_the_recording_has_both(make, settle, night):
    window = make()
    window.session.open_traces(night, "night")
    settle(window)
    panel = show(window, settle, "correlation")
    panel.switch.click()
    settle(window)
    shown = window.session.result("opening_closing")
    assert shown.crossed and panel.up.labelText.startswith("closing")
    assert np.array_equal(panel.data().columns["correlation"], shown.correlation.ravel(), equal_nan=True)
    panel.choose_bins(-3.7, -2.0)
    settle(window)
    assert panel.pair.error is None and panel.pair.result.first_g0 == panel.chosen[0]
    window.docks["correlation"].hide()
    assert "opening_closing" not in window.session.pipeline.names


# -- the record ------------------------------------------------------------------------------------------------------


def test_drift_and_worth_are_stated_in_the_engines_words(window, session, settle):
    alone = Analysis(session.traces, session.document.recipe)
    note = window.widgets["strip"].note
    worth, drift = alone.result("resampling").statement(), alone.result("drift").text
    assert worth in note.toolTip() and drift in note.toolTip()
    assert worth.partition("; ")[0] in note.text() and drift.partition(":")[0] in note.text()
    panel = show(window, settle, "record")
    shifted = alone.result("shifted_correlation")
    assert alone.result("drift").text[1:] in panel.statements.text()
    if len(shifted.shift):
        assert np.array_equal(panel.mean.getData()[1], shifted.mean)
        assert np.array_equal(panel.data().columns["correlation"], shifted.same_bin.ravel(), equal_nan=True)


# -- lengths ---------------------------------------------------------------------------------------------------------


def test_lengths_are_measured_in_the_drawn_window_as_a_step_of_undo(window, session, settle):
    panel = show(window, settle, "lengths")
    assert not panel.use.isEnabled()
    session.change_conditions("draw a window", MOLECULE)
    settle(window)
    panel.use.click()
    assert session.undo.undoText().startswith("measure lengths from ")
    settle(window)
    expected = Analysis(session.traces, session.document.recipe).result("length_histograms")
    data = panel.data().columns
    assert np.array_equal(data["complete"], expected[0].counts) and expected[0].counts.sum() > 0
    assert panel.median.value() == pytest.approx(expected[0].survival.median)
    panel.show_kind(2)
    settle(window)
    assert np.array_equal(panel.data().columns["complete"], expected[2].counts)
    assert str(expected[2].traces) in panel.statement.text()
    panel.show_kind(3)
    settle(window)
    slopes = Analysis(session.traces, session.document.recipe).result("slope_histogram")
    assert np.array_equal(panel.data().columns["complete"], slopes.counts)
    assert panel.length.labelText == "slope (decades / nm)"


# -- comparison ------------------------------------------------------------------------------------------------------


def test_selected_traces_stand_against_the_others(window, session, settle):
    panel = show(window, settle, "comparison")
    assert "Draw a window" in panel.empty.text()
    session.change_conditions("draw a window", MOLECULE)
    settle(window)
    mask, kept = session.subset.mask, session.kept
    expected = compare_parts(session.analysis, {"selected": mask, "others": kept & ~mask})
    data = panel.data().columns
    assert np.array_equal(data["selected"], expected.parts[0].histogram.density)
    assert np.array_equal(data["difference_low"], expected.difference(0, 1).density_low)
    assert panel.box.viewRange()[1] == window.widgets["histogram"].box.viewRange()[1]
    styles = {lane.curve.opts["pen"].style() for lane in panel.lanes}
    assert len(styles) == 2
    panel.show_as("difference")
    assert len(panel.lanes) == 1 and panel.zero.isVisible()
    panel.show_as("beside")
    first, second = (lane.curve.getData()[0] for lane in panel.lanes)
    assert np.nanmin(second) >= np.nanmax(first[np.isfinite(first)]) * 0 and np.nanmin(second) > 0


def test_what_cannot_be_compared_is_said_with_a_remedy(window, session, settle):
    panel = show(window, settle, "comparison")
    for source, word in (("selection", "reject traces"), ("group", "make groups"), ("specimen", "file check")):
        panel.compare(source)
        settle(window)
        assert word in panel.empty.text().lower()


def test_a_blank_opened_beside_gives_the_yield_of_the_engine(make, settle, night, monkeypatch):
    window = make()
    session = window.session
    session.open_traces(night, "night")
    session.change_conditions("draw a window", MOLECULE)
    settle(window)
    panel = show(window, settle, "comparison")
    blank = str(sample() / "evening_blank_raw.h5")
    monkeypatch.setattr(QFileDialog, "getOpenFileNames", lambda *_, **__: ([blank], ""))
    panel.sources["recording"].trigger()
    settle(window)
    assert list(panel.others) == ["evening_blank_raw"] and session.name == "night"
    other = panel.others["evening_blank_raw"]
    expected = yield_in_window(session.analysis, (5e-5, 1e-3), other)
    assert expected.found and expected.text[1:] in panel.statements()[0]
    both = compare_recordings({"night": session.analysis, "evening_blank_raw": other})
    assert np.array_equal(panel.data().columns["night"], both.parts[0].histogram.density)
    panel.fit_action.trigger()
    settle(window)
    scaled = both.difference(0, 1, None, (1e-3, float(both.grid.edges_g0[-1])))
    assert np.array_equal(panel.data().columns["difference"], scaled.density)
    assert "scaled by" in panel.statements()[1]


def test_a_study_beside_is_read_only_and_keeps_its_decisions(window, session, settle, tmp_path):
    from meseta.selection import Decisions
    from meseta.study import Study, write_study

    other = simulate("mixture", 40, 3).traces
    path = tmp_path / "other.meseta"
    write_study(path, Analysis(other, decisions=Decisions().with_verdict([other.identity(0).text()], False)))
    before = path.read_bytes()
    panel = show(window, settle, "comparison")
    panel.open_recording([str(path)])
    settle(window)
    parts = panel.compared.comparison.parts
    assert [part.name for part in parts] == ["mixture", "other"]
    assert [part.histogram.traces for part in parts] == [60, 39]
    assert "Draw a window on the molecule" in panel.statements()[0]
    assert path.read_bytes() == before and sorted(one.name for one in tmp_path.glob("other*")) == ["other.meseta"]
    with_lock = Study.open(path)
    assert not with_lock.read_only
    with_lock.close()


@pytest.fixture(scope="module")
def night():
    """The first cycles of the bundled night, openings and closings."""
    from meseta.recipe import Recipe
    from meseta.window.opening import open_paths
    from meseta.work import Work

    return open_paths([str(sample() / "night_raw.h5")], Recipe(), Work()).traces.block(0, 160)


# -- decay constant --------------------------------------------------------------------------------------------------

SERIES = "length,conductance_g0,conductance_error_g0,label\n0.9,1e-3,1e-4,a\n1.15,2.6e-4,3e-5,b\n1.4,7e-5,1e-5,c\n"


def test_points_are_opened_pasted_and_typed(window, settle, tmp_path):
    panel = show(window, settle, "decay")
    assert "paste them" in panel.empty.text()
    path = tmp_path / "series.csv"
    path.write_text(SERIES)
    panel.open_points(str(path))
    settle(window)
    expected = decay(read_points(path, "nm"))
    assert panel.job.result.fit.beta == expected.beta
    _, low, _ = expected.band(panel.job.result.length)
    assert np.array_equal(panel.data().columns["low_g0"], low)
    QGuiApplication.clipboard().setText("1.65\t1.9e-5\t3e-6\td")
    panel.table.setFocus()
    press(panel.table, Key.Key_V, Ctrl)
    settle(window)
    assert len(panel.job.result.fit.points.length) == 4
    panel.table.item(3, 1).setText("nothing")
    panel._read_cells()
    settle(window)
    assert "'nothing' in row 4 is not a number" in panel.said.text() and not panel.line.isVisible()
    panel.table.item(3, 1).setText("1.8e-5")
    panel._read_cells()
    settle(window)
    assert panel.line.isVisible() and panel.said.text().startswith("β = ")


def test_copied_points_in_several_forms():
    assert pasted("1 2e-3\n2 1e-4\n")[1] == ("2", "1e-4", "", "", "")
    assert pasted("Conductance_G0;Length\n1e-3;2\n") == (("2", "1e-3", "", "", ""),)
    points = points_of(pasted(SERIES), "nm")
    assert points_of(cells_of(points), "nm").conductance_g0.tolist() == points.conductance_g0.tolist()


def test_views_speak_to_those_who_do_not_see_them(window):
    for name in ("correlation", "record", "lengths", "comparison", "decay", "residuals", "analyses"):
        widget = window.widgets[name]
        assert widget.accessibleName() and widget.plot.accessibleName()
        assert widget.empty.text() or widget.data() is not None  # words on what to do next, or something to see
        assert widget.plot.focusPolicy() == Qt.FocusPolicy.StrongFocus


def test_closing_while_views_work_is_safe(make, settle):
    window = make()
    window.session.open_traces(simulate("mixture", 40, 3).traces, "short")
    for name in ("correlation", "analyses", "comparison", "record", "lengths"):
        window.actions_by_key[f"view_{name}"].trigger()
    window.session.close_traces()
    settle(window)
    assert window.widgets["correlation"].data() is None or window.session.traces is None
    assert place_of(window.widgets["correlation"], 0.0, 0.0) is not None


def typed(panel, rows):
    panel.fill(rows)
    QApplication.processEvents()


def test_points_of_the_series_are_kept_in_the_study_and_can_be_undone(window, settle, make, place, qtbot):
    panel = show(window, settle, "decay")
    rows = (("0.9", "1e-3", "", "1e-4", "a"), ("1.4", "7e-5", "", "", "b"), ("1.9", "6e-6", "", "", "c"))
    typed(panel, rows)
    assert window.session.document.decisions.length_series.rows == rows
    typed(panel, rows[:2])
    window.run_action("undo")
    assert panel.series().rows == rows
    window.commands.save_to(str(place / "series.h5"))
    settle(window)
    other = make()
    other.commands.open_paths([str(place / "series.h5")])
    qtbot.waitUntil(lambda: other.session.traces is not None, timeout=300_000)
    settle(other)
    assert other.widgets["decay"].series().rows == rows


def test_points_written_before_a_recording_is_open_belong_to_it(make, settle, mixture, qtbot):
    window = make()
    panel = show(window, settle, "decay")
    typed(panel, (("0.9", "1e-3", "", "", "a"),))
    window.session.open_traces(mixture, "mixture")
    qtbot.waitUntil(lambda: bool(window.session.document.decisions.length_series.rows), timeout=300_000)
    assert window.session.document.decisions.length_series.rows[0][4] == "a"
    settle(window)
