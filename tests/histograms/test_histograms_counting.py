"""Counting: bin for bin equal to boost-histogram, every sample somewhere, the same in blocks and on threads."""

from __future__ import annotations

import boost_histogram as bh
import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from small_recordings import aligned_at, counted, log_uniform, noise_model, recording

from meseta.errors import RecipeError
from meseta.histograms import EXCLUDED, CountMatrix, Grid, conductance_histogram, count_traces, counting_kernels
from meseta.histograms.counting import count_ranges
from meseta.histograms.grids import logarithmic_edges
from meseta.histograms.lookup import float32_not_below, lookup_of
from meseta.recipe import Recipe
from meseta.work import Work


def by_boost(values: np.ndarray, edges: np.ndarray) -> np.ndarray:
    """Half-open float64 bins with the top edge as overflow: boost-histogram's own rule."""
    return bh.Histogram(bh.axis.Variable(edges), storage=bh.storage.Int64()).fill(values.astype(np.float64)).values()


def count_all(values: np.ndarray, grid: Grid, saturation: float = np.inf) -> tuple[np.ndarray, dict[str, int]]:
    traces = recording(values[None, :])
    counts, excluded = count_ranges(traces, grid, lookup_of(grid, saturation), traces.offsets[:-1], traces.offsets[1:])
    return counts[0].astype(np.int64), dict(zip(EXCLUDED, excluded[0].tolist(), strict=True))


@pytest.mark.parametrize("axis", ["logarithmic", "linear"])
@pytest.mark.parametrize("per_decade", [7, 20, 50, 200, 320])
def test_equal_to_boost_histogram_bin_for_bin(axis: str, per_decade: int) -> None:
    values = log_uniform(20, 3000, per_decade)
    recipe = Recipe().with_values("histogram", axis=axis, bins_per_decade=per_decade, bin_width_g0=per_decade / 2000)
    matrix = counted(recording(values), recipe)
    histogram = conductance_histogram(matrix, np.ones(20, bool), recipe.histogram, None)
    assert np.array_equal(histogram.counts, by_boost(values.ravel(), histogram.edges_g0))


@settings(max_examples=60, deadline=None)
@given(
    values=hnp.arrays(np.float32, st.integers(1, 200), elements=st.floats(width=32, allow_subnormal=True)),
    low=st.integers(-40, -1),
    bins=st.integers(1, 90),
    per_decade=st.sampled_from([1, 3, 10, 50]),
    saturation=st.one_of(st.just(np.inf), st.floats(1e-6, 1e3)),
)
def test_any_floats_are_counted_once(
    values: np.ndarray, low: int, bins: int, per_decade: int, saturation: float
) -> None:
    grid = Grid(logarithmic_edges(low, low + bins, per_decade), "logarithmic")
    counts, excluded = count_all(values, grid, saturation)
    seen = values.astype(np.float64)
    assert counts.sum() + sum(excluded.values()) == len(values)
    assert excluded["nan"] == np.isnan(seen).sum()
    assert excluded["non_positive"] == (seen <= 0).sum()
    limit = saturation if np.isfinite(saturation) else np.nan  # without a limit even infinity is only "over"
    assert excluded["saturated"] == (seen >= limit).sum()
    below = seen[(seen > 0) & ~(seen >= limit)]
    assert np.array_equal(counts, by_boost(below, grid.edges_g0))
    assert excluded["over"] == (below >= grid.edges_g0[-1]).sum()


@settings(max_examples=40, deadline=None)
@given(
    edges=st.lists(st.floats(-1e38, 1e38, allow_nan=False), min_size=2, max_size=40, unique=True),
    shift=st.integers(-2, 2),
)
@example(edges=[-5e-247, 0.0, 0.5, 1.0], shift=0)  # as float32 the first edge is minus zero
def test_values_next_to_any_edges(edges: list[float], shift: int) -> None:
    ordered = np.sort(np.array(edges))
    near = ordered.astype(np.float32)
    for _ in range(abs(shift)):
        near = np.nextafter(near, np.float32(np.inf * np.sign(shift)))
    counts, excluded = count_all(near, Grid(ordered, "linear"))
    assert np.array_equal(counts, by_boost(near, ordered))
    assert counts.sum() + sum(excluded.values()) == len(near)


def test_float32_limits_and_subnormals_fall_where_they_belong() -> None:
    limits = np.finfo(np.float32)
    values = np.array([limits.max, limits.tiny, limits.smallest_subnormal, -limits.max, limits.tiny / 2], np.float32)
    grid = Grid(np.array([1e-45, 1e-40, 1e-38, 1.0, 3.5e38]), "logarithmic")
    counts, excluded = count_all(values, grid)
    # the smallest subnormal is 1.401e-45, above the first edge; tiny/2 = 5.9e-39, tiny = 1.2e-38
    assert counts.tolist() == [1, 1, 1, 1]
    assert excluded["non_positive"] == 1


