"""Following folders: what waits, what is taken once, what is told; killed at any moment and started again."""

import errno
import os
import signal
import subprocess
import sys

import h5py
import numpy as np
import pytest

from meseta.errors import StudyError
from meseta.recipe import Recipe
from meseta.study import Study, following, gather, gathering, write_study
from meseta.study.arriving import files_meant
from meseta.study.pages import PagedFile
from meseta.work import Work

HEAD = "displacement (nm),conductance (G0)\n"


def rows(seed, samples=200):
    noise = np.random.default_rng(seed).standard_normal(samples)
    values = 10 ** (0.8 - np.linspace(0, 4, samples)) * (1 + 0.02 * noise)
    return [f"{number * 0.01:.3f},{value:.6e}\n" for number, value in enumerate(values)]


def text(seed):
    return HEAD + "".join(rows(seed))


def follow(folder, study, *steps, rest=6, recipe=None):
    """Follow while the steps are done, one before each look (None: nothing), then for ``rest`` looks more."""
    work, said, waits = Work(threads=1), [], []
    todo = [*steps, *[None] * rest]

    def wait(_):
        if not todo:
            work.cancel.set()
            return True
        step = todo.pop(0)
        if step is not None:
            step()
        return False

    work.cancel.wait = wait
    work = Work(threads=1, cancel=work.cancel, report=lambda progress: waits.append(progress.label))
    answer, bad = gather([folder], study, recipe, work, follow=True, say=lambda error: said.append(str(error)))
    return answer, bad, said, waits


def names(study):
    with Study.open(study, read_only=True) as opened:
        assert opened.check(Work(threads=1)) == []
        return [source.name for source in opened.sources]


def by_source(study):
    with Study.open(study, read_only=True) as opened:
        traces = opened.traces()
        row = traces.table["source"]
        return {
            traces.sources[int(row[trace])].sha256: traces.conductance[
                traces.offsets[trace] : traces.offsets[trace + 1]
            ].tobytes()
            for trace in range(traces.traces)
        }


@pytest.fixture
def night(tmp_path):
    folder = tmp_path / "night"
    folder.mkdir()
    return folder


def test_a_file_that_is_written_with_pauses_is_taken_whole(tmp_path, night):
    """Closed between its rows, with pauses longer than a look: its own longest pause decides."""
    slow, parts = night / "slow.csv", rows(1)

    def more(a, b):
        def step():
            with slow.open("a") as file:
                file.writelines(parts[a:b])

        return step

    slow.write_text(HEAD)
    answer, bad, said, waits = follow(
        night, tmp_path / "s.h5", more(0, 50), None, more(50, 100), None, None, more(100, 200), rest=8
    )
    assert (answer["recordings_added"], answer["traces"], bad, said) == (1, 1, [], [])
    gather([night], tmp_path / "once.h5")
    assert by_source(tmp_path / "s.h5") == by_source(tmp_path / "once.h5")
    assert any("slow.csv waits (it was written with pauses so far)" in label for label in waits)


@pytest.mark.skipif(sys.platform != "linux", reason="only there the system tells who has a file open")
def test_a_file_that_is_open_for_writing_waits_however_long_it_rests(tmp_path, night):
    file = h5py.File(night / "growing.h5", "w")

    def one(number):
        home = file.create_group(f"trace_{number}")
        values = np.array([row.split(",") for row in rows(number)], float)
        home["conductance"], home["displacement"] = values[:, 1], values[:, 0]
        home["conductance"].attrs["unit"], home["displacement"].attrs["unit"] = "G0", "nm"
        file.flush()

    one(0)
    answer, bad, said, waits = follow(night, tmp_path / "s.h5", *[None] * 8, lambda: one(1), *[None] * 8, file.close)
    assert (answer["traces"], answer["recordings"], bad, said) == (2, 1, [], [])
    assert any("growing.h5 waits (another program has it open for writing)" in label for label in waits)


@pytest.mark.parametrize("library", ["v110", "latest"])
def test_a_copied_hdf5_file_that_was_never_closed_waits(tmp_path, night, library):
    """What stands in the file itself tells it, also on a network drive (HDF5 specification, consistency flags)."""
    with h5py.File(tmp_path / "a.h5", "w", libver=(library, "latest")) as file:
        file["x"] = np.arange(5)
        file.flush()
        body = (tmp_path / "a.h5").read_bytes()
    (night / "a.h5").write_bytes(body)
    (night / "b.csv").write_text(text(2))
    answer, bad, said, waits = follow(night, tmp_path / "s.h5", rest=10)
    assert (answer["recordings_added"], bad, said) == (1, [], [])
    assert "a.h5 waits (the HDF5 file was not closed)" in waits[-1]


