"""Following a folder in the window: what is written there is taken into the open study, and the views grow."""

from __future__ import annotations

import subprocess
import sys
import threading

import numpy as np
import pytest
from PySide6.QtCore import QSettings, Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication, QFileDialog, QMessageBox

from meseta.analysis import Analysis
from meseta.resources import sample
from meseta.study import Study, gather, gathering
from meseta.window.following import follower as module
from meseta.window.following.follower import FOLLOW
from meseta.window.following.line import sentence

WAIT_MS = 300_000
NIGHT = sorted((sample() / "bench_check").glob("*.csv"))


@pytest.fixture(autouse=True)
def quick(monkeypatch):
    """Look often, and show what came at once."""
    monkeypatch.setattr(module, "LOOK_SECOND", 0.02)
    monkeypatch.setattr(module, "GROW_SECOND", 0.02)
    monkeypatch.setattr(module, "GROW_LOOK_MS", 10)


@pytest.fixture
def night(tmp_path):
    """The folder that an experiment writes into."""
    folder = tmp_path / "night 3"
    folder.mkdir()
    return folder


def put(folder, first, last):
    """Write some recordings as an experiment does."""
    for source in NIGHT[first:last]:
        (folder / source.name).write_bytes(source.read_bytes())


def traces(window):
    return 0 if window.session.traces is None else window.session.traces.traces


@pytest.fixture
def until(qtbot):
    def wait(condition):
        qtbot.waitUntil(condition, timeout=WAIT_MS)

    return wait


@pytest.fixture
def up_to_date(until):
    def wait(window, count):
        session = window.session
        until(lambda: traces(window) == count and session.state("peaks") == "current" and not session.pipeline.working)

    return wait


@pytest.fixture
def following(make, night, tmp_path, up_to_date):
    """A window that follows a folder into a study with its first four recordings."""
    window = make()
    put(night, 0, 4)
    gather([night], tmp_path / "night.h5")
    window.commands.follow(str(night), str(tmp_path / "night.h5"))
    up_to_date(window, 4)
    return window


def held(path):
    with Study.open(path, read_only=True) as study:
        return [source.name for source in study.sources], study.recipe, study.decisions, study.check()


# -- taking in -------------------------------------------------------------------------------------------------------


def test_views_grow_with_what_is_written_and_show_what_the_study_holds(following, night, tmp_path, until, up_to_date):
    window = following
    strip, records = window.widgets["strip"], []
    window.session.traces_changed.connect(lambda: records.append(traces(window)))
    writer = threading.Thread(target=put, args=(night, 4, 12))
    writer.start()
    up_to_date(window, 12)
    writer.join()
    assert records == sorted(records) and records[-1] == 12
    window.follower.stop()
    until(lambda: not window.jobs.runs(FOLLOW))
    session = window.session
    with Study.open(tmp_path / "night.h5", read_only=True) as study:
        alone = Analysis(study.traces(), session.document.recipe)
        assert [source.name for source in study.sources] == [path.name for path in NIGHT[:12]]
        assert np.array_equal(session.result("histogram").counts, alone.histogram().counts)
        assert np.array_equal(session.result("plateaus").level_g0, alone.plateaus().level_g0)
    assert strip.isVisible() and len(session.kept) == 12


def test_a_study_is_made_of_the_first_files_whose_layout_is_clear(make, night, tmp_path, up_to_date, until):
    window = make()
    window.commands.follow(str(night), str(tmp_path / "new.h5"))
    until(lambda: window.follow_line.isVisible() and "nothing taken in yet" in window.follow_line.words.text())
    put(night, 0, 3)
    checked = window.centre.check
    until(lambda: traces(window) == 3 or window.centre.currentWidget() is not window.centre.first)
    if window.centre.check is not checked:  # the bundled recordings have a doubt: the user is asked once
        until(window.centre.check.accept_button.isEnabled)
        assert not (tmp_path / "new.h5").exists() and NIGHT[0].name in window.centre.check.title.text()
        window.centre.check.accept_button.click()
    up_to_date(window, 3)
    put(night, 3, 6)
    up_to_date(window, 6)
    assert window.centre.currentWidget() is window.centre.spine
    assert window.session.study_path == str(tmp_path / "new.h5") and window.session.name == "new"
    assert held(tmp_path / "new.h5")[0] == [path.name for path in NIGHT[:6]]


