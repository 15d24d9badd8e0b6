"""The calibration check-up of a study's recordings: files of one trace together, long recordings by themselves."""

from __future__ import annotations

import json

import numpy as np
import pytest
from click.testing import CliRunner

from meseta import study
from meseta.command import cli
from meseta.recipe import Recipe
from meseta.resources import sample

TRACES = 40


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    """One trace a file, as gold at room temperature gives it: 1 G0 on the way to tunnelling."""
    folder = tmp_path_factory.mktemp("record") / "traces"
    asked = ["simulate", "metal", "--traces", str(TRACES), "--seed", "11", "--layout", "files", "--out", str(folder)]
    assert CliRunner().invoke(cli, asked).exit_code == 0
    return folder


def recipe_with_scale(scale: float) -> Recipe:
    told = {"role": "conductance", "unit": "G0", "scale": scale}
    return Recipe.build({"intake": {"channels": {"conductance_G0": told}}})


@pytest.mark.parametrize(("scale", "factor"), [(1.0, ""), (10.0, "10"), (0.1, "10")])
def test_files_of_one_trace_are_checked_together(files, tmp_path, scale, factor):
    recipe = recipe_with_scale(scale)
    study.create_study(tmp_path / "s.h5", [files], recipe)
    check = study.check_calibration(tmp_path / "s.h5", recipe)
    assert (check.recordings, check.missing, check.shortened) == (TRACES, 0, 0)
    assert [(one.recordings, one.traces) for one in check.checked] == [(TRACES, TRACES)]
    atoms = [line for line in check.doubts() if "single-atom" in line]
    if factor:
        assert len(atoms) == 1 and factor in atoms[0]
    else:
        assert check.doubts() == []


def test_recordings_that_are_not_at_hand_are_counted(files, tmp_path):
    recipe = Recipe.build({"study": {"copy_below_megabyte": 0}})
    study.create_study(tmp_path / "s.h5", [files], recipe)
    assert study.check_calibration(tmp_path / "s.h5", recipe).missing == TRACES
    assert study.check_calibration(tmp_path / "s.h5", recipe, [files]).missing == 0


def test_a_run_states_the_check_up_and_warns_of_what_is_odd(tmp_path):
    asked = ["run", str(sample("night_raw.h5")), "--out", str(tmp_path / "out"), "--set", "resampling.replicates=100"]
    result = CliRunner().invoke(cli, [*asked, "--set", "calibration.bias_volt=1"])
    assert result.exit_code == 0, result.output
    summary = json.loads((tmp_path / "out" / "summary.json").read_text())
    checked = summary["calibration_check"]["checked"]
    assert [one["first"] for one in checked] == ["night_raw.h5"]
    odd = [found["text"] for found in checked[0]["findings"] if not found["fine"]]
    assert odd and all(any(text in warning for warning in summary["warnings"]) for text in odd)
    page = (tmp_path / "out" / "report.html").read_text()
    assert "Calibration check-up" in page and "in doubt" in page
    assert not np.isnan([one["traces"] for one in checked]).any()
