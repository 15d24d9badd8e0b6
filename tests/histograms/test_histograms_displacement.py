"""The 2D conductance-displacement histogram: equal to boost-histogram, exact under a selection, ridge and profiles."""

from __future__ import annotations

from dataclasses import replace

import boost_histogram as bh
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from small_recordings import aligned_at, explicit_drive, log_uniform, noise_model, recording

from meseta.analysis import Analysis
from meseta.histograms import (
    DisplacementHistogram,
    Grid,
    displacement_counts,
    displacement_edges,
    displacement_kernels,
    displacement_of_selection,
)
from meseta.recipe import Recipe
from meseta.traces import TraceSet
from meseta.work import Work

ZERO = 0.3


def counted(traces: TraceSet, recipe: Recipe, kept: np.ndarray | None = None, zero=None) -> DisplacementHistogram:
    kept = np.ones(traces.traces, bool) if kept is None else kept
    zero = aligned_at(ZERO, 150, traces.traces) if zero is None else zero
    phases = ("push",) if recipe.histogram.direction == "closing" else ("pull",)
    return displacement_counts(
        traces, recipe.displacement_histogram, recipe.histogram, noise_model(), zero, kept, phases
    )


def by_boost(traces: TraceSet, found: DisplacementHistogram, zero: float, rows: np.ndarray) -> np.ndarray:
    plane = bh.Histogram(
        bh.axis.Variable(found.drive_edges), bh.axis.Variable(found.grid.edges_g0), storage=bh.storage.Int64()
    )
    for row in np.flatnonzero(rows):
        plane.fill(traces.trace_drive(row) - zero, traces.trace_conductance(row).astype(np.float64))
    return plane.values()


def frame(**changes) -> Recipe:
    return Recipe().with_values("displacement_histogram", **{"bins": 37, "low_nm": -0.2, "high_nm": 0.5, **changes})


@pytest.mark.parametrize("axis", ["logarithmic", "linear"])
@pytest.mark.parametrize("kind", ["steps", "falling steps", "explicit", "flagged"])
def test_equal_to_boost_histogram_cell_for_cell(axis: str, kind: str) -> None:
    values = log_uniform(15, 400, 11)
    recipe = frame().with_values("histogram", axis=axis)
    quality = np.random.default_rng(0).choice([0, 0, 1, 8], values.shape) if kind == "flagged" else None
    traces = recording(values, -0.002 if kind == "falling steps" else 0.002, quality)
    if kind == "explicit":
        wander = np.cumsum(np.random.default_rng(3).normal(0.002, 0.004, values.shape), 1)
        traces = explicit_drive(traces, wander - wander[:, :1])
    zero = -ZERO if kind == "falling steps" else ZERO
    found = counted(traces, recipe, zero=aligned_at(zero, 150, 15))
    if kind == "flagged":
        traces = replace(recording(np.where(quality > 0, np.nan, values).astype(np.float32)), quality=None)
    assert found.counts.sum() > 1000
    assert np.array_equal(found.counts, by_boost(traces, found, zero, np.ones(15, bool)))


@given(
    start=st.floats(-1, 1),
    step=st.sampled_from([0.1, 0.02, -0.02, 1e-3, -7e-4, 0.35]),
    zero=st.floats(-0.5, 0.5),
    columns=st.integers(1, 60),
)
def test_steps_that_fall_on_edges(start: float, step: float, zero: float, columns: int) -> None:
    """The quick search for the samples of a column decides as the drive itself, computed as everywhere."""
    samples = 200
    edges = np.linspace(-0.3, 0.9, columns + 1)
    values = np.full(samples, 0.5, np.float32)
    one = np.zeros(1, np.int64)
    tally = np.zeros((2, columns, 2), np.uint32)
    displacement_kernels.count_stepped_grid(
        values, one, one, np.array([samples]), one, np.array([start]), np.array([step]), np.array([zero]), edges,
        np.zeros(1 << 17, np.uint16), np.array([np.nan, np.nan], np.float32), 1, tally,
    )  # fmt: skip
    drive = (start + step * np.arange(samples)) - zero
    plain = np.searchsorted(edges, drive, side="right") - 1
    inside = (plain >= 0) & (plain < columns)
    assert np.array_equal(tally.sum((0, 2)), np.bincount(plain[inside], minlength=columns))


