"""A result folder appears whole or not at all, and never eats anything of the user's."""

from __future__ import annotations

import json

import numpy as np
import pytest

from meseta.analysis import Analysis
from meseta.errors import OutputError
from meseta.run import check_output, length_columns, whole_folder
from meseta.simulate import SimulationSettings, simulate


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


def test_lengths_are_written_bin_by_bin():
    """Every plateau, crossing and slope of a kept trace is in the table once; numpy bins the same lengths alike."""
    analysis = Analysis(simulate("molecule", 60, 4, SimulationSettings(samples=1500)).traces)
    columns = length_columns(analysis)
    kinds = list(dict.fromkeys(columns["histogram"].tolist()))
    assert [kind.split(" ")[0] for kind in kinds] == ["plateaus", "level", "to", "tunnelling"]
    kept, settings = analysis.selection().kept, analysis.recipe.lengths
    table = analysis.plateaus().take(kept[analysis.plateaus().trace])
    table = table.take((table.level_g0 >= settings.low_g0) & (table.level_g0 < settings.high_g0))
    mine = columns["histogram"] == kinds[0]
    edges = np.append(columns["low"][mine], columns["high"][mine][-1])
    whole = table.length_drive[table.censored == ""]
    assert whole.size > 5
    inside = whole[whole < edges[-1]]
    assert np.array_equal(columns["counts"][mine], np.histogram(inside, edges)[0])
    total = columns["counts"][mine].sum() + columns["censored_counts"][mine].sum() + columns["over"][mine][0]
    assert total == len(table)
    for kind in kinds[1:]:
        rows = columns["histogram"] == kind
        seen = columns["counts"][rows].sum() + columns["censored_counts"][rows].sum() + columns["over"][rows][0]
        assert seen + columns["none"][rows][0] == columns["traces"][rows][0] == kept.sum()
    assert columns["unit"][-1] == "decades / nm"
