"""The file that changes all at once, against a model in memory and against every torn state."""

import random

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from study_samples import some_study

from meseta.errors import StudyError
from meseta.study import Study
from meseta.study.pages import PAGE, Log, PagedFile, log_of, whole_log


@settings(deadline=None, max_examples=80)
@given(
    st.binary(min_size=0, max_size=3 * PAGE),
    st.lists(
        st.tuples(st.integers(0, 5 * PAGE), st.integers(1, 2 * PAGE), st.integers(0, 255), st.booleans()), max_size=8
    ),
    st.booleans(),
)
def test_reads_and_commits_equal_a_plain_buffer(tmp_path_factory, before, writes, writable):
    path = tmp_path_factory.mktemp("pages") / "file"
    path.write_bytes(before)
    model = bytearray(before)
    with PagedFile(path, writable=writable) as paged:
        for place, count, value, commit in writes:
            place = min(place, len(model))
            paged.seek(place)
            paged.write(bytes([value]) * count)
            model[place : place + count] = bytes([value]) * count
            paged.seek(max(place - 10, 0))
            buffer = bytearray(count + 20)
            paged.readinto(memoryview(buffer))
            expected = model[max(place - 10, 0) :][: len(buffer)]
            assert buffer[: len(expected)] == expected
            if commit and writable:
                paged.commit()
                assert path.read_bytes() == bytes(model)
                before = bytes(model)
    assert path.read_bytes() == before  # what was not committed is forgotten
    assert not log_of(path).exists()


def _torn_save(path):
    """Return the bytes before a save, the redo log of the save, and the bytes after it."""
    study = some_study(path)
    before = path.read_bytes()
    kept = PagedFile._apply
    PagedFile._apply = lambda self, log: (_ for _ in ()).throw(OSError(5, "power cut"))
    try:
        study.reject(study.traces().identities()[6:9], "torn")
        with pytest.raises(StudyError, match="the changes are kept, but not yet in place"):
            study.save()
    finally:
        PagedFile._apply = kept
    study.close()
    log, appended = log_of(path).read_bytes(), path.read_bytes()
    with Study.open(path) as opened:
        assert len(opened.recovered) == 0  # the log was whole: the save has happened
        assert not (path.parent / "s.h5.journal").exists()
    return before, appended, log, path.read_bytes()


def test_every_torn_state_is_healed(tmp_path):
    path = tmp_path / "s.h5"
    _, appended, log, after = _torn_save(path)
    pages = Log.parse(log).pages
    chance = random.Random(7)
    for number in range(300):
        torn = bytearray(appended)
        for page, content in pages.items():
            if chance.random() < 0.5:  # sectors of a page reach the disk in any order
                sectors = [s for s in range(0, PAGE, 512) if chance.random() < 0.5]
                for sector in sectors:
                    low = page * PAGE + sector
                    high = min(low + 512, len(torn))
                    torn[low:high] = content[sector : sector + max(high - low, 0)]
        path.write_bytes(torn)
        log_of(path).write_bytes(log)
        if number % 30 == 0:
            with Study.open(path, read_only=True) as study:  # seen as saved, and nothing written
                assert len(study.decisions.verdicts) == 6
            assert path.read_bytes() == torn and log_of(path).exists()
        found = whole_log(path)
        with PagedFile(path, writable=True) as paged:
            paged.apply(found)
        assert path.read_bytes() == after and not log_of(path).exists()


def test_a_log_that_is_not_whole_was_never_a_save(tmp_path):
    path = tmp_path / "s.h5"
    _, appended, log, _ = _torn_save(path)
    chance = random.Random(8)
    for number in range(12):
        cut = bytearray(log)
        if number % 2:
            cut[chance.randrange(len(cut))] ^= 1 << chance.randrange(8)
        else:
            del cut[chance.randrange(len(cut)) :]
        path.write_bytes(appended)
        log_of(path).write_bytes(cut)
        with Study.open(path) as study:
            assert len(study.decisions.verdicts) == 3 and study.check() == []
        log_of(path).unlink(missing_ok=True)


def test_a_log_of_another_file_is_not_applied(tmp_path):
    path = tmp_path / "s.h5"
    _, _, log, _ = _torn_save(path)
    path.unlink()
    some_study(path, fresh=True).close()
    bytes_before = path.read_bytes()
    log_of(path).write_bytes(log)
    assert whole_log(path) is None
    with Study.open(path) as study:
        assert study.check() == []
    assert path.read_bytes() == bytes_before


def test_hdf5_changes_in_memory_leave_a_read_only_file_alone(tmp_path):
    path = tmp_path / "x.h5"
    with h5py.File(path, "w", libver=("v110", "v110")) as file:
        file["a"] = np.arange(1000)
    before = path.read_bytes()
    with PagedFile(path, writable=False) as paged:
        with h5py.File(paged, "r+") as file:
            file["b"] = np.arange(5000)
            file["a"][:10] = -1
        with h5py.File(paged, "r") as file:
            assert file["b"][4999] == 4999 and file["a"][0] == -1 and file["a"][10] == 10
    assert path.read_bytes() == before