def test_a_copy_that_has_its_size_before_its_content_waits(tmp_path, night):
    body, copied = text(3).encode(), night / "copied.csv"
    copied.write_bytes(bytes(len(body)))
    answer, bad, said, waits = follow(night, tmp_path / "s.h5", *[None] * 9, lambda: copied.write_bytes(body), rest=25)
    assert (answer["recordings_added"], bad, said) == (1, [], [])
    assert any("copied.csv waits (it ends in zeros" in label for label in waits)


def test_renamed_odd_named_back_dated_and_nested_files_are_taken_once(tmp_path, night):
    (night / "a.csv.part").write_text(text(1))

    def later():
        (night / "a.csv.part").rename(night / "a.csv")
        (night / "second session").mkdir()
        (night / "second session" / "a.csv").write_text(text(2))
        (night / "ünï\ncode.csv").write_text(text(3))
        (night / "copy.csv").write_text(text(3))
        (night / "old.csv").write_text(text(4))

    def back():
        os.utime(night / "old.csv", (1e9, 1e9))

    answer, bad, said, _ = follow(night, tmp_path / "s.h5", None, None, later, back)
    assert (answer["recordings_added"], answer["already_there"], bad, said) == (4, 1, [], [])
    assert "second session/a.csv" in names(tmp_path / "s.h5")


def test_bad_files_are_told_once_and_tried_again_when_they_change(tmp_path, night):
    bad_file = night / "list.csv"
    bad_file.write_text("shopping\nmilk\n")
    answer, bad, said, _ = follow(night, tmp_path / "s.h5", *[None] * 9)
    assert answer["recordings"] == 0 and len(bad) == len(said) == 1 and "list.csv" in said[0]
    assert not (tmp_path / "s.h5").exists()
    answer, bad, said, _ = follow(night, tmp_path / "s.h5", *[None] * 4, lambda: bad_file.write_text(text(1)))
    assert answer["recordings"] == 1 and bad == [] and len(said) == 1


def test_a_file_with_another_content_is_told_and_the_study_keeps_the_old_one(tmp_path, night):
    (night / "a.csv").write_text(text(1))
    step = [*[None] * 4, lambda: (night / "a.csv").write_text(text(2))]
    answer, bad, said, _ = follow(night, tmp_path / "s.h5", *step, rest=12)
    assert answer["recordings"] == 1 and len(bad) == len(said) == 1
    assert "another content than when it was taken in" in said[0]
    (night / "a.csv").touch()
    answer, bad = gather([night], tmp_path / "s.h5")
    assert answer["recordings"] == 1 and "another content" in bad[0].what
    with Study.open(tmp_path / "s.h5") as study:  # what the message advises
        study.remove(*[source.sha256 for source in study.sources])
        study.save()
    answer, bad = gather([night], tmp_path / "s.h5")
    assert (answer["recordings_added"], bad) == (1, [])


def test_known_files_are_never_read_again(tmp_path, night, monkeypatch):
    for number in range(5):
        (night / f"{number}.csv").write_text(text(number))
    follow(night, tmp_path / "s.h5")
    opened = []
    true = gathering.open_several

    def opening(files, *more):
        opened.extend(one.path.name for one in files)
        return true(files, *more)

    monkeypatch.setattr(gathering, "open_several", opening)
    answer, _ = gather([night], tmp_path / "s.h5")
    assert opened == [] and answer["already_there"] == 5
    with Study.open(tmp_path / "s.h5") as study:
        study.rewrite(Work(threads=1))
    answer, *_ = follow(night, tmp_path / "s.h5", lambda: (night / "new.csv").write_text(text(9)))
    assert opened == ["new.csv"] and answer["already_there"] == 5 and answer["recordings"] == 6


def test_a_file_that_changes_while_it_is_read_is_read_again_later(tmp_path, night, monkeypatch):
    (night / "a.csv").write_text(text(1))
    (night / "b.csv").write_text(text(2))
    true, replaced = gathering.write_recordings, []

    def write(*given):
        true(*given)
        if not replaced:
            replaced.append(1)
            (night / "b.csv").write_text(text(3))

    monkeypatch.setattr(gathering, "write_recordings", write)
    answer, bad, said, _ = follow(night, tmp_path / "s.h5", rest=8)
    assert answer["recordings"] == 2 and bad == [] and len(said) == 1 and "changes while it is read" in said[0]
    monkeypatch.undo()
    gather([night], tmp_path / "once.h5")
    assert by_source(tmp_path / "s.h5") == by_source(tmp_path / "once.h5")


