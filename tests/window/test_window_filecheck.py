"""The file check: what was recognised, corrections, doubts in sentences, and what is read in the end."""

from __future__ import annotations

import numpy as np
import pytest
from PySide6.QtCore import Qt
from PySide6.QtTest import QTest

from meseta.study import read


@pytest.fixture
def folder(tmp_path):
    """Three files of volts, a header that names columns and units, no word of bias or gain."""
    random = np.random.default_rng(11)
    place = tmp_path / "night"
    place.mkdir()
    for number in range(3):
        steps = np.repeat([2.0, 1.0, 1e-4, 0.0], 100) + random.normal(0, 1e-3, 400)
        current_nanoampere = steps * 7748.091729
        displacement = np.arange(400) * 0.005
        lines = ["displacement (nm),current (nA)"]
        lines += [f"{x:.4f},{i:.4f}" for x, i in zip(displacement, current_nanoampere, strict=True)]
        (place / f"pull_{number}.csv").write_text("\n".join(lines))
    return place


@pytest.fixture
def check(make, settle, folder):
    window = make()
    window.commands.check_paths([str(folder)])
    settle(window)
    return window, window.commands._check


def test_what_was_recognised_is_shown_with_the_reasons_and_nothing_is_read_yet(check):
    window, page = check
    assert window.centre.currentWidget() is page
    assert window.session.traces is None
    assert "pull_0.csv" in page.title.text() and "2 more" in page.title.text()
    roles = {name: combo.currentText() for name, combo in page.channels.roles.items()}
    assert sorted(roles.values()) == ["current", "displacement"]


def test_a_missing_bias_is_a_sentence_and_given_it_the_preview_is_calibrated(check, settle):
    window, page = check
    assert not page.accept_button.isEnabled()
    assert any("bias" in sentence for sentence in page.picture.sentences())
    bias = next(row for row in page.forms["calibration"].rows if row.info.name == "bias_volt")
    bias.editor.widget.setText("0.1")
    bias.editor.widget.editingFinished.emit()
    settle(window)
    assert page.accept_button.isEnabled()
    values = page.picture.calibrated.g0
    # I = G x 77.480917 uS x 0.1 V: the file's 7.748091729 uA for each G0 reads as G0 again (CODATA 2022 value).
    assert np.nanmedian(values[values > 1.5]) == pytest.approx(2.0, abs=0.01)


def test_accepting_reads_the_files_with_the_draft(check, settle, folder):
    window, page = check
    page.draft.session.change_setting("calibration", "bias_volt", 0.1, "Bias")
    settle(window)
    QTest.mouseClick(page.accept_button, Qt.MouseButton.LeftButton)
    settle(window)
    assert window.session.traces.traces == 3
    assert window.session.document.recipe.calibration.bias_volt == 0.1
    assert window.centre.currentWidget() is window.centre.spine
    alone = read(str(folder), window.session.document.recipe)
    assert np.array_equal(window.session.traces.conductance, alone.conductance, equal_nan=True)


def test_a_role_can_be_corrected(check, settle):
    window, page = check
    combo = next(combo for combo in page.channels.roles.values() if combo.currentText() == "displacement")
    name = next(name for name, one in page.channels.roles.items() if one is combo)
    combo.setCurrentIndex(combo.findText("piezo"))
    combo.activated.emit(combo.currentIndex())
    assert page.draft.session.document.recipe.intake.channels[name].role == "piezo"
    settle(window)


def test_leaving_reads_nothing(check):
    window, page = check
    page.leave_button.click()
    assert window.centre.currentWidget() is window.centre.first
    assert window.session.traces is None


def test_files_that_are_none_are_explained_on_the_page(make, settle, tmp_path):
    path = tmp_path / "notes.csv"
    path.write_bytes(bytes(range(256)) * 4)
    window = make()
    window.commands.check_paths([str(path)])
    settle(window)
    page = window.commands._check
    assert not page.accept_button.isEnabled()
    assert page.doubts.count() >= 1


def test_enter_reads_the_files_once_they_can_be_read(make, settle, folder):
    from meseta.recipe import Recipe

    window = make()
    window.commands.check_paths([str(folder)], Recipe().with_values("calibration", bias_volt=0.1))
    settle(window)
    page = window.commands._check
    window.activateWindow()
    assert page.focusWidget() is page.accept_button
    QTest.keyClick(page.accept_button, Qt.Key.Key_Return)
    settle(window)
    assert window.session.traces.traces == 3


# -- kept layouts -----------------------------------------------------------------------------------------------------


def press(button):
    QTest.mouseClick(button, Qt.MouseButton.LeftButton)


def offered(page):
    """What may be chosen to read the files by."""
    return [page.kept.choice.itemText(place) for place in range(page.kept.choice.count())]


def choose(page, words):
    page.kept.choice.setCurrentIndex(page.kept.choice.findText(words))
    page.kept.choice.activated.emit(page.kept.choice.currentIndex())


@pytest.fixture
def kept(check, settle):
    """The three files, read with their layout kept as "rig 2" and a bias given."""
    window, page = check
    page.draft.session.change_setting("calibration", "bias_volt", 0.1, "Bias")
    settle(window)
    page.kept.name.setText("rig 2")
    press(page.kept.keep)
    settle(window)
    return window, page


def in_microampere(folder):
    """A further night in which somebody changed the unit."""
    place = folder.parent / "next"
    place.mkdir()
    lines = (folder / "pull_0.csv").read_text().replace("current (nA)", "current (µA)")
    (place / "pull_7.csv").write_text(lines, encoding="utf-8")
    return place