def test_smallest_float32_not_below_keeps_every_comparison() -> None:
    edges = np.random.default_rng(4).normal(size=2000) * 10.0 ** np.arange(-10, 10).repeat(100)
    cuts = float32_not_below(edges)
    for near in (np.nextafter(cuts, np.float32(-np.inf)), cuts, np.nextafter(cuts, np.float32(np.inf))):
        assert np.array_equal(near >= cuts, near.astype(np.float64) >= edges)


def test_worked_examples_of_linear_and_logarithmic_histograms() -> None:
    """Reference values 6.1 and 6.2 (computed by hand there)."""
    values = np.array([2, 1, 1, 0.5, 0.1, 2.5, 0.9, 0.5, 0.1, -0.01], np.float32)
    counts, excluded = count_all(values, Grid(np.array([0, 0.5, 1.5, 2.5]), "linear"))
    assert counts.tolist() == [2, 5, 1]
    assert (excluded["under"], excluded["over"]) == (1, 1)
    counts, excluded = count_all(values, Grid(10.0 ** np.array([-2, -1, 0, 1]), "logarithmic"))
    # 0.1 as float32 is 0.100000001, above the edge 0.1
    assert counts.tolist() == [0, 5, 4]
    assert excluded["non_positive"] == 1


def test_table_and_compare_equal_a_plain_search() -> None:
    grid = Grid(logarithmic_edges(-700, 100, 100), "logarithmic")
    values = np.abs(log_uniform(1, 20000, 9)[0])
    values = values[np.isfinite(values) & (values > 0)]
    lookup = lookup_of(grid)
    place = lookup.table[values.view(np.uint32) >> 15].astype(int)
    place += values >= lookup.thresholds[place]
    found = lookup.column[place]
    plain = np.searchsorted(grid.edges_g0, values.astype(np.float64), side="right") - 1
    inside = (plain >= 0) & (plain < grid.bins)
    assert lookup.most_compares == 1
    assert np.array_equal(found[inside], plain[inside])
    assert (found[~inside] >= grid.bins).all()


def test_edges_are_powers_of_ten_to_the_last_bit() -> None:
    edges = logarithmic_edges(-400, 50, 50)
    assert np.array_equal(edges[::50], [float(f"1e{k}") for k in range(-8, 2)])
    fine = logarithmic_edges(-1600, 200, 200)
    assert np.array_equal(edges, fine[::4])
    assert np.allclose(edges, 10.0 ** (np.arange(-400, 51) / 50), rtol=3e-16 * 4)


@pytest.mark.parametrize("region", ["phase", "before_zero", "after_zero"])
@pytest.mark.parametrize("flags", [False, True])
def test_every_sample_of_the_phase_is_counted_once(region: str, flags: bool) -> None:
    values = log_uniform(30, 500, 3)
    values[:, 299] = 1e-3
    values[:, 300:] = np.random.default_rng(1).normal(0, 4e-7, (30, 200))
    quality = np.random.default_rng(2).choice([0, 0, 0, 1, 2, 8, 9], values.shape) if flags else None
    traces = recording(values, quality=quality, sample_interval_second=1e-4)
    recipe = Recipe().with_values("histogram", region=region)
    zero = aligned_at(0.4, np.where(np.arange(30) % 5 == 0, -1, 200), 30)
    matrix = counted(traces, recipe, zero=zero)
    total = matrix.counts.sum(1, dtype=np.int64) + matrix.excluded.sum(1)
    assert np.array_equal(total, traces.lengths)
    named = dict(zip(EXCLUDED, matrix.excluded.sum(0).tolist(), strict=True))
    if flags and region == "phase":
        assert named["saturated"] == (quality & 1 > 0).sum()
        assert named["untrusted"] == ((quality > 0) & (quality & 1 == 0)).sum()
    if region == "after_zero":
        # a trace without a zero has no such region; the others end 50 samples (5 ms) inside the floor
        assert np.array_equal(matrix.counts[::5].sum(1), np.zeros(6))
        assert named["floor"] == 24 * (200 - 50)


def test_a_floor_tail_ends_the_region_after_its_time() -> None:
    values = np.full((1, 400), 1e-3, np.float32)
    values[0, 200:] = 1e-7
    values[0, 220] = 1e-3
    recipe = Recipe().with_values("histogram", region="after_zero", floor_tail_second=0.003)
    matrix = counted(recording(values, sample_interval_second=1e-4), recipe, zero=aligned_at(0.0, 99, 1))
    # zero after sample 99; settled once 30 samples in a row were at the floor after the spike at 220
    assert matrix.excluded[0, EXCLUDED.index("outside")] == 100
    assert matrix.excluded[0, EXCLUDED.index("floor")] == 400 - (221 + 30)


