"""The job runner: the newest wins, cancel, errors in words, closing while work runs.  Races are held still by locks."""

from __future__ import annotations

import threading

import pytest

from meseta.errors import InputError, WorkError
from meseta.window.jobs import Channel, JobRunner

WORK = Channel("work")
OTHER = Channel("other", quick=True)


@pytest.fixture
def jobs(qapp):
    runner = JobRunner()
    yield runner
    runner.close()
    runner.deleteLater()


def test_the_newest_request_wins_and_the_older_is_cancelled(jobs, qtbot):
    gate, seen, cancelled = threading.Event(), [], []

    def old(work, part):
        gate.wait(60)
        cancelled.append(work.cancel.is_set())
        return "old"

    jobs.submit(WORK, "old", old, seen.append)
    jobs.submit(WORK, "new", lambda work, part: "new", seen.append)
    gate.set()
    with qtbot.waitSignal(jobs.idle, timeout=60_000):
        pass
    assert seen == ["new"]
    assert cancelled == [True] or cancelled == []  # either it had begun, or it never did


def test_channels_do_not_disturb_each_other(jobs, qtbot):
    seen = []
    jobs.submit(WORK, "one", lambda work, part: 1, seen.append)
    jobs.submit(OTHER, "two", lambda work, part: 2, seen.append)
    qtbot.waitUntil(lambda: not jobs.busy, timeout=60_000)
    assert sorted(seen) == [1, 2]


def test_quick_work_does_not_wait_behind_long_work(jobs, qtbot):
    gate, seen = threading.Event(), []
    jobs.submit(WORK, "long", lambda work, part: gate.wait(60), lambda _: seen.append("long"))
    jobs.submit(OTHER, "quick", lambda work, part: "quick", seen.append)
    qtbot.waitUntil(lambda: seen == ["quick"], timeout=60_000)
    gate.set()
    qtbot.waitUntil(lambda: seen == ["quick", "long"], timeout=60_000)


def test_parts_come_before_the_end_and_in_order(jobs, qtbot):
    seen = []

    def task(work, part):
        for number in range(5):
            part(number)
        return "end"

    jobs.submit(WORK, "parts", task, seen.append, part=seen.append)
    qtbot.waitUntil(lambda: not jobs.busy, timeout=60_000)
    assert seen == [0, 1, 2, 3, 4, "end"]


def test_an_error_arrives_in_words(jobs, qtbot):
    errors = []

    def task(work, part):
        raise InputError("is no recording", "a.txt", "choose another")

    jobs.submit(WORK, "reading", task, lambda _: None, errors.append)
    qtbot.waitUntil(lambda: bool(errors), timeout=60_000)
    assert str(errors[0]) == "a.txt: is no recording -> choose another"


def test_an_unforeseen_fault_becomes_a_message_and_not_a_crash(jobs, qtbot):
    with qtbot.waitSignal(jobs.failed, timeout=60_000) as caught:
        jobs.submit(WORK, "dividing", lambda work, part: 1 / 0, lambda _: None)
    assert isinstance(caught.args[0], WorkError)
    assert "ZeroDivisionError" in str(caught.args[0])


def test_a_cancelled_request_says_nothing(jobs, qtbot):
    gate, seen = threading.Event(), []

    def task(work, part):
        gate.wait(60)
        work.check()

    jobs.submit(WORK, "long", task, seen.append, seen.append)
    jobs.cancel(WORK)
    gate.set()
    qtbot.waitUntil(lambda: not jobs.busy, timeout=60_000)
    assert seen == []


def test_closing_waits_for_the_work_and_takes_no_more(qapp):
    runner, begun, seen = JobRunner(), threading.Event(), []

    def task(work, part):
        begun.set()
        work.cancel.wait(60)
        work.check()

    runner.submit(WORK, "long", task, seen.append)
    assert begun.wait(60)
    runner.close()
    assert runner.submit(WORK, "late", lambda work, part: 1, seen.append) == 0
    qapp.processEvents()
    assert seen == []
    assert not runner.busy


def test_progress_is_shown_and_taken_away(jobs, qtbot):
    gate, shown = threading.Event(), []

    def task(work, part):
        work.tell("counting", 3, 10)
        gate.wait(60)

    jobs.progressed.connect(shown.append)
    jobs.submit(WORK, "counting", task, lambda _: None)
    qtbot.waitUntil(lambda: bool(shown), timeout=60_000)
    assert (shown[0].label, shown[0].done, shown[0].total) == ("counting", 3, 10)
    gate.set()
    qtbot.waitUntil(lambda: shown[-1] is None, timeout=60_000)
