"""The file check draws the beginning of a recording, however long that is, and says so."""

from __future__ import annotations

import numpy as np

from meseta.recipe import Recipe
from meseta.simulate import SimulationSettings, write_simulation
from meseta.window.filecheck import preview
from meseta.work import Work


def test_traces_of_a_long_recording_are_drawn_from_its_beginning(tmp_path, monkeypatch):
    path = tmp_path / "long.h5"
    write_simulation("metal", 40, 1, path, raw=True, settings=SimulationSettings(samples=1500, nm_per_second=60.0))
    whole = preview.check_picture([str(path)], Recipe(), Work(threads=1))
    assert whole.stretch_samples == 0
    assert not any("first samples" in one for one in whole.sentences())
    monkeypatch.setattr(preview, "CUT_SAMPLES", 30_000)
    begun = preview.check_picture([str(path)], Recipe(), Work(threads=1))
    assert begun.stretch_samples == 30_000
    assert any("first 30,000 samples" in one.replace("\u202f", ",") for one in begun.sentences())
    assert begun.described == whole.described and begun.described[0].openings == 40
    first = slice(0, 4000)
    for name in ("x", "g0"):
        drawn = [np.asarray(getattr(one.calibrated, name))[first] for one in (whole, begun)]
        assert np.array_equal(*drawn, equal_nan=True)
