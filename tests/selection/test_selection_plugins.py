from importlib.metadata import EntryPoint

import numpy as np
import pytest
from selection_facts import some_measures, some_plateaus, some_traces

from meseta.errors import RecipeError, WorkError
from meseta.recipe.selection import SelectionSettings
from meseta.selection import Decisions, plugins, select, with_measures
from meseta.work import Work


def highest_share(conductance, drive):
    """Share of samples above 0.5 G0."""
    return np.count_nonzero(conductance > 0.5) / len(drive)


def broken(conductance, drive):
    raise ZeroDivisionError("no")


def writes(conductance, drive):
    conductance[0] = 1
    return 0.0


@pytest.fixture(autouse=True)
def installed(monkeypatch):
    points = [EntryPoint(name, f"{__name__}:{name}", plugins.GROUP) for name in ("highest_share", "broken", "writes")]
    monkeypatch.setattr(plugins, "entry_points", lambda group: [one for one in points if one.group == group])


def test_a_measure_becomes_a_column_for_rules():
    traces = with_measures(some_traces(), ["highest_share"], Work(threads=1, block_samples=50))
    expected = [np.mean(some_traces().trace_conductance(row) > 0.5) for row in range(8)]
    assert np.allclose(traces.table["highest_share"], expected)
    settings = SelectionSettings(rules=["highest_share >= 0.5"])
    kept = select(traces, settings, some_measures(), some_plateaus(), Decisions(), "opening").kept
    assert kept.tolist() == [*(np.array(expected[:7]) >= 0.5).tolist(), False]


def test_name_version_and_hash_are_recorded_and_code_is_not():
    traces = with_measures(some_traces(), ["highest_share"], Work())
    (said,) = traces.notes["measures"]
    assert said["name"] == "highest_share" and len(said["sha256"]) == 64
    assert set(said) == {"name", "package", "version", "sha256"}
    assert traces.key != some_traces().key
    assert with_measures(some_traces(), ["highest_share"], Work()).key == traces.key


def test_a_column_of_the_same_version_stays():
    traces = with_measures(some_traces(), ["highest_share"], Work())
    assert with_measures(traces, ["highest_share"], Work()) is traces


def test_a_column_by_another_version_is_made_anew():
    traces = with_measures(some_traces(), ["highest_share"], Work())
    traces.table["highest_share"][:] = -1
    traces.notes["measures"][0]["sha256"] = "0" * 64
    again = with_measures(traces, ["highest_share"], Work())
    assert (again.table["highest_share"] >= 0).all() and len(again.notes["measures"]) == 1


def test_what_goes_wrong_is_named():
    with pytest.raises(RecipeError, match="did you mean 'highest_share'"):
        with_measures(some_traces(), ["higest_share"], Work())
    with pytest.raises(WorkError, match=r"trace 0 \(ZeroDivisionError: no\)"):
        with_measures(some_traces(), ["broken"], Work())
    with pytest.raises(WorkError, match="read-only"):
        with_measures(some_traces(), ["writes"], Work())
    with pytest.raises(RecipeError, match="column 'highest_share' already"):
        with_measures(some_traces(highest_share=1.0), ["highest_share"], Work())
