"""An index of starts and stops cuts a flat record; what it gives to no trace is kept apart, counted, and not lost."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meseta import intake, study
from meseta.intake.readers.hdf5_spans import spans_of

TRACE = np.concatenate([np.full(100, 2.0), np.full(150, 1e-6)])
GAP = np.full(50, 7.0)
COUNT = 4
FLAT = np.concatenate([np.concatenate([TRACE * (1 + n / 100), GAP]) for n in range(COUNT)])
STARTS = np.arange(COUNT) * 300
STOPS = STARTS + 250


def flat(path, **index):
    """Write a flat record with its index, and a bias a trace."""
    with h5py.File(path, "w") as file:
        file.create_dataset("conductance", data=FLAT).attrs["unit"] = "G0"
        file["bias_mV"] = np.array([100.0, 100.0, 200.0, 200.0])
        for name, values in index.items():
            file[name.replace("__", "/")] = values
    return path


@pytest.mark.parametrize(
    "index",
    [
        {"starts": STARTS, "stops": STOPS},
        {"index__starts": STARTS, "index__stops": STOPS},
        {"index": np.column_stack([STARTS, STOPS])},
        {"starts": STARTS, "lengths": STOPS - STARTS},
        {"trace_start": STARTS.astype(np.float64), "trace_end": STOPS.astype(np.float64)},
    ],
    ids=["two", "in a group", "pairs", "lengths", "real numbers"],
)
def test_traces_are_cut_at_the_index_and_what_lies_between_is_kept_apart(tmp_path, index):
    path = flat(tmp_path / "flat.h5", **index)
    described = intake.describe(str(path))[0][0]
    assert described.traces == COUNT
    assert described.incomplete == COUNT
    assert [doubt for doubt in described.doubts if "4 ranges of 200 samples" in doubt and "16.7%" in doubt]
    assert not [doubt for doubt in described.doubts if "not used" in doubt]
    traces = intake.read(str(path))
    assert traces.table["record_start"].tolist() == STARTS.tolist()
    for trace in range(COUNT):
        np.testing.assert_allclose(traces.trace_conductance(trace), TRACE * (1 + trace / 100), rtol=1e-6)
    assert [(one["start"], one["stop"]) for one in traces.notes["incomplete"]] == [
        (stop, stop + 50) for stop in STOPS.tolist()
    ]
    assert "between_traces" not in traces.table
    assert traces.table["bias_volt"].tolist() == [0.1, 0.1, 0.2, 0.2]


def test_a_study_keeps_the_samples_between_traces_and_cuts_alike(tmp_path):
    path = flat(tmp_path / "flat.h5", starts=STARTS, stops=STOPS)
    study.gather([path], tmp_path / "night.h5")
    with study.Study.open(tmp_path / "night.h5") as opened:
        changed = opened.recipe.with_settings(["calibration.series_resistance_ohm=10"])
        again = opened.analysis(changed).traces
        assert again.traces == COUNT
        assert again.table["record_start"].tolist() == STARTS.tolist()
    with h5py.File(tmp_path / "night.h5") as file:
        stored = [node for name, node in file["raw"]["000000"]["channels"].items() if not name.endswith("_stop")]
        assert len(stored[0]) == len(FLAT)


def test_stops_may_be_the_last_samples_of_traces_that_touch():
    spans = spans_of(np.array([0, 10, 25]), np.array([9, 24, 29]), 30)
    assert spans is not None
    assert spans.offsets.tolist() == [0, 10, 25, 30]
    assert not spans.between.any()


@pytest.mark.parametrize(
    ("starts", "stops"),
    [([0, 10], [11, 20]), ([0, 10], [5, 31]), ([5, 0], [9, 4]), ([0, 10], [0, 20]), ([-1, 10], [5, 20]), ([0], [1, 2])],
    ids=["overlapping", "beyond the end", "unsorted", "empty", "before the start", "unlike"],
)
def test_what_cannot_be_the_index_of_a_record_is_none(starts, stops):
    assert spans_of(np.array(starts), np.array(stops), 30) is None


@given(st.lists(st.tuples(st.integers(0, 9), st.integers(2, 9)), min_size=1, max_size=12), st.integers(0, 9))
def test_an_index_cuts_every_sample_once(found, rest):
    gaps, lengths = np.array(found).T
    stops = np.cumsum(gaps + lengths)
    starts = stops - lengths
    total = int(stops[-1]) + rest
    spans = spans_of(starts, stops, total)
    assert spans is not None
    assert spans.offsets[0] == 0 and spans.offsets[-1] == total and np.all(np.diff(spans.offsets) > 0)
    kept = ~spans.between
    assert spans.offsets[:-1][kept].tolist() == starts.tolist()
    assert spans.offsets[1:][kept].tolist() == stops.tolist()
    assert spans.of_each(np.arange(len(starts)))[kept].tolist() == list(range(len(starts)))
    samples = int(np.diff(spans.offsets)[spans.between].sum())
    assert samples == int(gaps.sum()) + rest
    assert bool(spans.words("'index'")) == (samples > 0)


# -- what is a guess is said ------------------------------------------------------------------------------------------


def test_few_rows_that_may_be_channels_carry_a_doubt_that_says_what_to_set(tmp_path):
    def doubts(name, values):
        with h5py.File(tmp_path / "a.h5", "w") as file:
            file[name] = values
        return [doubt for doubt in intake.describe(str(tmp_path / "a.h5"))[0][0].doubts if f"'{name}'" in doubt]

    falls = 10 ** np.linspace(0.5, -5, 600) * np.arange(1, 6)[:, None]
    assert any("5 rows" in one and 'intake.channels."column 1"' in one for one in doubts("data", falls))
    assert any("5 columns" in one and 'intake.channels."column 1"' in one for one in doubts("data", falls.T))
    assert not doubts("conductance_G0", falls)  # its name says that all of it is one quantity
    noise = np.random.default_rng(1).normal(size=(5, 600))
    unclear = doubts("data", noise)
    assert any("5 x 600" in one and "5 traces of 600 samples" in one and "intake.layout" in one for one in unclear)


def test_numbered_columns_of_a_table_that_the_recipe_names_are_channels(tmp_path):
    rows = "\n".join(f"{0.01 * n},{2.0 if n < 50 else 1e-5}" for n in range(100))
    (tmp_path / "a.csv").write_text(f"AI0,AI1\n{rows}\n")
    recipe = intake_recipe(AI0="displacement,nm", AI1="conductance,G0")
    traces = intake.read(str(tmp_path / "a.csv"), recipe)
    assert (traces.traces, traces.drive.unit) == (1, "nm")


def intake_recipe(**channels):
    from meseta.recipe import Recipe

    said = {name: dict(zip(("role", "unit"), text.split(","), strict=True)) for name, text in channels.items()}
    return Recipe.build({"intake": {"channels": said}})


def test_a_doubt_of_a_channel_is_printed_once_with_its_name(tmp_path):
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("conductance", data=np.arange(100, dtype=np.int16)).attrs["unit"] = "G0"
    described = intake.describe(str(tmp_path / "a.h5"))[0][0]
    said = [line for line in described.lines() if "without a scale" in line]
    assert len(said) == 1 and "'conductance'" in said[0]
    assert described.channels[0].doubts  # whole in the machine-readable answer
