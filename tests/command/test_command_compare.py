"""``meseta compare``: recordings and parts on one axis, the yield against a blank, and calls that cannot be."""

from __future__ import annotations

import json

import h5py
import numpy as np
import pytest
from test_command_bad_calls import assert_one_clear_line, meseta

from meseta.simulate import SimulationSettings, write_simulation

FEW = ("--set", "resampling.replicates=20", "--set", "correlation.permutations=0")


@pytest.fixture(scope="module")
def recordings(tmp_path_factory):
    folder = tmp_path_factory.mktemp("recordings")
    for name, share, seed in (("molecule", 0.5, 1), ("blank", 0.0, 2)):
        settings = SimulationSettings(samples=1500, sampling_hertz=10_000.0, yield_share=share)
        write_simulation("molecule", 80, seed, folder / f"{name}.h5", settings=settings)
    return folder


def test_molecule_against_blank(recordings, tmp_path):
    done = meseta(
        "compare", recordings / "molecule.h5", "--blank", recordings / "blank.h5", "--window", "2e-5", "2e-3",
        "--fit-range", "0.3", "5", "--out", tmp_path / "compared.h5", "--json", *FEW,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    answer = json.loads(done.stdout.splitlines()[-1])
    assert [part["name"] for part in answer["parts"]] == ["molecule.h5", "blank"]
    assert answer["yield"]["share_low"] <= 0.5 <= answer["yield"]["share_high"]
    assert answer["scale"]["low"] <= 1.0 <= answer["scale"]["high"]
    assert "molecules in" in done.stdout and "scale of the blank" in done.stdout
    with h5py.File(tmp_path / "compared.h5") as file:
        low = np.searchsorted(file["difference/conductance_edges"], 1e-4)
        high = np.searchsorted(file["difference/conductance_edges"], 5e-4)
        assert file["difference/density"][low:high].mean() > 0
        assert file["difference"].attrs["scale_is_fitted"]


def test_calls_that_cannot_be(recordings, tmp_path):
    molecule, blank = recordings / "molecule.h5", recordings / "blank.h5"
    assert_one_clear_line(meseta("compare", molecule, "--window", "1e-3", "1e-4"), 2, "no range")
    assert_one_clear_line(meseta("compare", molecule, "--plant", "--window", "1e-5", "1e-3"), 2, "need a blank")
    assert_one_clear_line(meseta("compare", molecule, blank, "--by", "specimen"), 2, "--by")
    assert_one_clear_line(meseta("compare", molecule, "--by", "colour", *FEW), 2, "no column 'colour'")