def test_traces_without_a_zero_are_left_out_and_counted() -> None:
    traces = recording(log_uniform(10, 200, 2))
    zero = aligned_at(np.where(np.arange(10) < 3, np.nan, ZERO), 100, 10)
    found = counted(traces, frame(), zero=zero)
    assert (found.traces, found.not_aligned) == (7, 3)
    assert np.array_equal(found.counts, by_boost(traces, found, ZERO, np.arange(10) >= 3))


@pytest.mark.parametrize("share", [0.0, 0.2, 0.5, 0.9, 1.0])
def test_a_selection_is_exact_and_counts_only_the_smaller_side(share: float) -> None:
    traces, recipe = recording(log_uniform(20, 300, 5)), frame()
    kept = np.arange(20) < round(20 * share)
    spans, touched = [(0, 8), (8, 20)], []
    zero = aligned_at(np.where(np.arange(20) % 6 == 0, np.nan, ZERO), 100, 20)

    def count(span: tuple[int, int], chosen: np.ndarray) -> DisplacementHistogram:
        touched.append(int(chosen[slice(*span)].sum()))
        return counted(traces.block(*span), recipe, chosen[slice(*span)], zero.block(*span))

    whole = counted(traces, recipe, zero=zero)
    found = displacement_of_selection(whole, kept, count, spans, Work(threads=1))
    direct = counted(traces, recipe, kept, zero)
    assert np.array_equal(found.counts, direct.counts)
    assert (found.traces, found.not_aligned) == (direct.traces, direct.not_aligned)
    assert np.allclose(found.density, direct.density)
    assert sum(touched) <= 10


def test_density_integrates_to_samples_per_trace() -> None:
    traces = recording(np.full((4, 350), 0.5, np.float32))
    found = counted(traces, frame())
    area = np.diff(found.drive_edges)[:, None] * found.grid.widths
    assert (found.density * area).sum() == pytest.approx(found.counts.sum() / 4, rel=1e-12)
    assert found.density_unit == "counts / trace / nm / decade"


def test_ridge_follows_a_known_decay_and_profiles_are_distributions() -> None:
    """Traces that fall by 2 decades/nm with a log-normal scatter of 0.1 decade: median and spread are known."""
    random = np.random.default_rng(9)
    drive = np.arange(350) * 0.002
    values = 10 ** (-2 * drive + 0.1 * random.standard_normal((400, 350)))
    found = counted(recording(values.astype(np.float32)), frame(bins=20))
    ridge = found.ridge()
    full = (ridge.drive > -0.19) & (ridge.drive < 0.39)
    line = -2 * (ridge.drive + ZERO)
    assert np.abs(np.log10(ridge.median_g0) - line)[full].max() < 0.01
    spread = np.log10(ridge.high_g0 / ridge.low_g0)[full] / 2
    # the decay within a column of 0.035 nm (0.07 decade, uniform) adds to the scatter
    assert spread == pytest.approx(np.full(full.sum(), np.hypot(0.1, 0.07 / np.sqrt(12))), rel=0.06)
    profile = found.profile(int(np.flatnonzero(full)[0]))
    assert (profile * found.grid.widths).sum() == pytest.approx(1.0, rel=1e-12)
    assert np.isnan(DisplacementHistogram(
        Grid(found.grid.edges_g0, "logarithmic"), found.drive_edges, "nm", found.counts * 0, 0, 0, found.density, ""
    ).profile(0)).all()  # fmt: skip
    assert [len(axis) for axis in found.plottable().axes] == list(found.counts.shape)