def test_a_layout_in_doubt_is_asked_for_and_leaving_it_ends_following(make, night, tmp_path, until):
    window = make()
    (night / "raw.csv").write_text("a,b\n" + "".join(f"{i},{5 - i * 0.01}\n" for i in range(400)))
    window.commands.follow(str(night), str(tmp_path / "new.h5"))
    until(lambda: window.centre.check is not None and window.centre.currentWidget() is window.centre.check)
    assert window.follower.active
    window.centre.check.leave_button.click()
    assert not window.follower.active and window.centre.currentWidget() is window.centre.first
    until(lambda: not window.jobs.busy)
    assert not (tmp_path / "new.h5").exists() and not (tmp_path / "new.h5.lock").exists()


def test_an_open_recording_is_saved_as_the_study_first(make, night, tmp_path, settle, up_to_date, monkeypatch):
    window, study = make(), tmp_path / "kept.h5"
    put(night, 0, 5)
    window.commands.open_paths([str(night)])
    settle(window)
    window.commands.decide([2], False)
    monkeypatch.setattr(QFileDialog, "getExistingDirectory", lambda *_: str(night))
    monkeypatch.setattr(QFileDialog, "getSaveFileName", lambda *_: (str(study), ""))
    QTest.keyClick(window, Qt.Key.Key_F, Qt.KeyboardModifier.ControlModifier | Qt.KeyboardModifier.ShiftModifier)
    put(night, 5, 7)
    up_to_date(window, 7)
    assert not window.session.kept[2]
    window.follower.stop()
    settle(window)
    names, _, decisions, damage = held(study)
    assert names == [path.name for path in NIGHT[:7]] and damage == []
    assert list(decisions.verdicts) == [window.session.traces.identities([2])[0]]


# -- meanwhile -------------------------------------------------------------------------------------------------------


def test_settings_undo_decisions_and_saving_work_meanwhile(following, night, tmp_path, up_to_date, until):
    window, session = following, following.session
    session.go_to(3)
    here = session.traces.identity(3)
    put(night, 4, 6)
    session.change_setting("calibration", "series_resistance_ohm", 500.0, "Series resistance to 500 ohm")
    window.commands.decide([1], False)
    session.change_setting("plateaus", "sensitivity", 7.0, "Sensitivity to 7")
    put(night, 6, 9)
    up_to_date(window, 9)
    assert session.errors == {} and session.unmade == () and session.traces.identity(session.current) == here
    assert session.document.recipe.plateaus.sensitivity == 7.0 and not session.kept[1]
    session.undo.undo()
    window.run_action("save")
    put(night, 9, 10)
    up_to_date(window, 10)
    until(session.undo.isClean)
    window.follower.stop()
    until(lambda: not window.jobs.busy)
    names, recipe, decisions, damage = held(tmp_path / "night.h5")
    assert names == [path.name for path in NIGHT[:10]] and damage == []
    assert recipe == session.document.recipe and recipe.calibration.series_resistance_ohm == 500.0
    assert decisions == session.document.decisions and len(decisions.verdicts) == 1
    with Study.open(tmp_path / "night.h5", read_only=True) as study:
        assert np.array_equal(study.traces().conductance, session.traces.conductance, equal_nan=True)


def test_settings_that_give_no_traces_hold_it_up_until_they_are_corrected(following, night, until, up_to_date):
    window, session = following, following.session
    channels = {"no such column": {"role": "current", "unit": "nA"}}
    session.change_recipe("channels", session.document.recipe.with_values("intake", channels=channels))
    put(night, 4, 6)
    until(lambda: "waiting (" in window.follow_line.words.text())
    assert window.follower.active and traces(window) == 4
    session.undo.undo()
    up_to_date(window, 6)
    assert window.follower.followed.bad == ()


