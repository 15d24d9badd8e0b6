"""Locks, migration, full disks, killed processes."""

import json
import os
import resource
import shutil
import socket
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest
from study_samples import assert_same_traces, plain_traces, some_study

from meseta.errors import StudyError
from meseta.study import Study

REFERENCE = Path(__file__).parents[1] / "reference" / "studies"
CAMPAIGN = Path(__file__).parents[1] / "campaigns" / "kill_study.py"


# -- two openers ----------------------------------------------------------------------------------------------------


def test_the_second_opener_reads_only_and_says_who_holds_it(tmp_path):
    study = some_study(tmp_path / "s.h5")
    with Study.open(tmp_path / "s.h5") as second:
        assert second.read_only and f"on {socket.gethostname()} (process {os.getpid()}" in second.why_read_only
        with pytest.raises(StudyError, match="cannot be changed: held by"):
            second.reject(["x"])
    study.reject(study.traces().identities()[:1], "still holds it")
    study.close()
    with Study.open(tmp_path / "s.h5") as third:
        assert not third.read_only
    assert not (tmp_path / "s.h5.lock").exists()


def test_a_lock_that_a_killed_process_left_is_stale(tmp_path):
    some_study(tmp_path / "s.h5").close()
    code = (
        "import os, signal; from meseta.study import Study; "
        f"study = Study.open({str(tmp_path / 's.h5')!r}); study.reject(['a|b|0|opening'], 'kept'); "
        "os.kill(os.getpid(), signal.SIGKILL)"
    )
    killed = subprocess.run([sys.executable, "-c", code], check=False)
    assert killed.returncode == -9 and (tmp_path / "s.h5.lock").exists()
    with Study.open(tmp_path / "s.h5") as study:
        assert not study.read_only and study.recovered[0].text == "rejected by hand: kept"


def test_the_lock_of_another_machine_holds_until_it_is_taken_over(tmp_path):
    some_study(tmp_path / "s.h5").close()
    holder = {"user": "ann", "host": "another-machine", "process": 17, "since": "2026-01-02T03:04:05+00:00"}
    (tmp_path / "s.h5.lock").write_text(json.dumps(holder))
    with Study.open(tmp_path / "s.h5") as study:
        assert study.why_read_only == "held by ann on another-machine (process 17, since 2026-01-02T03:04:05+00:00)"
    with Study.open(tmp_path / "s.h5", take_over=True) as study:
        assert not study.read_only


def test_an_empty_or_nonsensical_lock_file_holds_nothing(tmp_path):
    some_study(tmp_path / "s.h5").close()
    for text in ("", "{", "[1]"):
        (tmp_path / "s.h5.lock").write_text(text)
        with Study.open(tmp_path / "s.h5") as study:
            assert not study.read_only


def test_a_reader_sees_whole_states_while_the_owner_saves(tmp_path):
    study = some_study(tmp_path / "s.h5")
    reader = Study.open(tmp_path / "s.h5")
    identities = study.traces().identities()
    study.reject(identities[8:9])
    study.save()
    study.rewrite()
    assert_same_traces(plain_traces(), reader.traces())
    assert len(reader.decisions.verdicts) == 3
    assert len(Study.open(tmp_path / "s.h5").decisions.verdicts) == 4
    study.close()


def test_a_folder_that_may_not_be_written_to(tmp_path, monkeypatch):
    """A read-only medium: opening the lock file fails, and everything else works."""
    some_study(tmp_path / "s.h5").close()
    before = (tmp_path / "s.h5").read_bytes()

    def refuse(path, *arguments, **named):
        if str(path).endswith(".lock"):
            raise OSError(30, "Read-only file system")
        return kept(path, *arguments, **named)

    kept = os.open
    monkeypatch.setattr(os, "open", refuse)
    with Study.open(tmp_path / "s.h5") as study:
        assert study.why_read_only == "the folder cannot be written to (Read-only file system)"
        assert study.check() == []
    assert (tmp_path / "s.h5").read_bytes() == before and len(list(tmp_path.iterdir())) == 1


# -- schemas ------------------------------------------------------------------------------------------------------


def test_newer_schemas_are_refused_in_words(tmp_path):
    some_study(tmp_path / "s.h5").close()
    with h5py.File(tmp_path / "s.h5", "r+") as root:
        root.attrs["schema"] = 99
    before = (tmp_path / "s.h5").read_bytes()
    with pytest.raises(StudyError, match=r"written by a newer Meseta \(schema 99"):
        Study.open(tmp_path / "s.h5")
    assert (tmp_path / "s.h5").read_bytes() == before