def test_blocks_and_threads_give_the_same_matrix() -> None:
    traces, recipe = recording(log_uniform(40, 300, 8)), Recipe()
    zero = aligned_at(0.3, 100, 40)
    whole = count_traces(traces, recipe.histogram, noise_model(), zero, ("pull",))
    spans = [(0, 7), (7, 8), (8, 40)]
    parts = list(
        Work(threads=2).each(
            lambda span: count_traces(
                traces.block(*span), recipe.histogram, noise_model(), zero.block(*span), ("pull",)
            ),
            spans,
            "counting",
        )
    )
    joined = CountMatrix.joined(parts)
    assert np.array_equal(whole.counts, joined.counts)
    assert np.array_equal(whole.excluded, joined.excluded)
    assert np.array_equal(whole.nm_a_sample, joined.nm_a_sample)


def test_long_traces_are_counted_in_wider_integers() -> None:
    long = recording(np.full((1, 70_000), 0.5, np.float32))
    short = recording(np.full((2, 100), 0.5, np.float32))
    recipe = Recipe()
    wide, narrow = counted(long, recipe), counted(short, recipe)
    assert (wide.counts.dtype, narrow.counts.dtype) == (np.uint32, np.uint16)
    assert wide.counts.max() == 70_000
    joined = CountMatrix.joined([narrow, wide])
    assert joined.counts.dtype == np.uint32
    assert joined.counts.sum(1).tolist() == [100, 100, 70_000]


def test_saturated_samples_are_left_out_from_99_percent_of_full_scale() -> None:
    values = np.array([[0.5, 1.0, 1.97, 1.985, 2.0, 2.0]], np.float32)
    matrix = counted(recording(values), Recipe(), noise_model(saturation_g0=2.0))
    assert matrix.excluded[0, EXCLUDED.index("saturated")] == 3
    assert matrix.counts.sum() == 3


@pytest.mark.parametrize("scale", [1.0, 1e-6, 1e-12])
def test_scaled_signals_fall_into_scaled_bins(scale: float) -> None:
    values = np.abs(log_uniform(5, 400, 2)) * np.float32(1.0)
    values = values[:, 20:]
    edges = logarithmic_edges(-80, 10, 10)
    plain, _ = count_all(values.ravel(), Grid(edges, "logarithmic"))
    scaled = (values * scale).astype(np.float32)
    moved, _ = count_all(scaled.ravel(), Grid(edges * scale, "logarithmic"))
    assert np.array_equal(moved, by_boost(scaled.ravel(), edges * scale))
    assert np.abs(np.cumsum(moved - plain)).max() <= 2  # rounding of a product may carry a value over an edge


def test_the_other_direction_is_never_mixed_in() -> None:
    values = log_uniform(10, 100, 5)
    direction = np.where(np.arange(10) < 4, "opening", "closing")
    traces = recording(values, direction=direction)
    opening = counted(traces, Recipe())
    closing = counted(traces, Recipe().with_values("histogram", direction="closing"))
    assert opening.used.tolist() == (direction == "opening").tolist()
    assert closing.used.tolist() == (direction == "closing").tolist()
    assert opening.counts[4:].sum() == 0
    assert closing.counts[:4].sum() == 0


def test_sums_of_rows_and_who_reaches_a_bin() -> None:
    random = np.random.default_rng(6)
    counts = random.poisson(0.3, (50, 24)).astype(np.uint16)
    rows = np.flatnonzero(random.random(50) < 0.5)
    for merge in (1, 2, 3, 4):
        total, reached = np.zeros(24, np.int64), np.zeros(24 // merge, np.int64)
        counting_kernels.sum_rows(counts, rows, merge, total, reached)
        merged = counts[rows].reshape(len(rows), -1, merge).sum(-1)
        assert np.array_equal(total, counts[rows].sum(0))
        assert np.array_equal(reached, (merged > 0).sum(0))
        out = np.empty((len(rows), 24 // merge), np.float32)
        counting_kernels.merge_rows(counts, rows, merge, out)
        assert np.array_equal(out, merged)


@pytest.mark.parametrize(
    "changes",
    [
        {"low_g0": 20.0},
        {"low_g0": -1.0},
        {"bins_per_decade": 1000, "low_g0": 1e-300, "high_g0": 1e300},
        {"axis": "linear", "bin_width_g0": 1e-9},
    ],
)
def test_axes_without_sense_are_refused_in_words(changes: dict) -> None:
    with pytest.raises(RecipeError) as caught:
        counted(recording(log_uniform(2, 50, 1)), Recipe().with_values("histogram", **changes))
    assert caught.value.remedy