def test_a_drive_in_its_own_unit_gets_an_axis_that_fits() -> None:
    """Traces of 400 steps with the zero at step 100: nine of ten end 299 steps later."""
    values = log_uniform(30, 400, 4)
    traces = TraceSet.from_arrays(values)
    edges = displacement_edges(traces, frame().displacement_histogram, aligned_at(100.0, 100, 30))
    assert (edges[0], edges[-1]) == pytest.approx((-299 / 4, 299.0))
    in_nm = displacement_edges(recording(values), frame().displacement_histogram, aligned_at(0.2, 100, 30))
    assert (in_nm[0], in_nm[-1]) == (-0.2, 0.5)
    explicit = replace(traces, drive=explicit_drive(traces, np.tile(np.arange(400.0), (30, 1))).drive)
    assert np.allclose(displacement_edges(explicit, frame().displacement_histogram, aligned_at(100.0, 100, 30)), edges)


# -- events ----------------------------------------------------------------------------------------------------------


def with_plateaus(falling: bool, explicit: bool) -> tuple[TraceSet, np.ndarray]:
    """Traces whose molecular plateau ends 20 to 120 samples before the end of the trace; where it ends, in nm."""
    random = np.random.default_rng(9)
    stop = random.integers(280, 380, 50)
    values = np.full((50, 400), 1e-6)
    for row, end in enumerate(stop):
        values[row, :100] = 2.0
        values[row, 100:110] = np.geomspace(1e-1, 1e-4, 10)
        values[row, 110:end] = 2e-4
    values *= np.exp(0.05 * random.standard_normal(values.shape))
    values += 1e-7 * random.standard_normal(values.shape)
    step = -0.01 if falling else 0.01
    traces = TraceSet.from_arrays(values, step_nm=step)
    if explicit:
        traces = TraceSet.from_arrays(values, displacement_nm=step * np.arange(400))
    return traces, step * (stop - 0.5)


@pytest.mark.parametrize("falling", [False, True])
@pytest.mark.parametrize("explicit", [False, True])
def test_aligned_where_the_molecular_plateau_ends(falling: bool, explicit: bool) -> None:
    traces, ends = with_plateaus(falling, explicit)
    recipe = Recipe().with_values(
        "displacement_histogram", aligned_at="plateau_end", event_low_g0=1e-5, low_nm=-1.0, high_nm=1.0, bins=40
    )
    analysis, work = Analysis(traces, recipe), Work(threads=1)
    zero = analysis.result("displacement_zero", work)
    assert np.isfinite(zero.zero_drive).all()
    assert np.abs(zero.zero_drive - ends).max() < 0.03
    plane = analysis.result("displacement_histogram", work)
    assert (plane.traces, plane.not_aligned) == (50, 0)
    ridge = plane.ridge()
    before = (ridge.drive > 0.1) if falling else (ridge.drive < -0.1)
    after = (ridge.drive < -0.1) if falling else (ridge.drive > 0.1)
    assert np.nanmedian(ridge.median_g0[before]) == pytest.approx(2e-4, rel=0.05)
    assert np.nanmax(ridge.median_g0[after], initial=0.0) < 5e-6
    # every column before the end holds a profile of width one, in decades
    column = int(np.flatnonzero(before)[len(np.flatnonzero(before)) // 2])
    assert (plane.profile(column) * plane.grid.widths).sum() == pytest.approx(1.0)


def test_event_needs_plateaus_only_where_it_is_asked_for() -> None:
    traces, _ = with_plateaus(False, False)
    at_zero = Analysis(traces, Recipe())
    other = at_zero.with_recipe(Recipe().with_values("plateaus", sensitivity=7))
    assert at_zero.key("displacement_all") == other.key("displacement_all")
    at_end = Recipe().with_values("displacement_histogram", aligned_at="plateau_end")
    assert Analysis(traces, at_end).key("displacement_all") != Analysis(
        traces, at_end.with_values("plateaus", sensitivity=7)
    ).key("displacement_all")
