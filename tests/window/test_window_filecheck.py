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
