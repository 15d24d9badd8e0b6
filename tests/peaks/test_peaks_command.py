"""Peaks from the command line: every defensible analysis, and the physics of a length series."""

from __future__ import annotations

import csv
import json

import numpy as np
import pytest

from meseta.command import main
from meseta.simulate import SimulationSettings, write_simulation

FEW = SimulationSettings(samples=600, sampling_hertz=5000.0, bandwidth_hertz=2000.0)


def rows_of(path):
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.fixture(scope="module")
def recording(tmp_path_factory):
    path = tmp_path_factory.mktemp("metal") / "metal.h5"
    write_simulation("metal", 80, 4, path, settings=FEW)
    return path


def test_every_defensible_analysis_is_written_drawn_and_printed(recording, tmp_path, capsys):
    out = tmp_path / "out"
    call = ["run", str(recording), "--out", str(out), "--preset", "metal", "--all-analyses"]
    call += ["--set", "resampling.replicates=60", "--set", "peaks.most=2"]
    with pytest.raises(SystemExit) as left:
        main(call)
    assert left.value.code == 0
    found, peaks = rows_of(out / "analyses.csv"), rows_of(out / "peaks.csv")
    chosen = [row for row in found if row["chosen"] == "true"]
    assert [row["peak"] for row in chosen] == [row["peak"] for row in peaks]
    for row, peak in zip(chosen, peaks, strict=True):
        assert float(row["position_g0"]) == pytest.approx(float(peak["position_g0"]), rel=1e-6)
    assert len({row["analysis"] for row in found}) >= 200
    assert len({row["histogram"] for row in found}) == 4
    first = [row for row in found if row["peak"] == "1" and row["defensible"] == "true"]
    inside = [float(row["position_low_g0"]) <= 0.985 <= float(row["position_high_g0"]) for row in first]
    assert np.mean(inside) > 0.6
    assert (out / "analyses.pdf").read_bytes().startswith(b"%PDF")
    spread = json.loads((out / "summary.json").read_text())["all_analyses"]
    assert spread[0]["analyses"] == len(first)
    assert f"{len(first)} analyses can be defended" in capsys.readouterr().out


def test_a_run_prints_what_follows_from_its_peaks(recording, tmp_path, capsys):
    """The recording's contacts lie behind 200 ohm (its simulation's own setting); 80 traces tell it within 120 ohm."""
    out = tmp_path / "out"
    with pytest.raises(SystemExit):
        main(["run", str(recording), "--out", str(out), "--preset", "metal", "--set", "resampling.replicates=60"])
    printed = capsys.readouterr().out
    assert "fitted centre" in printed
    assert "highest point" in printed
    assert "at least 1 channel;" in printed
    assert "nm / trace" in printed
    assert "published, no identification" in printed
    assert "resistance in series that each peak alone would ask for" in printed
    physics = json.loads((out / "summary.json").read_text())["physics"]
    assert physics["series_resistance"]["per_peak_ohm"][1] == pytest.approx(200, abs=120)
    assert len(physics["published"]) == len(rows_of(out / "peaks.csv"))
