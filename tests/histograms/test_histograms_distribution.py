"""The 1D histogram: normalisation, weighting by length, re-binning, conditional identity, and the protocol."""

from __future__ import annotations

import boost_histogram as bh
import numpy as np
import pytest
from small_recordings import counted, log_uniform, matrix_of, noise_model, recording

from meseta.analysis import Analysis
from meseta.histograms import (
    Grid,
    bin_notes,
    conditional_histogram,
    conductance_histogram,
    passes_more_than_usual,
    proposed_width,
    resample,
)
from meseta.histograms.grids import logarithmic_edges
from meseta.recipe import Recipe
from meseta.work import Work


def test_default_density_is_length_per_trace_per_decade() -> None:
    values = np.full((4, 100), 0.5, np.float32)
    traces = recording(values, step_nm=0.002)
    recipe = Recipe()
    histogram = conductance_histogram(counted(traces, recipe), np.ones(4, bool), recipe.histogram, None)
    # every trace spends 100 samples of 0.002 nm in one bin of 1/50 decade
    assert histogram.density_unit == "nm / trace / decade"
    assert histogram.density.max() == pytest.approx(100 * 0.002 * 50, rel=1e-12)
    assert (histogram.density * histogram.grid.widths).sum() == pytest.approx(0.2, rel=1e-12)


@pytest.mark.parametrize(
    ("normalisation", "unit", "whole"),
    [
        ("counts", "counts / decade", 400.0),
        ("counts_per_trace", "counts / trace / decade", 100.0),
        ("probability", "1 / decade", 1.0),
        ("traces_alike", "1 / trace / decade", 1.0),
    ],
)
def test_other_normalisations(normalisation: str, unit: str, whole: float) -> None:
    traces = recording(np.full((4, 100), 0.5, np.float32))
    recipe = Recipe().with_values("histogram", normalisation=normalisation)
    histogram = conductance_histogram(counted(traces, recipe), np.ones(4, bool), recipe.histogram, None)
    assert histogram.density_unit == unit
    assert (histogram.density * histogram.grid.widths).sum() == pytest.approx(whole, rel=1e-12)


def test_each_nm_counts_equally_whatever_the_speed() -> None:
    """A trace pulled at twice the step has half the samples of the same length: the density does not change."""
    slow, fast = (
        recording(np.full((1, 100), 0.5, np.float32), 0.001),
        recording(np.full((1, 50), 0.5, np.float32), 0.002),
    )
    recipe = Recipe()
    one, two = (
        conductance_histogram(counted(t, recipe), np.ones(1, bool), recipe.histogram, None) for t in (slow, fast)
    )
    assert np.allclose(one.density, two.density, rtol=1e-12)
    values = [np.full(100, 0.5), np.full(50, 0.05)]
    mixed = type(slow).from_arrays(values, [np.arange(100) * 0.001, np.arange(50) * 0.002])
    histogram = conductance_histogram(counted(mixed, recipe), np.ones(2, bool), recipe.histogram, None)
    length = histogram.density * histogram.grid.widths * 2
    assert length[length > 0] == pytest.approx([0.1, 0.1], rel=1e-6)


def test_traces_weigh_alike_however_long_they_are() -> None:
    values = [np.r_[np.full(900, 0.5), np.full(100, 0.05)], np.full(10, 0.05), np.full(20, 1e9)]
    traces = type(recording(np.ones((1, 2), np.float32))).from_arrays(values)
    recipe = Recipe().with_values("histogram", normalisation="traces_alike")
    counts, kept = counted(traces, recipe), np.ones(3, bool)
    drawn = resample(counts, kept, traces.table, recipe.histogram, recipe.resampling, Work())
    histogram = conductance_histogram(counts, kept, recipe.histogram, drawn)
    share = histogram.density * histogram.grid.widths * 3
    # the first trace gives 0.9 and 0.1, the second 1, the third has no sample on the axis
    assert share[share > 0] == pytest.approx([1.1, 0.9], rel=1e-12)
    assert histogram.counts.sum() == 1010
    assert (histogram.density_low <= histogram.density).all()
    assert (histogram.density <= histogram.density_high + 1e-12).all()


def test_a_drive_without_nm_falls_back_to_counts() -> None:
    from meseta.traces import TraceSet

    traces = TraceSet.from_arrays(np.full((3, 40), 0.5, np.float32))
    recipe = Recipe()
    histogram = conductance_histogram(counted(traces, recipe), np.ones(3, bool), recipe.histogram, None)
    assert histogram.density_unit == "counts / trace / decade"


def test_coarser_bins_are_exact_sums_and_count_nothing_anew() -> None:
    traces = recording(log_uniform(10, 500, 4))
    fine_recipe = Recipe().with_values("histogram", low_g0=1e-7)
    coarse_recipe = fine_recipe.with_values("histogram", bins_per_decade=10)
    kept = np.ones(10, bool)
    fine = conductance_histogram(counted(traces, fine_recipe), kept, fine_recipe.histogram, None)
    coarse = conductance_histogram(counted(traces, coarse_recipe), kept, coarse_recipe.histogram, None)
    assert np.array_equal(fine.counts.reshape(-1, 5).sum(1), coarse.counts)
    assert fine.excluded == coarse.excluded
    analysis = Analysis(traces, fine_recipe)
    again = analysis.with_recipe(coarse_recipe)
    assert analysis.key("fine_counts") == again.key("fine_counts")
    assert analysis.key("counts") != again.key("counts")
    moved = analysis.with_recipe(fine_recipe.with_values("histogram", low_g0=3e-7, high_g0=4.0))
    assert analysis.key("fine_counts") == moved.key("fine_counts")
    assert analysis.key("counts") != moved.key("counts")
    assert analysis.key("fine_counts") != analysis.with_recipe(
        fine_recipe.with_values("histogram", region="after_zero")
    ).key("fine_counts")


