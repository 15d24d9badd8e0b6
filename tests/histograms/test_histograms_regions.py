"""Given edges and a window of displacement: every sample is somewhere, and it is where another count puts it too."""

from __future__ import annotations

import boost_histogram as bh
import numpy as np
import pytest
from small_recordings import aligned_at, counted, explicit_drive, log_uniform, noise_model, recording

from meseta.analysis import Analysis
from meseta.errors import RecipeError
from meseta.histograms import displacement_counts
from meseta.recipe import Recipe
from meseta.traces import TraceSet
from meseta.work import Work

EDGES = [1e-4, 3e-4, 1e-3, 0.01, 0.05, 0.4, 0.9, 1.1, 2.3]


def everywhere(counts) -> np.ndarray:
    return counts.counts.sum(1, dtype=np.int64) + counts.excluded.sum(1)


@pytest.mark.parametrize("axis", ["linear", "logarithmic"])
def test_given_edges_count_as_boost_histogram_does(axis: str) -> None:
    traces = recording(log_uniform(30, 500, 1))
    matrix = counted(traces, Recipe().with_values("histogram", axis=axis, edges_g0=EDGES))
    flat = traces.conductance.astype(np.float64)
    reference = bh.Histogram(bh.axis.Variable(EDGES), storage=bh.storage.Int64())
    reference.fill(flat[np.isfinite(flat)])
    assert np.array_equal(matrix.counts.sum(0), reference.values())
    assert matrix.shown.edges_g0.tolist() == EDGES
    assert np.array_equal(everywhere(matrix), np.full(30, 500))


def test_given_edges_go_through_the_whole_analysis() -> None:
    random = np.random.default_rng(2)
    values = 10 ** (np.linspace(1, -7, 400) + 0.05 * random.standard_normal((60, 400)))
    values[:, 200:250] = 2e-4 * np.exp(0.1 * random.standard_normal((60, 50)))
    values += 1e-7 * random.standard_normal(values.shape)
    recipe = Recipe().with_settings([f"histogram.edges_g0={EDGES}", "resampling.replicates=50"])
    analysis, work = Analysis(TraceSet.from_arrays(values, step_nm=0.005), recipe), Work(threads=1)
    histogram = analysis.histogram(work)
    assert histogram.edges_g0.tolist() == EDGES
    expected = np.histogram(values.astype(np.float32).astype(float), EDGES)[0]
    assert np.array_equal(histogram.counts, expected)
    assert histogram.density == pytest.approx(expected * 0.005 / 60 / np.diff(np.log10(EDGES)))
    for step in ("correlation_histogram", "displacement_histogram", "temporal_histogram", "drift", "peaks"):
        assert analysis.result(step, work) is not None
    assert set(analysis.result("correlation_histogram", work).grid.edges_g0) <= set(EDGES)


@pytest.mark.parametrize(
    ("edges", "word"), [([1.0], "two or more"), ([0.1, 0.1, 1], "ascending"), ([0.0, 1.0], "no zero")]
)
def test_edges_that_are_none_are_refused(edges: list[float], word: str) -> None:
    with pytest.raises(RecipeError, match=word):
        Recipe().with_values("histogram", edges_g0=edges)


@pytest.mark.parametrize("falling", [False, True])
@pytest.mark.parametrize("explicit", [False, True])
def test_window_of_displacement_is_that_of_the_2d_histogram(falling: bool, explicit: bool) -> None:
    random = np.random.default_rng(3)
    values = (10 ** random.uniform(-6, 1, (40, 600))).astype(np.float32)
    step = -0.004 if falling else 0.004
    traces = recording(values, step)
    if explicit:
        relative = np.sort(random.uniform(0, 2.4, (40, 600)), 1)
        traces = explicit_drive(traces, (-relative if falling else relative).astype(np.float32))
    zero = np.where(np.arange(40) % 5 == 0, np.nan, random.uniform(0.5, 1.5, 40) * (-1 if falling else 1))
    alignment = aligned_at(zero, 100, 40)
    recipe = Recipe().with_values(
        "histogram", low_g0=1e-6, region="displacement", region_low_nm=-0.25, region_high_nm=0.75
    )
    matrix = counted(traces, recipe, zero=alignment)
    frame = recipe.with_values("displacement_histogram", low_nm=-0.25, high_nm=0.75, bins=8).displacement_histogram
    whole = recipe.with_values("histogram", region="phase").histogram
    plane = displacement_counts(traces, frame, whole, noise_model(), alignment, np.ones(40, bool), ("pull",))
    assert plane.counts.sum() > 0
    assert np.array_equal(matrix.shown_counts(matrix.counts).sum(0), plane.counts.sum(0))
    assert np.array_equal(everywhere(matrix), np.full(40, 600))
    assert (matrix.counts[::5] == 0).all()


def test_window_ends_where_the_drive_first_leaves_it() -> None:
    """A drive that comes back: one run of samples, from the first inside to the first beyond the far end."""
    drive = np.array([[0.0, 0.2, 0.5, 0.4, 0.7, 1.2, 0.8, 1.5]])
    traces = explicit_drive(recording(np.full((1, 8), 0.5, np.float32)), drive)
    recipe = Recipe().with_values(
        "histogram", axis="linear", region="displacement", region_low_nm=0.15, region_high_nm=1.0
    )
    matrix = counted(traces, recipe, zero=aligned_at(0.0, 0, 1))
    assert matrix.counts.sum() == 4
    assert everywhere(matrix).tolist() == [8]


def test_new_settings_leave_the_keys_of_defaults_alone() -> None:
    names = ("histogram.edges_g0", "histogram.region_low_nm", "histogram.region")
    assert Recipe().key(names) == Recipe().key(())
    assert Recipe().with_values("histogram", edges_g0=EDGES).key(names) != Recipe().key(())
