"""Histograms against the general-purpose libraries a user would script with, in one run.

Run with ``python tests/benchmarks/bench_histograms.py [traces] [wall|processor]``; on a busy machine, time of the
processor (of all threads together) tells how much work each side does.  Every answer is asserted before it is timed;
the two sides are timed in turn, and the best of several rounds counts.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from types import SimpleNamespace

import boost_histogram as bh
import numpy as np

from meseta import histograms
from meseta.histograms.correlation import correlation_of
from meseta.histograms.counting import count_ranges
from meseta.histograms.displacement import displacement_counts
from meseta.histograms.distribution import conductance_histogram
from meseta.histograms.lookup import lookup_of
from meseta.histograms.results import CountMatrix, DisplacementHistogram, Grid
from meseta.intake.alignment import Alignment
from meseta.recipe import Recipe
from meseta.segmentation.results import NoiseModel
from meseta.traces import TraceSet
from meseta.work import Work

SAMPLES = 5000
CLOCKS = {"wall": time.perf_counter, "processor": time.process_time}
CLOCK = CLOCKS[sys.argv[2] if len(sys.argv) > 2 else "wall"]
THREADS = 2


def recording(traces: int, seed: int = 1) -> TraceSet:
    """Return the standard workload: 40 % staircases, 40 % molecular, 20 % tunnelling; 60 % of samples at the floor."""
    random = np.random.default_rng(seed)
    values = (random.standard_normal((traces, SAMPLES), np.float32) * np.float32(1e-6)).astype(np.float32)
    open_at = int(0.4 * SAMPLES)
    for trace in range(traces):
        kind = trace % 5
        steps = np.sort(random.integers(0, open_at, 4))
        if kind < 4:
            level = np.repeat([3.0, 2.0, 1.0, 0.02, 1e-3], np.diff(np.concatenate([[0], steps, [open_at]])))
        else:
            level = 10 ** np.linspace(1, -6, open_at)
        if kind in (2, 3):
            level[steps[2] :] = np.where(np.arange(open_at - steps[2]) < 400, 3e-4, 1e-5)
        values[trace, :open_at] += level * np.exp(0.02 * random.standard_normal(open_at))
    return TraceSet.from_arrays(values, step_nm=0.0005)


def model() -> NoiseModel:
    one = np.ones(1)
    return NoiseModel(0.0, 1e-6, 1000, one, one, one, 2.0, 0.0, np.inf, -10.0)


def in_turn(sides: dict[str, Callable[[], object]], rounds: int = 5) -> dict[str, float]:
    best = dict.fromkeys(sides, np.inf)
    for _ in range(rounds):
        for name, side in sides.items():
            began = CLOCK()
            side()
            best[name] = min(best[name], CLOCK() - began)
    return best


def tell(name: str, best: dict[str, float], ours: str, peer: str, asked: str) -> None:
    ratio = best[peer] / best[ours]
    print(f"{name}: {best[ours]:.3f} s against {best[peer]:.3f} s, {ratio:.2f} x (asked: {asked})", flush=True)


def blocks(traces: TraceSet, number: int) -> list[TraceSet]:
    cuts = np.linspace(0, traces.traces, number + 1).astype(int)
    return [traces.block(int(a), int(b)) for a, b in pairwise(cuts)]


def bench_rows(traces: TraceSet) -> None:
    """800 logarithmic bins, the counts of every trace kept."""
    grid = Grid(10.0 ** (np.arange(-700, 101) / 100), "logarithmic")
    lookup, parts, pool = lookup_of(grid), blocks(traces, 8), ThreadPoolExecutor(THREADS)

    def count(block: TraceSet) -> CountMatrix:
        counts, excluded = count_ranges(block, grid, lookup, block.offsets[:-1], block.offsets[1:])
        return CountMatrix(grid, counts, excluded, np.ones(block.traces), np.ones(block.traces, bool))

    def ours() -> np.ndarray:
        return CountMatrix.joined(list(pool.map(count, parts))).counts

    def one_thread() -> np.ndarray:
        return CountMatrix.joined([count(block) for block in parts]).counts

    flat = traces.conductance

    def peer() -> np.ndarray:
        axis = bh.axis.Regular(800, 1e-7, 10.0, transform=bh.axis.transform.log)
        return bh.Histogram(axis, storage=bh.storage.Int64()).fill(flat, threads=THREADS).values()

    exact = bh.Histogram(bh.axis.Variable(grid.edges_g0), storage=bh.storage.Int64()).fill(flat.astype(np.float64))
    assert np.array_equal(ours().sum(0, dtype=np.int64), exact.values())
    best = in_turn({"ours": ours, "one thread": one_thread, "peer": peer})
    tell("logarithmic histogram, 800 bins, every trace's counts", best, "ours", "peer", "3 x")
    tell("the same, two threads against one", best, "ours", "one thread", "1.6 x")


def bench_plane(traces: TraceSet) -> None:
    """500 x 800 bins from conductance and displacement."""
    recipe = Recipe().with_values("histogram", low_g0=1e-7, high_g0=10.0)
    recipe = recipe.with_values("displacement_histogram", bins=500, bins_per_decade=100, low_nm=-0.5, high_nm=2.0)
    alignment = Alignment(
        np.full(traces.traces, 0.5), np.full(traces.traces, 1000), np.zeros(traces.traces, np.uint8), 0.5
    )
    parts, pool = blocks(traces, 8), ThreadPoolExecutor(THREADS)
    cuts = np.cumsum([0, *(part.traces for part in parts)])

    def count(at: int) -> DisplacementHistogram:
        part = parts[at]
        return displacement_counts(
            part, recipe.displacement_histogram, recipe.histogram, model(),
            alignment.block(int(cuts[at]), int(cuts[at + 1])), np.ones(part.traces, bool), ("pull",),
        )  # fmt: skip

    def ours() -> np.ndarray:
        return DisplacementHistogram.summed(pool.map(count, range(len(parts)))).counts

    def one_thread() -> np.ndarray:
        return DisplacementHistogram.summed(map(count, range(len(parts)))).counts

    flat = traces.conductance
    drive = np.tile(0.0005 * np.arange(SAMPLES) - 0.5, traces.traces)

    def peer() -> np.ndarray:
        axes = (bh.axis.Regular(500, -0.5, 2.0), bh.axis.Regular(800, 1e-7, 10.0, transform=bh.axis.transform.log))
        return bh.Histogram(*axes, storage=bh.storage.Int64()).fill(drive, flat, threads=THREADS).values()

    found = displacement_counts(
        traces, recipe.displacement_histogram, recipe.histogram, model(), alignment,
        np.ones(traces.traces, bool), ("pull",),
    )  # fmt: skip
    assert found.counts.shape == (500, 800)
    exact = bh.Histogram(
        bh.axis.Variable(found.drive_edges), bh.axis.Variable(found.grid.edges_g0), storage=bh.storage.Int64()
    )
    few = min(len(flat), 2_000_000)
    part = traces.block(0, few // SAMPLES)
    counted = displacement_counts(
        part, recipe.displacement_histogram, recipe.histogram, model(), alignment.block(0, part.traces),
        np.ones(part.traces, bool), ("pull",),
    )  # fmt: skip
    assert np.array_equal(counted.counts, exact.fill(drive[: part.samples], part.conductance.astype(float)).values())
    best = in_turn({"ours": ours, "one thread": one_thread, "peer": peer}, rounds=4)
    tell("2D histogram 500 x 800", best, "ours", "peer", "3 x")
    tell("the same, two threads against one", best, "ours", "one thread", "1.6 x")


def counted(traces: TraceSet) -> CountMatrix:
    recipe = Recipe().with_values("histogram", low_g0=1e-7)
    alignment = Alignment(np.zeros(traces.traces), np.zeros(traces.traces, int), np.zeros(traces.traces, np.uint8), 0.5)
    parts = blocks(traces, 8)
    cuts = np.cumsum([0, *(part.traces for part in parts)])
    matrix = CountMatrix.joined(
        [
            histograms.count_traces(p, recipe.histogram, model(), alignment.block(int(a), int(b)), ("pull",))
            for p, a, b in zip(parts, cuts[:-1], cuts[1:], strict=True)
        ]
    )
    return histograms.with_bins(matrix, recipe.histogram, model())


def bench_rebin(matrix: CountMatrix) -> None:
    kept = np.arange(len(matrix.counts)) % 3 > 0
    settings = Recipe().histogram
    whole = conductance_histogram(matrix, kept, settings, None)
    assert whole.counts.sum() == matrix.shown_counts(matrix.counts[kept].astype(np.int64)).sum()
    coarse = SimpleNamespace(axis="logarithmic", low_g0=1e-7, high_g0=10.0, bins_per_decade=20, bin_width_g0=0.01)
    best = in_turn(
        {"select and re-bin": lambda: conductance_histogram(
            histograms.with_bins(matrix, coarse, model()), kept, settings, None  # type: ignore[arg-type]
        )}
    )  # fmt: skip
    print(f"re-binning and re-selecting {matrix.counts.shape}: {1e3 * best['select and re-bin']:.1f} ms (asked: 20 ms)")


def bench_correlation(matrix: CountMatrix) -> None:
    values = matrix.counts[:, :1600].reshape(len(matrix.counts), 800, 2).sum(-1).astype(np.float64)
    as_float = values
    with np.errstate(invalid="ignore", divide="ignore"):
        expected = np.corrcoef(as_float, rowvar=False)
    assert np.allclose(correlation_of(values), expected, rtol=0, atol=1e-12, equal_nan=True)

    def peer() -> None:
        with np.errstate(invalid="ignore", divide="ignore"):
            np.corrcoef(as_float, rowvar=False)

    best = in_turn({"ours": lambda: correlation_of(values), "peer": peer})
    share = best["ours"] / best["peer"]
    print(f"correlation 800 x 800: {best['ours']:.3f} s, {share:.2f} of corrcoef (asked: 0.6)")


def bench_bootstrap(matrix: CountMatrix) -> None:
    from meseta.histograms.resampling import resample
    from meseta.traces import trace_table

    traces = len(matrix.counts)
    recipe = Recipe()
    table = trace_table(traces)
    kept = np.ones(traces, bool)
    values = matrix.shown_counts(matrix.counts).astype(np.float64)

    def ours() -> object:
        return resample(matrix, kept, table, recipe.histogram, recipe.resampling, Work(threads=THREADS))

    result = ours()
    weights = result.weights.astype(np.float64)
    assert np.array_equal(result.counts, weights @ values)
    best = in_turn({"ours": ours, "peer": lambda: weights @ values}, rounds=4)
    share = best["ours"] / best["peer"]
    print(f"1,000 replicates {values.shape}: {best['ours']:.3f} s, {share:.2f} of one matrix product (asked: 1.3)")


def main(number: int) -> None:
    traces = recording(number)
    bench_rows(traces)
    bench_plane(traces)
    matrix = counted(traces)
    bench_rebin(matrix)
    bench_correlation(matrix)
    bench_bootstrap(matrix)


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 10_000)