def test_ends_of_the_axis_move_samples_between_bins_and_under() -> None:
    values = log_uniform(10, 500, 14)
    recipe = Recipe().with_values("histogram", low_g0=3.3e-5, high_g0=2.2)
    matrix = counted(recording(values), recipe)
    histogram = conductance_histogram(matrix, np.ones(10, bool), recipe.histogram, None)
    seen = values.ravel().astype(np.float64)
    assert histogram.excluded["under"] == ((seen > 0) & (seen < histogram.edges_g0[0])).sum()
    assert histogram.excluded["over"] == (seen >= histogram.edges_g0[-1]).sum()
    assert histogram.edges_g0[0] <= 3.3e-5 < histogram.edges_g0[1]
    assert histogram.edges_g0[-2] < 2.2 <= histogram.edges_g0[-1]
    assert histogram.counts.sum() + sum(histogram.excluded.values()) == seen.size


def test_selection_is_a_sum_over_kept_traces() -> None:
    values = log_uniform(12, 300, 21)
    recipe = Recipe()
    matrix, kept = counted(recording(values), recipe), np.arange(12) % 3 == 0
    histogram = conductance_histogram(matrix, kept, recipe.histogram, None)
    alone = bh.Histogram(bh.axis.Variable(histogram.edges_g0), storage=bh.storage.Int64())
    assert np.array_equal(histogram.counts, alone.fill(values[kept].ravel().astype(float)).values())
    assert histogram.traces == 4
    table = histogram.table()
    assert table.counts.sum() == histogram.counts.sum()
    assert np.array_equal(table.weak, histogram.traces_in_bin < 20)


def test_conditional_histograms_add_up() -> None:
    """Reference values 6.6: R_A H(A) + R_notA H(not A) = R H."""
    recipe = Recipe()
    matrix = counted(recording(log_uniform(60, 200, 30)), recipe)
    kept = np.arange(60) % 7 > 0
    condition = passes_more_than_usual(matrix, kept, 1e-4, 1e-2)
    split = conditional_histogram(matrix, kept, condition, "more than usual", recipe.histogram)
    assert 0 < split.yes.traces < split.everything.traces
    total = split.yes.traces * split.yes.density + split.no.traces * split.no.density
    assert np.allclose(total, split.everything.traces * split.everything.density, rtol=1e-12)
    assert np.array_equal(split.yes.counts + split.no.counts, split.everything.counts)


def test_speaks_the_plottable_protocol() -> None:
    """The same members as boost-histogram, which speaks the protocol (UHI) too."""
    recipe = Recipe().with_values("resampling", replicates=50)
    traces = recording(log_uniform(30, 200, 2))
    matrix = counted(traces, recipe)
    kept = np.ones(30, bool)
    drawn = resample(matrix, kept, traces.table, recipe.histogram, recipe.resampling, Work(threads=1))
    ours = conductance_histogram(matrix, kept, recipe.histogram, drawn).plottable()
    theirs = bh.Histogram(bh.axis.Variable(np.asarray(ours.axes[0].edges)))
    assert ours.kind == str(theirs.kind)
    assert len(ours.axes) == len(theirs.axes)
    assert len(ours.axes[0]) == len(theirs.axes[0])
    assert ours.axes[0][3] == tuple(theirs.axes[0].bin(3))
    assert [tuple(pair) for pair in ours.axes[0]][-1] == tuple(theirs.axes[0].bin(len(theirs.axes[0]) - 1))
    assert (ours.axes[0].traits.circular, ours.axes[0].traits.discrete) == (False, False)
    assert ours.axes[0] == type(ours.axes[0])(ours.axes[0].edges.copy())
    assert ours.values().shape == ours.variances().shape == ours.counts().shape == theirs.values().shape
    with pytest.raises(IndexError):
        ours.axes[0][len(ours.axes[0])]


def test_bins_finer_than_two_converter_steps_are_named() -> None:
    grid = Grid(logarithmic_edges(-300, 50, 50), "logarithmic")
    assert bin_notes(grid, noise_model()) == ()
    (note,) = bin_notes(grid, noise_model(converter_step_g0=1e-5))
    assert "two steps of the converter" in note
    # width of a bin at G is about G ln(10)/50: two steps of 1e-5 are reached near 4.3e-4
    assert "0.00044" in note or "0.00042" in note
    (linear,) = bin_notes(Grid(np.arange(0, 1.001, 0.01), "linear"), noise_model(converter_step_g0=0.006))
    assert "0.012" in linear


def test_proposed_width_is_freedman_and_diaconis_over_traces() -> None:
    """Freedman-Diaconis of 1..100: 21.32890343 with NumPy's quartiles (reference values, section 8)."""
    edges = np.arange(0, 101.0)
    counts = np.ones((100, 100), np.uint16)
    matrix = matrix_of(counts, Grid(edges, "linear"))
    histogram = conductance_histogram(matrix, np.ones(100, bool), Recipe().histogram, None)
    assert proposed_width(matrix, histogram, np.arange(100)) == pytest.approx(21.3289, abs=2 * 100 ** (-1 / 3))