def test_files_that_a_setting_kept_out_are_tried_again_when_it_changes(following, night, until, up_to_date):
    window, session = following, following.session
    session.change_recipe("another reader", session.document.recipe.with_values("intake", reader="hdf5"))
    put(night, 4, 6)
    until(lambda: len(window.follower.followed.bad) == 2)
    session.undo.undo()
    up_to_date(window, 6)
    until(lambda: window.follower.followed.bad == ())


def test_closing_while_files_are_taken_in_leaves_a_whole_study(following, night, tmp_path, until, monkeypatch):
    entered, go_on = threading.Event(), threading.Event()
    true = gathering.write_recordings

    def slow(*given):
        entered.set()
        go_on.wait()
        given[-1].check()
        true(*given)

    monkeypatch.setattr(gathering, "write_recordings", slow)
    put(night, 4, 8)
    until(entered.is_set)
    following.session.undo.setClean()
    threading.Timer(0.2, go_on.set).start()
    following.close()
    names, _, _, damage = held(tmp_path / "night.h5")
    assert names == [path.name for path in NIGHT[:4]] and damage == []
    assert not (tmp_path / "night.h5.lock").exists()


def test_work_is_stopped_without_ending_following(following, night, up_to_date):
    window = following
    window.run_action("stop")
    put(night, 4, 5)
    up_to_date(window, 5)
    assert window.follower.active


def test_stop_ends_it_and_the_files_wait(following, night, tmp_path, until, qtbot):
    window = following
    assert window.follow_line.isVisible() and window.actions_by_key["stop_following"].isEnabled()
    qtbot.mouseClick(window.follow_line.stop, Qt.MouseButton.LeftButton)
    assert not window.follow_line.isVisible() and not window.actions_by_key["stop_following"].isEnabled()
    until(lambda: not window.jobs.busy)
    put(night, 4, 6)
    looks = []
    window.jobs.submit(FOLLOW, "after", lambda *_: looks.append(1), lambda _: None)
    until(lambda: bool(looks) and not window.jobs.busy)
    assert traces(window) == 4 and held(tmp_path / "night.h5")[0] == [path.name for path in NIGHT[:4]]
    window.follower.start(str(night), str(tmp_path / "night.h5"), window.keeper.study)
    until(lambda: traces(window) == 6)


def test_saved_as_another_study_it_goes_on_into_that_one(following, night, tmp_path, up_to_date, until):
    window = following
    put(night, 4, 5)
    up_to_date(window, 5)
    window.commands.save_to(str(tmp_path / "other.h5"))
    until(lambda: window.session.study_path == str(tmp_path / "other.h5"))
    put(night, 5, 7)
    up_to_date(window, 7)
    window.follower.stop()
    until(lambda: not window.jobs.busy)
    assert held(tmp_path / "other.h5")[0] == [path.name for path in NIGHT[:7]]
    assert held(tmp_path / "night.h5")[0] == [path.name for path in NIGHT[:5]]


def test_opening_something_else_ends_it(following, up_to_date, until):
    window = following
    window.commands.open_paths([str(NIGHT[15])])
    until(lambda: traces(window) == 1)
    assert not window.follower.active


# -- what is said ----------------------------------------------------------------------------------------------------


def test_what_waits_and_what_is_left_out_is_said_once(following, night, until, up_to_date):
    window = following
    with (night / NIGHT[4].name).open("w") as file:
        file.write(NIGHT[4].read_text())
        file.flush()
        if sys.platform == "linux":
            until(lambda: "another program has it open for writing" in sentence(window.follower.followed))
            assert f"waits: {NIGHT[4].name}" in window.follow_line.words.toolTip()
    (night / "list.csv").write_text("shopping\nmilk\n")
    up_to_date(window, 5)
    until(lambda: len(window.follower.followed.bad) == 1)
    assert window.follow_line.left_out.isVisible() and window.follow_line.left_out.text() == "1 left out …"
    window.follow_line.left_out.click()
    table = window.commands._left_out.table
    assert table.topLevelItemCount() == 1 and "list.csv" in table.topLevelItem(0).text(0)
    put(night, 5, 6)
    up_to_date(window, 6)
    assert table.topLevelItemCount() == 1 and len(window.follower.followed.bad) == 1
    (night / "list.csv").write_bytes(NIGHT[6].read_bytes())
    up_to_date(window, 7)
    until(lambda: table.topLevelItemCount() == 0)
    assert not window.follow_line.left_out.isVisible()
    window.commands._left_out.close()