def test_metadata_that_comes_after_its_recording_is_waited_for(tmp_path, night):
    for number in (1, 2):
        (night / f"{number}.csv").write_text(text(number))
    (night / "1.json").write_text('{"specimen": "K1"}')
    late = lambda: (night / "2.json").write_text('{"specimen": "K2"}')  # noqa: E731
    answer, bad, _, waits = follow(night, tmp_path / "s.h5", *[None] * 6, late)
    assert answer["recordings"] == 2 and bad == []
    assert any("2.csv waits (others have a file of metadata" in label for label in waits)
    with Study.open(tmp_path / "s.h5") as study:
        assert sorted(study.traces().table["specimen"].tolist()) == ["K1", "K2"]


def test_rows_of_the_metadata_table_are_waited_for(tmp_path, night):
    table = tmp_path / "about.csv"
    table.write_text("file,specimen\n1.csv,K1\n")
    recipe = Recipe().with_settings([f'intake.metadata_table="{table}"'])
    for number in (1, 2):
        (night / f"{number}.csv").write_text(text(number))
    late = lambda: table.write_text("file,specimen\n1.csv,K1\n2.csv,K2\n")  # noqa: E731
    answer, *_ = follow(night, tmp_path / "s.h5", *[None] * 6, late, recipe=recipe)
    assert answer["recordings"] == 2
    with Study.open(tmp_path / "s.h5") as study:
        assert study.traces().table["specimen"].tolist() == ["K1", "K2"]


def test_a_folder_that_goes_away_and_comes_back_is_followed_on(tmp_path, night):
    (night / "a.csv").write_text(text(1))

    def back():
        (tmp_path / "away").rename(night)
        (night / "b.csv").write_text(text(2))

    steps = [*[None] * 4, lambda: night.rename(tmp_path / "away"), None, None, back]
    answer, bad, said, _ = follow(night, tmp_path / "s.h5", *steps)
    assert answer["recordings"] == 2 and bad == [] and len(said) == 1 and "does not exist" in said[0]


def test_only_one_process_can_follow_into_a_study(tmp_path, night):
    refused = []

    def second():
        with pytest.raises(StudyError, match=r"is being made by|held by") as caught:
            gather([night], tmp_path / "s.h5", follow=True)
        refused.append(str(caught.value))

    follow(night, tmp_path / "s.h5", second, lambda: (night / "a.csv").write_text(text(1)), *[None] * 5, second)
    assert len(refused) == 2 and "being made by" in refused[0] and "held by" in refused[1]
    assert names(tmp_path / "s.h5") == ["a.csv"]


def test_a_full_disk_ends_it_with_a_clear_message_and_the_study_is_whole(tmp_path, night, monkeypatch):
    (night / "a.csv").write_text(text(1))
    gather([night], tmp_path / "s.h5")
    (night / "b.csv").write_text(text(2))

    def full(self):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(PagedFile, "commit", full)
    with pytest.raises(StudyError, match="No space left on device"):
        follow(night, tmp_path / "s.h5")
    monkeypatch.undo()
    assert names(tmp_path / "s.h5") == ["a.csv"]
    follow(night, tmp_path / "s.h5")
    assert names(tmp_path / "s.h5") == ["a.csv", "b.csv"]


def test_room_that_commits_leave_behind_is_given_back(tmp_path, night, monkeypatch):
    (night / "0.csv").write_text(text(0))
    steps = []
    for number in range(1, 9):
        steps += [lambda number=number: (night / f"{number}.csv").write_text(text(number)), None, None, None]
    follow(night, tmp_path / "loose.h5", *steps)
    for path in night.iterdir():
        if path.name != "0.csv":
            path.unlink()
    monkeypatch.setattr(following, "_LOOSE_BYTE", -(1 << 40))
    follow(night, tmp_path / "tight.h5", *steps)
    assert by_source(tmp_path / "tight.h5") == by_source(tmp_path / "loose.h5")
    assert (tmp_path / "tight.h5").stat().st_size < 0.8 * (tmp_path / "loose.h5").stat().st_size


def test_many_files_are_taken_in_portions_that_grow_with_the_study(tmp_path, night, monkeypatch):
    monkeypatch.setattr(following, "_PORTION_FILES", 2)
    for number in range(9):
        (night / f"{number}.csv").write_text(text(number))
    held, work = [], Work(threads=1)

    def grown(study, added):
        held.append(len(study.sources))
        if len(study.sources) == 9:
            work.cancel.set()

    work.cancel.wait = lambda _: False
    gather([night], tmp_path / "s.h5", work=work, follow=True, grown=grown)
    assert held == [2, 4, 8, 9]
    assert names(tmp_path / "s.h5") == [f"{number}.csv" for number in range(9)]


def test_a_look_that_takes_nothing_only_says_what_is_whole(tmp_path, night):
    (night / "a.csv").write_text(text(1))
    one = following.Following([night], tmp_path / "s.h5")
    for _ in range(5):
        looked = one.look(Work(threads=1), take=False)
    assert [file.name for file in looked.ready] == ["a.csv"] and looked.words == "1 more to take in"
    assert one.study is None and not (tmp_path / "s.h5").exists()
    assert one.look(Work(threads=1)).added.traces == 1 and one.study.recipe == Recipe()
    one.study.close()


