"""A result folder appears whole or not at all, and never eats anything of the user's."""

from __future__ import annotations

import json

import pytest

from meseta.errors import OutputError
from meseta.run import check_output, whole_folder


def earlier_result(folder, note="old"):
    folder.mkdir()
    (folder / "summary.json").write_text(json.dumps({"versions": {"meseta_version": "0"}, "note": note}))
    (folder / "peaks.csv").write_text("peak\n")


def leftovers(parent, *known):
    return [entry.name for entry in parent.iterdir() if entry.name not in known]


def test_a_missing_folder_is_made_with_its_parents(tmp_path):
    with whole_folder(tmp_path / "a" / "b") as partial:
        (partial / "x").write_text("1")
    assert (tmp_path / "a" / "b" / "x").read_text() == "1"
    assert leftovers(tmp_path / "a", "b") == []


def test_a_failure_leaves_nothing_behind(tmp_path):
    with pytest.raises(RuntimeError), whole_folder(tmp_path / "a" / "b") as partial:
        (partial / "x").write_text("1")
        raise RuntimeError
    assert list(tmp_path.iterdir()) == []


def test_an_earlier_result_is_swapped_only_after_success(tmp_path):
    out = tmp_path / "out"
    earlier_result(out)
    with pytest.raises(RuntimeError), whole_folder(out):
        raise RuntimeError
    assert json.loads((out / "summary.json").read_text())["note"] == "old"
    with whole_folder(out) as partial:
        (partial / "new").write_text("1")
        assert (out / "peaks.csv").exists()
    assert [entry.name for entry in out.iterdir()] == ["new"]
    assert leftovers(tmp_path, "out") == []


@pytest.mark.parametrize("name", ["notes.txt", "summary.txt", ".hidden"])
def test_a_folder_with_anything_else_is_refused(tmp_path, name):
    out = tmp_path / "out"
    earlier_result(out)
    (out / name).write_text("mine")
    with pytest.raises(OutputError, match="other origin"):
        check_output(out)
    assert (out / name).read_text() == "mine"


def test_result_names_without_a_summary_are_refused(tmp_path):
    (tmp_path / "peaks.csv").write_text("mine")
    with pytest.raises(OutputError, match="neither empty nor an earlier result"):
        check_output(tmp_path)


def test_a_file_or_a_folder_below_a_file_is_refused(tmp_path):
    (tmp_path / "file").write_text("mine")
    for place in (tmp_path / "file", tmp_path / "file" / "below"):
        with pytest.raises(OutputError, match="file, not a folder"):
            check_output(place)


def test_a_place_in_which_no_folder_can_be_made_is_refused_before_any_work(tmp_path, monkeypatch):
    def refuse(**_):
        raise OSError(30, "Read-only file system")

    monkeypatch.setattr("meseta.run.tempfile.mkdtemp", refuse)
    with pytest.raises(OutputError, match="Read-only file system") as caught:
        check_output(tmp_path / "out")
    assert caught.value.exit_code == 2 and caught.value.remedy
    assert list(tmp_path.iterdir()) == []
