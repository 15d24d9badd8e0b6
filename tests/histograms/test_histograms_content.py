"""Results in other tools' hands: arrays with units, CSV, HDF5, and the histogram serialisation of UHI."""

from __future__ import annotations

import boost_histogram as bh
import h5py
import numpy as np
import pyarrow.csv
import pytest
from boost_histogram.serialization import from_uhi

from meseta.analysis import Analysis, compare_parts, save_result
from meseta.errors import CallError, OutputError
from meseta.histograms import columns_of, content_of, uhi_of
from meseta.recipe import Recipe
from meseta.traces import TraceSet
from meseta.work import Work

WORK = Work(threads=1)
STEPS_WITH_CONTENT = (
    "histogram",
    "displacement_histogram",
    "correlation_histogram",
    "temporal_histogram",
    "shifted_correlation",
    "plateau_histogram",
)


@pytest.fixture(scope="module")
def analysis() -> Analysis:
    random = np.random.default_rng(1)
    values = 10 ** (np.linspace(1, -7, 400) + 0.05 * random.standard_normal((90, 400)))
    values[:, 200:260] = 2e-4 * np.exp(0.1 * random.standard_normal((90, 60)))
    values += 1e-7 * random.standard_normal(values.shape)
    recipe = Recipe().with_settings(
        ["resampling.replicates=40", "correlation.permutations=20", "correlation.bins_per_decade=5"]
    )
    half = np.where(np.arange(90) < 45, "early", "late")
    return Analysis(TraceSet.from_arrays(values, step_nm=0.005, half=half), recipe)


def test_uhi_serialisation_is_read_by_boost_histogram(analysis: Analysis) -> None:
    """UHI serialisation, schema 1, through ``boost_histogram.serialization.from_uhi``."""
    one, plane = analysis.histogram(WORK), analysis.result("displacement_histogram", WORK)
    read = bh.Histogram(from_uhi(uhi_of(one)))
    assert np.array_equal(read.values(), one.counts)
    assert np.array_equal(read.axes[0].edges, one.edges_g0)
    assert read.values(flow=True).sum() == one.counts.sum() + sum(
        one.excluded[name] for name in ("under", "over", "non_positive")
    )
    read = bh.Histogram(from_uhi(uhi_of(plane)))
    assert np.array_equal(read.values(), plane.counts)
    assert np.array_equal(read.axes[1].edges, plane.grid.edges_g0)
    with pytest.raises(CallError, match="no histogram of counts"):
        uhi_of(analysis.result("correlation_histogram", WORK))


@pytest.mark.parametrize("name", STEPS_WITH_CONTENT)
def test_hdf5_has_numbers_units_axes_and_where_they_come_from(analysis: Analysis, name: str, tmp_path) -> None:
    result, path = analysis.result(name, WORK), tmp_path / "result.h5"
    save_result(result, path, analysis)
    content = content_of(result)
    with h5py.File(path) as file:
        assert Recipe.parse(file.attrs["recipe_toml"]) == analysis.recipe
        assert analysis.traces.sources[0].sha256 in file.attrs["recordings_sha256"]
        group = file["result"]
        assert group.attrs["kind"] == content.kind
        assert group.attrs["axis"] == "logarithmic"
        assert group["conductance_edges"].attrs["unit"] == "G0"
        for key, one in content.quantities.items():
            assert np.array_equal(group[key][()], one.values, equal_nan=one.values.dtype.kind == "f")
            assert list(group[key].attrs["along"]) == list(one.along)
            assert len(one.along) in (0, one.values.ndim)


@pytest.mark.parametrize("name", STEPS_WITH_CONTENT)
def test_csv_has_one_row_a_bin(analysis: Analysis, name: str, tmp_path) -> None:
    result, path = analysis.result(name, WORK), tmp_path / "result.csv"
    save_result(result, path)
    table = pyarrow.csv.read_csv(path).to_pydict()
    assert len({len(column) for column in table.values()}) == 1
    low, high = np.array(table["g_low_g0"]), np.array(table["g_high_g0"])
    assert (low < high).all()
    assert set(low) == set(result.grid.edges_g0[:-1])


def test_rows_of_the_maps_are_where_they_belong(analysis: Analysis) -> None:
    plane = analysis.result("displacement_histogram", WORK)
    columns = columns_of(plane)
    at = int(np.argmax(columns["counts"]))
    column, place = np.unravel_index(plane.counts.argmax(), plane.counts.shape)
    assert columns["displacement_low"][at] == plane.drive_edges[column]
    assert columns["g_low_g0"][at] == plane.grid.edges_g0[place]
    assert columns["ridge"][at] == pytest.approx(plane.ridge().median_g0[column], nan_ok=True)
    pairs, chart = columns_of(analysis.result("correlation_histogram", WORK)), analysis.result("correlation_histogram")
    at = chart.grid.bins * 2 + 5
    assert pairs["correlation"][at] == pytest.approx(chart.correlation[2, 5], nan_ok=True)
    assert (pairs["g_low_g0"][at], pairs["second_g_low_g0"][at]) == (chart.grid.edges_g0[2], chart.grid.edges_g0[5])


def test_lengths_and_comparisons_are_written_too(analysis: Analysis, tmp_path) -> None:
    segments = analysis.result("length_histograms", WORK)[0]
    comparison = compare_parts(analysis, "half", WORK)
    for result, column in ((segments, "density"), (comparison, "density_1"), (comparison.difference(0, 1), "density")):
        for ending in ("csv", "npz", "h5"):
            save_result(result, tmp_path / f"result.{ending}", analysis)
        with np.load(tmp_path / "result.npz") as arrays:
            assert np.array_equal(arrays[column], content_of(result).quantities[column].values)
            assert str(arrays[f"{column}_unit"]).count("/") >= 1
    assert content_of(comparison).attributes["name_1"] == "late"


def test_files_that_cannot_be_are_refused_and_nothing_is_left(analysis: Analysis, tmp_path) -> None:
    with pytest.raises(OutputError, match=r"ends in '\.txt'"):
        save_result(analysis.histogram(WORK), tmp_path / "result.txt")
    with pytest.raises(OutputError, match="cannot be written"):
        save_result(analysis.histogram(WORK), tmp_path / "missing" / "result.csv")
    with pytest.raises(CallError, match="no plain arrays"):
        save_result(analysis.noise(WORK), tmp_path / "result.csv")
    assert list(tmp_path.iterdir()) == []


def test_band_of_the_correlation_goes_with_it() -> None:
    random = np.random.default_rng(2)
    values = 10 ** (np.linspace(1, -7, 200) + 0.2 * random.standard_normal((240, 200)))
    recipe = Recipe().with_settings(["correlation.permutations=2", "correlation.bins_per_decade=5"])
    result = Analysis(TraceSet.from_arrays(values, step_nm=0.005), recipe).result("correlation_histogram", WORK)
    found, rows = content_of(result).quantities, columns_of(result)
    low, middle, high = (found[name].values for name in ("correlation_low", "correlation", "correlation_high"))
    told = np.isfinite(low)
    assert told.any() and (low[told] <= middle[told]).all() and (middle[told] <= high[told]).all()
    assert np.array_equal(rows["correlation_low"], low.ravel(), equal_nan=True)
