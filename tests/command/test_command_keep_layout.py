"""``meseta peek --keep-layout``: from a file to a recipe that holds for the next files, on the command line."""

from __future__ import annotations

import json
import subprocess
import sys
import tomllib

import pytest


def meseta(*arguments, cwd):
    return subprocess.run(
        [sys.executable, "-m", "meseta", *map(str, arguments)], capture_output=True, text=True, cwd=cwd, timeout=300
    )


def said(done):
    """Return the machine-readable last line."""
    return json.loads(done.stdout.splitlines()[-1])


def write(path, heading, factor=1.0):
    rows = [f"{0.01 * place},{factor * (2.0 if place < 80 else 1e-5)}" for place in range(200)]
    path.write_text("\n".join([heading, *rows]) + "\n", encoding="utf-8")


@pytest.fixture
def folder(tmp_path):
    """Two nights whose columns say nothing of themselves, and one with another unit."""
    for name in ("a.csv", "b.csv"):
        write(tmp_path / name, "Stretch,Out (nA)", 7748.0)
    write(tmp_path / "c.csv", "Stretch,Out (µA)", 7.748)
    return tmp_path


KEEP = ("--keep-layout", "rig 2", "--recipe-out", "lab.toml", "--set", "calibration.bias_volt=0.1")
TOLD = ("--set", 'intake.channels.Stretch={role="displacement",unit="nm"}')


def test_what_was_said_once_holds_for_the_next_files(folder):
    kept = meseta("peek", "a.csv", *KEEP, *TOLD, "--json", cwd=folder)
    assert kept.returncode == 0, kept.stderr
    assert said(kept)["kept_layout"]["name"] == "rig 2"
    document = tomllib.loads((folder / "lab.toml").read_text(encoding="utf-8"))
    channels = document["intake"]["layouts"]["rig 2"]["channels"]
    assert channels["Stretch"] | {"role": "displacement", "unit": "nm", "file_unit": ""} == channels["Stretch"]
    assert channels["Out (nA)"]["file_unit"] == "nA"
    assert document["intake"]["channels"] == {}
    done = meseta("run", "a.csv", "b.csv", "c.csv", "--out", "result", "--recipe", "lab.toml", "--json", cwd=folder)
    assert done.returncode == 0, done.stderr
    assert said(done)["traces"]["read"] == 2
    assert "c.csv" in done.stderr and "µA" in done.stderr and "nA was stated" in done.stderr
    strict = meseta("run", "a.csv", "c.csv", "--out", "other", "--recipe", "lab.toml", "--strict", cwd=folder)
    assert strict.returncode == 2
    assert not (folder / "other").exists()


def test_a_file_that_fits_none_any_more_is_one_clear_line_and_kept_as_another_beside_it(folder):
    first = meseta("peek", "a.csv", *KEEP, *TOLD, cwd=folder)
    assert first.returncode == 0, first.stderr
    alone = meseta("peek", "c.csv", "--recipe", "lab.toml", cwd=folder)
    assert alone.returncode == 2
    assert len(alone.stderr.strip().splitlines()) == 1 and "'rig 2'" in alone.stderr
    keep = ("--recipe", "lab.toml", "--recipe-out", "lab.toml")
    again = meseta("peek", "c.csv", *keep, "--keep-layout", "rig 3", *TOLD, cwd=folder)
    assert again.returncode == 0, again.stderr
    both = meseta("peek", "a.csv", "c.csv", "--recipe", "lab.toml", "--json", cwd=folder)
    assert [one["kept_layout"] for one in said(both)["files"]] == ["rig 2", "rig 3"]


def test_a_layout_is_renewed_without_saying_again_what_did_not_change(folder):
    first = meseta("peek", "a.csv", *KEEP, *TOLD, cwd=folder)
    assert first.returncode == 0, first.stderr
    again = meseta("peek", "c.csv", "--recipe", "lab.toml", *KEEP, cwd=folder)
    assert again.returncode == 0, again.stderr
    assert "replaced" in again.stdout
    checked = said(meseta("peek", "c.csv", "--recipe", "lab.toml", "--json", cwd=folder))["files"][0]
    assert {one["name"]: (one["role"], one["unit"]) for one in checked["channels"]} == {
        "Stretch": ("displacement", "nm"),
        "Out (µA)": ("current", "µA"),
    }


def test_files_of_more_than_one_layout_are_not_kept_under_one_name(folder):
    done = meseta("peek", "a.csv", "c.csv", *KEEP, cwd=folder)
    assert done.returncode == 2
    assert "c.csv" in done.stderr and "another layout than a.csv" in done.stderr
    assert not (folder / "lab.toml").exists()


@pytest.mark.parametrize(
    "options", [("--keep-layout", "x"), ("--recipe-out", "x.toml"), ("--keep-layout", "none", "--recipe-out", "x.toml")]
)
def test_a_bad_call_writes_nothing(folder, options):
    done = meseta("peek", "a.csv", *options, cwd=folder)
    assert done.returncode == 2
    assert len(done.stderr.strip().splitlines()) == 1
    assert not (folder / "x.toml").exists()


def test_the_printed_recipe_shows_a_layout_that_can_be_uncommented(tmp_path):
    text = meseta("recipe", cwd=tmp_path).stdout
    lines = text.splitlines()
    first = next(place for place, line in enumerate(lines) if line.startswith("# [intake.layouts."))
    last = next(place for place in range(first, len(lines)) if not lines[place].startswith("#"))
    opened = [line.removeprefix("# ") if first <= place < last else line for place, line in enumerate(lines)]
    (tmp_path / "lab.toml").write_text("\n".join(opened), encoding="utf-8")
    from meseta.recipe import Recipe

    assert list(Recipe.load(tmp_path / "lab.toml").intake.layouts) == ["rig 2"]