def test_a_folder_that_goes_away_is_said_and_followed_when_it_is_back(following, night, tmp_path, until, up_to_date):
    night.rename(tmp_path / "away")
    until(lambda: "does not exist" in following.follow_line.words.text())
    (tmp_path / "away").rename(night)
    put(night, 4, 5)
    up_to_date(following, 5)


def test_a_study_that_another_process_holds_is_not_followed_into(make, night, tmp_path, until):
    put(night, 0, 2)
    gather([night], tmp_path / "night.h5")
    code = "import sys, meseta.study as s; k = s.Study.open(sys.argv[1]); print('held', flush=True); sys.stdin.read()"
    other = subprocess.Popen(
        [sys.executable, "-c", code, str(tmp_path / "night.h5")],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    try:
        assert other.stdout.readline() == "held\n"
        window = make()
        window.commands.follow(str(night), str(tmp_path / "night.h5"))
        until(lambda: any(box.isVisible() for box in window.findChildren(QMessageBox)))
        (box,) = window.findChildren(QMessageBox)
        assert box.windowTitle() == "Not followed" and "cannot be added to: held by" in box.text()
        assert f"(process {other.pid}," in box.text() and not window.follower.active
        box.close()
    finally:
        other.communicate("")


# -- over a restart --------------------------------------------------------------------------------------------------


def test_a_window_that_was_closed_offers_to_go_on(following, make, night, tmp_path, up_to_date):
    following.session.undo.setClean()
    following.close()
    put(night, 4, 7)
    again = make()
    again.commands.offer_following()
    offered = [again.centre.first.buttons.itemAt(place).widget() for place in range(again.centre.first.buttons.count())]
    assert offered[-1].text() == "Go on following night 3"
    offered[-1].click()
    up_to_date(again, 7)
    assert again.follower.active and again.follower.followed.last.recordings == 3
    again.follower.stop()
    assert not again.follower.remembered().active
    QApplication.processEvents()


WINDOW = """
import sys
from pathlib import Path
from PySide6.QtCore import QSettings, QTimer
from meseta.window.application import make_application, make_window
from meseta.window.following import follower
follower.LOOK_SECOND = follower.GROW_SECOND = 0.02
place, night = Path(sys.argv[1]), sys.argv[2]
application = make_application()
window = make_window(application, QSettings(str(place / "window.ini"), QSettings.Format.IniFormat), place / "u.json")
window.show()
window.commands.follow(night, str(place / "night.h5"))
session = window.session
session.traces_changed.connect(lambda: print(session.traces.traces, flush=True))
application.exec()
"""


def test_a_window_that_was_killed_goes_on_where_it_stopped(make, night, tmp_path, place, up_to_date, until):
    put(night, 0, 2)
    gather([night], tmp_path / "night.h5")
    put(night, 2, 5)
    killed = subprocess.Popen([sys.executable, "-c", WINDOW, str(place), str(night)], stdout=subprocess.PIPE, text=True)
    while (line := killed.stdout.readline()) not in ("5\n", ""):
        pass
    killed.kill()
    killed.communicate()
    assert line == "5\n"
    put(night, 5, 8)
    again = make()
    again.commands.offer_following()
    again.run_action("go_on_following")
    up_to_date(again, 8)
    assert again.follower.followed.last.recordings == 3
    again.follower.stop()
    until(lambda: not again.jobs.busy)
    assert held(tmp_path / "night.h5")[0] == [path.name for path in NIGHT[:8]]


def test_nothing_is_offered_after_following_was_stopped(following, make, place):
    following.follower.stop()
    settings = QSettings(str(place / "window.ini"), QSettings.Format.IniFormat)
    settings.sync()
    again = make()
    count = again.centre.first.buttons.count()
    again.commands.offer_following()
    assert again.centre.first.buttons.count() == count