EXPECTED = json.loads((REFERENCE / "expected.json").read_text(encoding="utf-8"))
LATER = {"length_series": {"unit": "nm", "rows": []}}
"""Decisions that older studies know nothing of."""


@pytest.mark.parametrize("name", sorted(path.name for path in REFERENCE.glob("*.h5")))
@pytest.mark.parametrize("read_only", [True, False])
def test_every_schema_ever_written_opens(tmp_path, name, read_only):
    path = Path(shutil.copy(REFERENCE / name, tmp_path))
    before = path.read_bytes()
    with Study.open(path, read_only=read_only) as study:
        traces = study.traces()
        assert traces.key == EXPECTED["key"]
        assert traces.conductance.sum(dtype=np.float64) == EXPECTED["sum"]
        assert traces.offsets.tolist() == EXPECTED["offsets"]
        assert traces.table["molecule"].tolist() == EXPECTED["molecule"]
        assert traces.table["flag"].tolist() == EXPECTED["flag"]
        assert study.decisions.plain() == EXPECTED["decisions"] | LATER
        assert study.recipe.selection.rules == ["rupture_found"] and study.recipe.histogram.region == "after_zero"
        assert study.check() == []
        backup = study.backup
    if read_only:
        assert path.read_bytes() == before and backup is None
        return
    if "schema2" not in name:
        assert backup is not None and backup.read_bytes() == before
        with Study.open(path) as again:
            assert again.backup is None and again.decisions.plain() == EXPECTED["decisions"] | LATER


def test_there_is_a_reference_study_of_every_schema():
    from meseta.study.files import SCHEMA

    assert {path.name for path in REFERENCE.glob("*.h5")} == {f"schema{number}.h5" for number in range(1, SCHEMA + 1)}


# -- no room ----------------------------------------------------------------------------------------------------------


def _with_file_limit(limit, function):
    """Run ``function`` in a child whose files may not grow beyond ``limit`` bytes; return what it returned."""
    reader, writer = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
            told = function()
        except BaseException as error:  # the parent must hear of it
            told = f"{type(error).__name__}: {error}"
        os.write(writer, str(told).encode())
        os._exit(0)
    os.close(writer)
    told = b""
    while more := os.read(reader, 65536):
        told += more
    os.close(reader)
    os.waitpid(child, 0)
    return told.decode()


@pytest.mark.parametrize("beyond", [0, 1000, 5000, 20_000])
def test_a_full_disk_loses_nothing_that_was_saved(tmp_path, beyond):
    path = tmp_path / "s.h5"
    some_study(path).close()
    limit = path.stat().st_size + beyond

    def work():
        study = Study.open(path)
        kept, refused = 0, ""
        identities = study.traces().identities()
        try:
            for number in range(400):
                study.reject(identities, f"reason {number}")
                kept += 1
                study.save()
        except StudyError as error:
            refused = str(error)
        assert len(study.history.entries) == kept + 1
        return f"{kept} {refused}"

    kept, _, refused = _with_file_limit(limit, work).partition(" ")
    assert "free some room" in refused and "File too large" in refused
    with Study.open(path) as study:
        assert study.check() == [] and not study.read_only
        assert len(study.history.entries) == int(kept) + 1
        assert_same_traces(plain_traces(), study.traces())
    assert not [one.name for one in tmp_path.iterdir() if one.name.endswith(("redo", "unfinished"))]


def test_a_journal_line_that_does_not_fit_is_refused_whole(tmp_path):
    path = tmp_path / "s.h5"
    some_study(path).close()

    def work():
        study = Study.open(path)
        kept = 0
        try:
            for number in range(10_000):
                study.note(f"note {number} " + "x" * 30_000)
                kept += 1
        except StudyError as error:
            assert "could not be kept" in str(error)
        study.name("short enough")
        return kept + 1

    kept = int(_with_file_limit(path.stat().st_size + 400_000, work))
    with Study.open(path) as study:
        assert study.damage == () and len(study.recovered) == kept and study.history.entries[-1].text == "short enough"


def test_a_new_study_on_a_full_disk_leaves_nothing_behind(tmp_path):
    told = _with_file_limit(30_000, lambda: some_study(tmp_path / "s.h5", fresh=True))
    assert told.startswith("StudyError") and "free some room" in told
    assert list(tmp_path.iterdir()) == []


# -- killed -----------------------------------------------------------------------------------------------------------


def test_killed_at_random_moments(tmp_path):
    """The short form of tests/campaigns/kill_study.py."""
    run = subprocess.run(
        [sys.executable, CAMPAIGN, "--kills", "8", "--seed", "5"], capture_output=True, text=True, check=False
    )
    assert run.returncode == 0, run.stdout + run.stderr
    assert " 0 failures" in run.stdout
