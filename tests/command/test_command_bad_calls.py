"""Bad calls and bad files: one clear line, the right exit code, nothing left behind."""

from __future__ import annotations

import json
import os
import subprocess
import sys

import numpy as np
import pytest


def meseta(*arguments, cwd=None, environment=None):
    return subprocess.run(
        [sys.executable, "-m", "meseta", *map(str, arguments)],
        capture_output=True,
        text=True,
        cwd=cwd,
        env=os.environ | (environment or {}),
        timeout=300,
    )


def assert_one_clear_line(done, code, *words):
    assert done.returncode == code, done.stderr
    lines = done.stderr.strip().splitlines()
    assert len(lines) == 1, done.stderr
    assert lines[0].startswith("meseta: ")
    assert "Traceback" not in done.stderr + done.stdout
    for word in words:
        assert word in lines[0]


def test_an_interruption_while_libraries_load_is_answered(tmp_path):
    write(tmp_path / "click.py", b"raise KeyboardInterrupt")
    assert_one_clear_line(meseta("--help", environment={"PYTHONPATH": str(tmp_path)}), 130, "stopped")


def test_files_that_say_the_same_are_checked_in_one_go(good_csv, tmp_path):
    write(good_csv / "t9.csv", b"displacement (nm),current (nA)\n" + b"".join(b"%d,%d\n" % (n, n) for n in range(50)))
    done = meseta("peek", good_csv)
    assert done.returncode == 0, done.stderr
    assert "5 more" in done.stdout and "t1.csv to t5.csv" in done.stdout
    assert done.stdout.count("conductance (G0): conductance in G0") == 1
    assert "\nt9.csv\n" in done.stdout and "bias" in done.stdout


def test_each_recording_is_named_above_its_result(good_csv, tmp_path):
    done = meseta(
        "run",
        good_csv / "t0.csv",
        good_csv / "t1.csv",
        "--each",
        "--out",
        tmp_path / "out",
        "--set",
        "resampling.replicates=20",
    )
    assert done.returncode == 0, done.stderr
    lines = done.stdout.splitlines()
    assert lines[0] == "t0" and "t1" in lines


@pytest.fixture
def good_csv(tmp_path):
    folder = tmp_path / "good"
    folder.mkdir()
    displacement = np.arange(400) * 0.005
    rng = np.random.default_rng(3)
    for number in range(6):
        conductance = np.where(displacement < 0.5 + 0.1 * number, 1.0, 1e-6) * np.exp(rng.normal(0, 0.02, 400))
        rows = np.column_stack([displacement, conductance])
        np.savetxt(
            folder / f"t{number}.csv", rows, delimiter=",", header="displacement (nm),conductance (G0)", comments=""
        )
    return folder


def write(path, content):
    path.write_bytes(content)
    return path


BAD_FILES = {
    "text.h5": (b"this is not HDF5\n" * 20, ()),
    "empty.csv": (b"", ("empty",)),
    "header.csv": (b"displacement (nm),conductance (G0)\n", ()),
    "junk.csv": (bytes(range(256)) * 40, ()),
    "cut.h5": (b"\x89HDF\r\n\x1a\n" + bytes(200), ()),
}


@pytest.mark.parametrize("name", BAD_FILES)
def test_bad_files_are_found_before_work_starts(tmp_path, name):
    content, words = BAD_FILES[name]
    path = write(tmp_path / name, content)
    for command in (["run", path, "--out", tmp_path / "out"], ["peek", path]):
        assert_one_clear_line(meseta(*command), 2, name, "->", *words)
    assert [entry.name for entry in tmp_path.iterdir()] == [name]


def test_a_missing_file_and_an_empty_folder(tmp_path):
    done = meseta("run", tmp_path / "none.h5", "--out", tmp_path / "out")
    assert_one_clear_line(done, 2, "none.h5", "->")
    (tmp_path / "void").mkdir()
    done = meseta("run", tmp_path / "void", "--out", tmp_path / "out")
    assert_one_clear_line(done, 2, "void")
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("extra", "words"),
    [
        (["--set", "histogrm.axis=linear"], ["histogrm", "histogram"]),
        (["--set", "histogram.bin_width_g0=0"], ["histogram.bin_width_g0", "above 0"]),
        (["--set", "histogram"], ["section.field=value"]),
        (["--set", "histogram.low_g0=5", "--set", "histogram.high_g0=1"], ["low_g0"]),
        (["--set", "selection.rules=['platos >= 1']"], ["platos", "plateaus"]),
        (["--set", "selection.rules=['plateaus >=']"], ["plateaus >="]),
        (["--preset", "metall"], ["metal"]),
        (["--recipe", "nowhere.toml"], ["nowhere.toml"]),
        (["--recipe", "nowhere.toml", "--preset", "metal"], ["--recipe", "--preset"]),
        (["--nonsense"], ["--nonsense"]),
    ],
)
def test_bad_settings(good_csv, tmp_path, extra, words):
    done = meseta("run", good_csv, "--out", tmp_path / "out", *extra)
    assert_one_clear_line(done, 2, *words)
    assert not (tmp_path / "out").exists()


def test_an_output_folder_that_cannot_be_used(good_csv, tmp_path):
    (tmp_path / "file").write_text("mine")
    assert_one_clear_line(meseta("run", good_csv, "--out", tmp_path / "file"), 2, "file", "->")
    other = tmp_path / "other"
    other.mkdir()
    (other / "thesis.tex").write_text("mine")
    assert_one_clear_line(meseta("run", good_csv, "--out", other), 2, "thesis.tex")
    assert (other / "thesis.tex").read_text() == "mine"


def test_no_folder_for_the_result_is_a_call_error(good_csv):
    assert_one_clear_line(meseta("run", good_csv), 2, "--out")


def test_an_error_in_json_is_the_last_line_of_stdout(tmp_path):
    done = meseta("run", tmp_path / "none.h5", "--out", tmp_path / "out", "--json")
    answer = json.loads(done.stdout.splitlines()[-1])
    assert answer["error"]["exit"] == done.returncode == 2
    assert "none.h5" in answer["error"]["where"]


def test_bad_files_among_good_ones_are_listed_and_strict_refuses_them(good_csv, tmp_path):
    write(good_csv / "t3.csv", b"")
    done = meseta("run", good_csv, "--out", tmp_path / "out", "--json")
    assert done.returncode == 0, done.stderr
    assert "t3.csv" in done.stderr
    summary = json.loads((tmp_path / "out" / "summary.json").read_text())
    assert summary["traces"]["read"] == 5
    assert ["t3.csv" in one["where"] for one in summary["bad_files"]] == [True]
    strict = meseta("run", good_csv, "--out", tmp_path / "strict", "--strict")
    assert strict.returncode == 2
    assert not (tmp_path / "strict").exists()
