"""One rule of what a folder stands for: the same files for reading, checking, gathering and following."""

import errno
import os
import shutil
import sys

import pytest

from meseta import intake
from meseta.command import main
from meseta.errors import InputError
from meseta.intake.files import expand, find_files
from meseta.study import gather
from meseta.study.arriving import files_meant

TRACE = "displacement (nm),conductance (G0)\n" + "".join(
    f"{i * 0.01:.2f},{10 ** (0.8 - i / 50):.5e}\n" for i in range(200)
)
ORDER = ["a 2.csv", "a 10.csv", "night 2/b.csv", "night 2/deep/c.csv", "night 10/b.csv"]


def put(path, content=TRACE):
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(content)
    return path


@pytest.fixture
def folder(tmp_path):
    """Recordings among what else lies in a folder of a laboratory."""
    home = tmp_path / "rig"
    for number, name in enumerate(reversed(ORDER)):
        put(home / name, TRACE.replace("0.00,", f"0.00{number},"))
    put(home / "notes.txt")
    put(home / ".cache" / "x.csv")
    put(home / "night 2" / ".hidden.csv")
    put(home / "night 2" / "plot.png", "no picture")
    put(home / "first look" / "summary.json", "{}")
    put(home / "first look" / "recipe.toml", "")
    put(home / "first look" / "traces.csv")
    put(home / "first look" / "more" / "y.csv")
    gather([home / "a 2.csv"], home / "night 10" / "all.h5")
    put(home / "night 10" / "all.h5.journal", "")
    return home


def test_a_folder_stands_for_its_recordings_in_natural_order_and_the_rest_is_said(folder):
    files, passed = find_files(folder)
    assert [file.name for file in files] == ORDER
    assert [str(file.path.relative_to(folder)) for file in files] == [name.replace("/", os.sep) for name in ORDER]
    assert sorted(passed) == sorted(
        [
            ".cache (hidden)",
            "notes.txt",
            "first look (an earlier result)",
            "night 2/.hidden.csv (hidden)",
            "night 2/plot.png",
            "night 10/all.h5 (a study)",
            "night 10/all.h5.journal (belongs to a study)",
        ]
    )


def test_reading_checking_and_gathering_take_the_same_files(folder, tmp_path):
    traces = intake.read(folder)
    assert [source.name for source in traces.sources] == ORDER and traces.notes["bad_files"] == []
    checks, bad = intake.describe(folder)
    assert [check.file for check in checks] == ORDER and bad == []
    assert [file.name for file in files_meant([folder], tmp_path / "s.h5")] == ORDER
    answer, bad = gather([folder], tmp_path / "s.h5")
    assert (answer["recordings"], bad) == (5, [])


def test_each_file_or_folder_directly_inside_is_a_recording_of_its_own(folder):
    put(folder / "late.h5.csv")
    assert [path.name for path in expand(folder)] == ["a 2.csv", "a 10.csv", "late.h5.csv", "night 2", "night 10"]


def test_the_command_line_says_what_it_passed_over(folder, capsys):
    with pytest.raises(SystemExit) as ended:
        main(["peek", str(folder)])
    printed, said = capsys.readouterr()
    assert ended.value.code == 0 and "a 10.csv to night 10/b.csv" in printed
    assert said.startswith("meseta: passed over: ") and len(said.splitlines()) == 1
    assert "first look (an earlier result)" in said and ", and 2 more" in said


def test_a_result_given_itself_is_no_recording(folder):
    with pytest.raises(InputError, match=r"is an earlier result.*study\.h5"):
        find_files(folder / "first look")


@pytest.mark.skipif(sys.platform == "win32", reason="links need rights there")
def test_links_to_folders_are_not_followed_and_links_to_files_are(folder):
    shutil.rmtree(folder / "night 10")
    (folder / "loop").symlink_to(folder, target_is_directory=True)
    (folder / "z.csv").symlink_to(folder / "night 2" / "b.csv")
    (folder / "gone.csv").symlink_to(folder / "nowhere.csv")
    files, passed = find_files(folder)
    assert [file.name for file in files] == ["a 2.csv", "a 10.csv", "z.csv", "night 2/deep/c.csv"]
    assert {"loop (a link to a folder)", "gone.csv"} < set(passed)


def test_a_subfolder_that_may_not_be_listed_is_said_and_the_rest_is_read(folder, monkeypatch):
    true = os.scandir

    def denied(path):
        if os.fspath(path).endswith("night 2"):
            raise PermissionError(errno.EACCES, "Permission denied")
        return true(path)

    monkeypatch.setattr(os, "scandir", denied)
    files, passed = find_files(folder)
    assert [file.name for file in files] == ["a 2.csv", "a 10.csv", "night 10/b.csv"]
    assert "night 2 (cannot be listed (Permission denied))" in passed