def test_the_answer_is_kept_under_a_name_and_the_files_are_read_by_it(kept, settle):
    window, page = kept
    settings = page.draft.session.document.recipe.intake
    assert list(settings.layouts) == ["rig 2"] and settings.use_layout is None
    assert {one.role for one in settings.layouts["rig 2"].channels.values()} == {"displacement", "current"}
    assert page.picture.described[0].kept_layout == "rig 2"
    assert "'rig 2'" in page.kept.said.text()
    press(page.accept_button)
    settle(window)
    assert window.session.traces.traces == 3
    assert "rig 2" in window.session.document.recipe.intake.layouts


def test_a_correction_is_part_of_what_is_kept(check, settle):
    window, page = check
    combo = page.channels.roles["displacement (nm)"]
    combo.setCurrentIndex(combo.findText("other"))
    combo.activated.emit(combo.currentIndex())
    settle(window)
    page.kept.name.setText("no drive")
    QTest.keyClick(page.kept.name, Qt.Key.Key_Return)
    settle(window)
    settings = page.draft.session.document.recipe.intake
    assert settings.layouts["no drive"].channels["displacement (nm)"].role == "other"
    assert settings.channels == {}  # one place holds the answer


def test_a_name_that_is_none_is_refused_in_words(check):
    _, page = check
    for text in ("", "none"):
        page.kept.name.setText(text)
        press(page.kept.keep)
        assert page.kept.wrong.isVisible() and page.kept.wrong.text()
    assert page.draft.session.document.recipe.intake.layouts == {}


def test_files_that_do_not_fit_any_more_are_not_read_and_the_difference_is_said(kept, settle, folder):
    window, page = kept
    press(page.accept_button)
    settle(window)
    window.session.undo.setClean()
    window.commands.check_paths([str(in_microampere(folder))])
    settle(window)
    assert not page.accept_button.isEnabled()
    assert "do not fit" in page.title.text()
    said = [page.kept.differences.itemAt(place).widget().text() for place in range(page.kept.differences.count())]
    assert len(said) == 1
    assert "is in µA" in said[0] and "nA was stated" in said[0]
    assert page.kept.correct.isVisible() and page.kept.another.isVisible()


def test_a_misfit_is_corrected_and_kept_under_the_same_name(kept, settle, folder):
    window, page = kept
    press(page.accept_button)
    settle(window)
    window.session.undo.setClean()
    window.commands.check_paths([str(in_microampere(folder))])
    settle(window)
    press(page.kept.correct)
    settle(window)
    assert page.kept.name.text() == "rig 2"
    assert page.accept_button.isEnabled()
    press(page.kept.keep)
    settle(window)
    settings = page.draft.session.document.recipe.intake
    assert list(settings.layouts) == ["rig 2"]
    assert settings.layouts["rig 2"].channels["current (µA)"].unit == "µA"
    assert settings.use_layout is None and settings.channels == {}


def test_a_misfit_is_kept_as_another_layout_beside_the_first(kept, settle, folder):
    window, page = kept
    press(page.accept_button)
    settle(window)
    window.session.undo.setClean()
    window.commands.check_paths([str(in_microampere(folder))])
    settle(window)
    press(page.kept.another)
    settle(window)
    assert page.kept.name.text() == ""
    page.kept.name.setText("new rig")
    press(page.kept.keep)
    settle(window)
    assert list(page.draft.session.document.recipe.intake.layouts) == ["rig 2", "new rig"]
    assert page.picture.described[0].kept_layout == "new rig"
    page.draft.session.undo.undo()
    assert list(page.draft.session.document.recipe.intake.layouts) == ["rig 2"]


def test_a_layout_kept_for_one_study_is_proposed_for_the_next_and_never_taken_of_itself(kept, settle, make, folder):
    window, page = kept
    press(page.accept_button)
    settle(window)
    later = make()
    later.commands.check_paths([str(folder)])
    settle(later)
    other = later.commands._check
    assert other.draft.session.document.recipe.intake.layouts == {}
    assert other.picture.described[0].kept_layout == ""
    assert "layout 'rig 2', kept before" in offered(other)
    assert other.kept.use.isVisible()
    press(other.kept.use)
    settle(later)
    assert other.picture.described[0].kept_layout == "rig 2"
    choose(other, "what is recognised")
    settle(later)
    assert other.draft.session.document.recipe.intake.use_layout == "none"
    assert other.picture.described[0].kept_layout == ""
    choose(other, "whichever kept layout fits")
    settle(later)
    assert other.picture.described[0].kept_layout == "rig 2"


def test_a_layout_is_forgotten(kept, settle, make, folder):
    window, page = kept
    assert not page.kept.forget.isEnabled()
    choose(page, "layout 'rig 2'")
    settle(window)
    page.remembered.add(page.draft.session.document.recipe.intake.layouts)
    press(page.kept.forget)
    settle(window)
    assert page.draft.session.document.recipe.intake.layouts == {}
    assert offered(page) == ["what is recognised"]
    page.draft.session.undo.undo()
    assert list(page.draft.session.document.recipe.intake.layouts) == ["rig 2"]


def test_what_another_version_remembered_stops_nothing(qapp, tmp_path):
    from PySide6.QtCore import QSettings

    from meseta.recipe.kept_layouts import KeptLayout
    from meseta.window.filecheck.remembered import RememberedLayouts

    settings = QSettings(str(tmp_path / "a.ini"), QSettings.Format.IniFormat)
    settings.setValue("layouts", '{"a": {"reader": "text", "colour": 3}, "none": {}, "b": {"reader": "text"}, "c": 1}')
    remembered = RememberedLayouts(settings)
    assert list(remembered.entries()) == ["b"]
    remembered.add({"d": KeptLayout(reader="HDF5")})
    assert list(remembered.entries()) == ["b", "d"]
    settings.setValue("layouts", "[1")
    assert remembered.entries() == {}