def test_an_analysis_of_a_study_that_has_grown_since_is_saved_with_its_own_recordings(tmp_path, night):
    (night / "a.csv").write_text(text(1))
    gather([night], tmp_path / "s.h5")
    with Study.open(tmp_path / "s.h5") as study:
        earlier = study.analysis()
        (night / "b.csv").write_text(text(2))
        study.add(files_meant([night], study.path))
        write_study(tmp_path / "earlier.h5", earlier, files=study.path)
    assert names(tmp_path / "earlier.h5") == ["a.csv"]
    with Study.open(tmp_path / "earlier.h5") as study:
        assert study.sources == {study.traces().sources[0]: "copied"}
        assert study.traces(recipe=Recipe().with_settings(["calibration.series_resistance_ohm=100"])).traces == 1


def test_files_are_added_after_traces_were_looked_at_by_a_recipe_that_came_in_force_then(tmp_path, night):
    """As a window does it that makes traces by new settings before the study hears of these."""
    (night / "a.csv").write_text(text(1))
    gather([night], tmp_path / "s.h5")
    (night / "b.csv").write_text(text(2))
    recipe = Recipe().with_settings(["calibration.series_resistance_ohm=100"])
    with Study.open(tmp_path / "s.h5") as study:
        study.traces(recipe=recipe)
        study.change(recipe=recipe)
        study.add(files_meant([night], study.path))
        assert study.traces().traces == 2
    gather([night], tmp_path / "once.h5", recipe)
    assert by_source(tmp_path / "s.h5") == by_source(tmp_path / "once.h5")


FOLLOWER = """
import os, random, signal, sys
from pathlib import Path
from meseta.study import following, gather
chance = random.Random(int(sys.argv[3]))
def fatal(function):
    def wrapped(*arguments, **named):
        if chance.random() < 0.02: os.kill(os.getpid(), signal.SIGKILL)
        outcome = function(*arguments, **named)
        if chance.random() < 0.02: os.kill(os.getpid(), signal.SIGKILL)
        return outcome
    return wrapped
if int(sys.argv[3]):
    os.fsync, os.ftruncate = fatal(os.fsync), fatal(os.ftruncate)
    Path.unlink, Path.replace = fatal(Path.unlink), fatal(Path.replace)
following.FOLLOW_SECONDS = 0.01
from meseta.work import Work
work = Work(threads=1)
def grown(study, added):
    print(len(study.sources), flush=True)
    if len(study.sources) >= int(sys.argv[4]): work.cancel.set()
gather([sys.argv[1]], sys.argv[2], work=work, follow=True, grown=grown)
"""


def test_killed_while_it_commits_and_started_again_it_has_every_file_once(tmp_path, night):
    """The process kills itself just before or after its own durable steps; each start goes on where that stopped."""
    files, seed, ends = 8, 1, []
    (night / "0.csv").write_text(text(0))
    gather([night], tmp_path / "s.h5")
    for number in range(1, files):
        (night / f"{number}.csv").write_text(text(number))
        if number % 3 == 0:
            seed += 1
            command = [sys.executable, "-c", FOLLOWER, str(night), str(tmp_path / "s.h5"), str(seed), str(number + 1)]
            # once all are there, the last ends by itself
            ends.append(subprocess.run(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, check=False))
            assert ends[-1].returncode in (0, -signal.SIGKILL), ends[-1].stderr.decode()
    gather([night], tmp_path / "s.h5")
    gather([night], tmp_path / "once.h5")
    assert sorted(names(tmp_path / "s.h5")) == sorted(path.name for path in night.iterdir())
    assert by_source(tmp_path / "s.h5") == by_source(tmp_path / "once.h5")


def test_an_interruption_ends_it_with_130_and_keeps_what_was_taken(tmp_path, night):
    (night / "a.csv").write_text(text(1))
    code = (
        "import sys; from meseta.study import following; following.FOLLOW_SECONDS = 0.01\n"
        "from meseta.command import main; sys.exit(main())"
    )
    command = [sys.executable, "-c", code, "gather", str(night), "--into", str(tmp_path / "s.h5"), "--follow", "--json"]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    while not (tmp_path / "s.h5").exists():
        assert process.poll() is None, process.stderr.read()
        Work().cancel.wait(0.05)
    process.send_signal(signal.SIGINT)
    printed, complained = process.communicate()
    assert process.returncode == 130, complained
    assert '"recordings": 1' in printed.splitlines()[-1] and complained == ""
    assert names(tmp_path / "s.h5") == ["a.csv"]
