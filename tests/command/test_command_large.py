"""A run over recordings that do not fit the memory gives what it gives over those that do."""

from __future__ import annotations

import json

import pytest

from meseta.command import main
from meseta.intake import room
from meseta.simulate import SimulationSettings, write_simulation

QUICK = ("--set", "resampling.replicates=40", "--set", "correlation.permutations=10")
TABLES = ("traces.csv", "plateaus.csv", "histogram.csv", "peaks.csv", "lengths.csv")


@pytest.fixture
def run(tmp_path, capsys):
    """Return a function that runs two recordings and what else is given: exit code and what it said of it."""
    settings = SimulationSettings(samples=1500)
    for seed in (1, 2):
        write_simulation("metal", 40, seed, tmp_path / f"part{seed}.h5", settings=settings)

    def run(name, *others):
        paths = [str(tmp_path / f"part{seed}.h5") for seed in (1, 2)]
        with pytest.raises(SystemExit) as left:
            main(["run", *paths, *map(str, others), "--out", str(tmp_path / name), *QUICK])
        return left.value.code, capsys.readouterr().err

    return run


def test_more_than_the_memory_holds_is_run_through_a_study(run, tmp_path, monkeypatch):
    assert run("held")[0] == 0
    monkeypatch.setattr(room, "machine_byte", lambda: 1_300_000)
    code, said = run("streamed")
    assert code == 0 and "worked through in blocks" in said
    for table in TABLES:
        assert (tmp_path / "streamed" / table).read_bytes() == (tmp_path / "held" / table).read_bytes(), table
    peaks = [json.loads((tmp_path / name / "summary.json").read_text())["peaks"] for name in ("held", "streamed")]
    assert peaks[0] == peaks[1]
    assert sorted(path.name for path in tmp_path.iterdir()) == ["held", "part1.h5", "part2.h5", "streamed"]


def test_a_bad_file_among_too_many_is_listed_and_strict_stops_there(run, tmp_path, monkeypatch):
    bad = tmp_path / "bad.h5"
    bad.write_bytes(b"\x89HDF\r\n\x1a\n nothing behind it")
    monkeypatch.setattr(room, "machine_byte", lambda: 1_300_000)
    code, said = run("out", bad, "--strict")
    assert code == 2 and "bad.h5" in said
    assert sorted(path.name for path in tmp_path.iterdir()) == ["bad.h5", "part1.h5", "part2.h5"]
    code, said = run("out", bad)
    assert code == 0 and "bad.h5" in said
