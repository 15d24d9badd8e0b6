"""Forms come from the recipe's fields and write back into it, undoable; what is wrong is said beside the field."""

from __future__ import annotations

import pytest
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication

from meseta.recipe import Recipe


@pytest.fixture
def steps(make):
    window = make()
    return window.widgets["steps"]


def row(steps, section, name):
    steps.open_step(section)
    return next(one for one in steps.cards[section].form.rows if one.info.name == name)


def typed(row, text):
    row.editor.widget.setText(text)
    row.editor.widget.editingFinished.emit()
    QApplication.processEvents()


@pytest.mark.parametrize("section", list(Recipe.model_fields))
def test_every_section_has_a_form_with_title_help_and_value_of_every_field(steps, section):
    steps.open_step(section)
    form, settings = steps.cards[section].form, getattr(Recipe(), section)
    assert [one.info.name for one in form.rows] == [info.name for info in type(settings).fields()]
    for one in form.rows:
        assert one.info.title in one.title.text()
        assert one.editor.widget.accessibleName() == one.info.title
        assert one.reset.isHidden()  # every value is its default
    assert steps.opened == section


def test_a_typed_number_changes_the_recipe_is_marked_and_undone(steps):
    session, one = steps.frame.session, row(steps, "plateaus", "sensitivity")
    typed(one, "6,5")
    assert session.document.recipe.plateaus.sensitivity == 6.5
    assert one.title.text().startswith("• ") and not one.reset.isHidden()
    assert session.undo.undoText() == "change Sensitivity to 6.50"
    session.undo.undo()
    assert session.document.recipe.plateaus.sensitivity == 5.0
    assert one.editor.widget.text() == "5" and one.reset.isHidden()


def test_changes_of_one_setting_become_one_step_of_undo(steps):
    session, one = steps.frame.session, row(steps, "plateaus", "sensitivity")
    for text in ("6", "7", "8"):
        typed(one, text)
    assert session.undo.count() == 1
    session.undo.undo()
    assert session.document.recipe == Recipe()


@pytest.mark.parametrize(("text", "word"), [("11", "to 10"), ("many", "not a number"), ("inf", "not a number")])
def test_a_value_that_is_not_allowed_is_refused_beside_its_field(steps, text, word):
    session, one = steps.frame.session, row(steps, "plateaus", "sensitivity")
    typed(one, text)
    assert session.document.recipe == Recipe()
    assert not one.wrong.isHidden() and word in one.wrong.text()
    typed(one, "4")
    assert one.wrong.isHidden() and session.document.recipe.plateaus.sensitivity == 4.0


def test_a_setting_is_unset_by_an_empty_line_and_reset_by_its_button(steps):
    session, one = steps.frame.session, row(steps, "calibration", "bias_volt")
    typed(one, "0.1")
    assert session.document.recipe.calibration.bias_volt == 0.1
    typed(one, "")
    assert session.document.recipe.calibration.bias_volt is None
    other = row(steps, "histogram", "bins_per_decade")
    typed(other, "25")
    other.reset.click()
    assert session.document.recipe.histogram.bins_per_decade == 50


def test_choices_truths_lists_and_tables(steps):
    session = steps.frame.session
    choice = row(steps, "histogram", "region")
    choice.editor.combo.setCurrentIndex(1)
    assert session.document.recipe.histogram.region == "after_zero"
    truth = row(steps, "calibration", "offset_from_floor")
    truth.editor.box.click()
    assert session.document.recipe.calibration.offset_from_floor is True
    rules = row(steps, "selection", "rules")
    rules.editor.edit.setPlainText("rupture_found\nplateaus >= 1")
    rules.editor._finished()
    assert session.document.recipe.selection.rules == ["rupture_found", "plateaus >= 1"]
    peaks = row(steps, "peaks", "peaks")
    peaks.editor.edit.setPlainText('{"position_g0": 0.0004, "name": "molecule"}')
    peaks.editor._finished()
    assert session.document.recipe.peaks.peaks[0].position_g0 == 0.0004
    names = row(steps, "peaks", "names")
    names.editor.edit.setPlainText("molecule = 4e-4")
    names.editor._finished()
    assert session.document.recipe.peaks.names == {"molecule": 4e-4}
    names.editor.edit.setPlainText("molecule 4e-4")
    names.editor._finished()
    assert "write name = value" in names.wrong.text()


def test_reset_all_returns_a_section_to_its_defaults(steps):
    session = steps.frame.session
    typed(row(steps, "plateaus", "sensitivity"), "7")
    typed(row(steps, "plateaus", "minimum_samples"), "9")
    steps.cards["plateaus"].form._reset_all()
    assert session.document.recipe.plateaus == Recipe().plateaus
    assert session.undo.undoText() == "reset plateaus"


def test_steps_are_opened_and_closed_with_the_keyboard(steps):
    from PySide6.QtCore import Qt

    head = steps.cards["noise"].head
    QTest.keyClick(head, Qt.Key.Key_Return)
    assert steps.opened == "noise"
    QTest.keyClick(head, Qt.Key.Key_Space)
    assert steps.opened == ""
