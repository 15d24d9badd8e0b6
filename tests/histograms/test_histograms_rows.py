"""Large tables of counts lie in a file, and nobody notices; no kept trace is an answer, not a warning."""

from __future__ import annotations

import errno
import tempfile
import warnings
import weakref

import numpy as np
import pytest
from small_recordings import matrix_of

from meseta.analysis import STEPS, Analysis
from meseta.analysis.kept import array_owners
from meseta.errors import OutputError
from meseta.histograms import CountMatrix, Grid, rows
from meseta.histograms.distribution import conductance_histogram, weighted_counts
from meseta.histograms.grids import logarithmic_edges
from meseta.recipe import Recipe
from meseta.simulate import SimulationSettings, simulate
from meseta.traces import TraceSet
from meseta.work import Work


def parts(*kinds: type) -> list[np.ndarray]:
    random = np.random.default_rng(1)
    return [random.integers(0, 60_000, (7 + at, 5)).astype(kind) for at, kind in enumerate(kinds)]


@pytest.mark.parametrize("most_bytes", [0, 60, 10**9])
@pytest.mark.parametrize("kinds", [(np.uint16,), (np.uint16, np.uint16, np.uint32, np.uint16), (np.uint32, np.uint16)])
def test_rows_are_the_same_in_memory_and_in_a_file(most_bytes: int, kinds: tuple[type, ...]) -> None:
    blocks = parts(*kinds)
    found = rows.stacked(iter(blocks), most_bytes)
    assert np.array_equal(found, np.concatenate(blocks))
    assert found.dtype == (np.uint32 if np.uint32 in kinds else np.uint16)
    assert bool(list(array_owners(found))) == (most_bytes == 10**9)


def test_blocks_are_let_go_of_once_they_are_put_together(monkeypatch) -> None:
    monkeypatch.setattr(rows.stacked, "__defaults__", (100,))
    grid = Grid(logarithmic_edges(-8, 4, 4), "logarithmic")

    def blocks():
        for _ in range(5):
            counts = np.zeros((7, grid.bins), np.uint16)
            held.append(weakref.ref(counts))
            yield matrix_of(counts, grid)

    held: list[weakref.ref[np.ndarray]] = []
    found = CountMatrix.joined(blocks())
    assert len(found.counts) == 35
    assert [one() for one in held if one() is not None] == []


def test_a_full_disk_is_one_clear_error(monkeypatch) -> None:
    class Full:
        def write(self, _):
            raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(tempfile, "TemporaryFile", lambda **_: Full())
    with pytest.raises(OutputError, match="no room"):
        rows.stacked(iter(parts(np.uint16)), 0)


def test_an_analysis_over_a_file_gives_the_same_numbers(monkeypatch) -> None:
    settings = SimulationSettings(samples=600, sampling_hertz=5000.0)
    traces = simulate("metal", 80, 1, settings, Work(threads=1)).traces
    recipe = Recipe().with_settings(["resampling.replicates=40", "correlation.permutations=10"])
    work = Work(threads=2, block_samples=6000)
    inside = Analysis(traces, recipe)
    monkeypatch.setattr(rows.stacked, "__defaults__", (1000,))
    outside = Analysis(traces, recipe)
    assert list(array_owners(outside.result("fine_counts", work).counts)) == []
    one, other = inside.histogram(work), outside.histogram(work)
    for name in ("counts", "density", "density_low", "density_high"):
        assert np.array_equal(getattr(one, name), getattr(other, name), equal_nan=True)
    maps = [which.result("correlation_histogram", work).correlation for which in (inside, outside)]
    assert np.array_equal(*maps, equal_nan=True)


def test_weighted_sums_are_those_of_the_whole_matrix(monkeypatch) -> None:
    monkeypatch.setattr("meseta.histograms.distribution._ROWS_A_BLOCK", 7)
    random = np.random.default_rng(2)
    matrix = matrix_of(random.poisson(9, (40, 12)), Grid(logarithmic_edges(-8, 4, 4), "logarithmic"))
    chosen, draws, length = np.arange(0, 40, 2), random.integers(0, 4, (5, 20)), random.random(20)
    found = weighted_counts(matrix, chosen, draws, length)
    assert found == pytest.approx((draws * length) @ matrix.counts[chosen].astype(float))


def test_no_kept_trace_is_an_answer_without_a_warning() -> None:
    """Every step of the table: clean empties and NaN, a word where there is room for one."""
    values = 10 ** np.linspace(1, -7, 300) * np.ones((30, 1)) + 1e-7 * np.random.default_rng(3).standard_normal(
        (30, 300)
    )
    recipe = Recipe().with_values("selection", rules=["plateaus >= 900"])
    analysis, work = Analysis(TraceSet.from_arrays(values, step_nm=0.01), recipe), Work(threads=1)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for name in STEPS:
            analysis.result(name, work)
    histogram = analysis.histogram(work)
    assert histogram.traces == 0
    assert not histogram.counts.any()
    assert analysis.result("correlation_histogram", work).note == "too few traces are kept to correlate"
    assert np.isnan(analysis.result("correlation_histogram", work).correlation).all()
    assert "too few" in analysis.result("drift", work).text
    assert "too few" in analysis.result("record_memory", work).text
    assert analysis.result("resampling", work).statement() == "no trace is kept"


def test_a_histogram_of_nothing_has_no_density() -> None:
    matrix = matrix_of(np.ones((5, 12)), Grid(logarithmic_edges(-8, 4, 4), "logarithmic"))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = conductance_histogram(matrix, np.zeros(5, bool), Recipe().histogram, None)
    assert found.counts.sum() == 0
