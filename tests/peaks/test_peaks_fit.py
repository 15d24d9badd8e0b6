"""Peak fits of whole histograms: planted peaks, what must not be fitted, and inputs without an answer."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from peaks_synthetic import Record, bootstrap, count_matrix, counts_histogram, histogram_of, linear, logarithmic
from scipy import stats

from meseta.errors import CallError
from meseta.peaks import Floor, PeakFit, fit_histogram
from meseta.quantities import G0_SIEMENS, R0_OHM
from meseta.recipe import Recipe

EDGES = np.linspace(0.4, 4.4, 201)
MIDDLE = (EDGES[1:] + EDGES[:-1]) / 2


def chosen(**values):
    return Recipe().with_values("peaks", **values).peaks


def normal(position, width, area, edges=EDGES):
    return area * np.diff(stats.norm.cdf(edges, position, width))


def drawn(expected, seed=1):
    return np.random.default_rng(seed).poisson(expected)


def fit(counts, edges=EDGES, axis="linear", **values) -> PeakFit:
    return fit_histogram(counts_histogram(counts, edges, axis), chosen(**values))


def bad(status) -> bool:
    """Return whether a status warns of more than a missing interval."""
    return any("no interval" not in part for part in str(status).split("; ") if part != "ok")


@pytest.mark.parametrize("peaks", [1, 2, 3])
@pytest.mark.parametrize("population", [linear, logarithmic], ids=["linear", "logarithmic"])
def test_planted_peaks_are_found_counted_and_placed(population, peaks):
    planted = population(peaks)
    matrix, _ = count_matrix(planted, 2000, np.random.default_rng(peaks))
    table = fit_histogram(histogram_of(matrix), chosen(), bootstrap(matrix, 200, 1), matrix).table
    truth = np.sort(planted.position_g0)
    assert len(table) == peaks
    assert list(table.status) == ["ok"] * peaks
    sigma = (table.position_high_g0 - table.position_low_g0) / 3.92
    assert (np.abs(table.position_g0 - truth) < 4 * sigma).all()
    assert (table.position_low_g0 < table.position_g0).all()
    assert (table.position_g0 < table.position_high_g0).all()
    assert (table.position_systematic_g0 < 10 * sigma).all()
    np.testing.assert_allclose(table.position_siemens, table.position_g0 * G0_SIEMENS)
    np.testing.assert_allclose(table.position_ohm, R0_OHM / table.position_g0)
    width = 2.3548 * np.hypot(planted.spread, planted.noise)[np.argsort(planted.position)]
    np.testing.assert_allclose(table.fwhm, width, rtol=0.12)
    area = (np.array(planted.share) * planted.samples)[np.argsort(planted.position)]
    np.testing.assert_allclose(table.area_per_trace, area, rtol=0.15)
    assert set(table.area_unit) == {"counts / trace"}


def test_metal_peaks_begin_with_the_single_atom():
    """A sharp edge below 1 G0 (traces end at the zero of displacement) and a few readings there are no peak."""
    edges = np.linspace(0, 5, 501)
    middle = (edges[1:] + edges[:-1]) / 2
    below = np.where(middle > 0.5, 20.0, 0.5) + 300 * (np.abs(middle - 0.52) < 0.02)
    peaks = normal(0.98, 0.05, 4e4, edges) + normal(1.93, 0.12, 2e4, edges) + normal(2.85, 0.17, 1.5e4, edges)
    table = fit(drawn(below + peaks), edges, most=3, background="linear").table
    np.testing.assert_allclose(table.position_g0, [0.98, 1.93, 2.85], atol=0.02)
    assert [str(name)[:4] for name in table.assigned] == ["1 G0", "2 G0", "3 G0"]
    assert list(table.channels_at_least) == [1, 2, 3]


def tunnelling_with_floor(yield_counts: float, seed: int = 2):
    """Return counts on a log axis: floor at 1e-6, tunnelling falling towards contact, a molecular peak, metal peaks."""
    edges = 10 ** np.linspace(-7, 1, 401)
    u = np.log10(edges)
    middle = (u[1:] + u[:-1]) / 2
    floor = 4e6 * np.diff(stats.norm.cdf(edges, 2e-7, 1e-6))
    tunnel = np.where(middle < -0.5, 400 * 10 ** (-0.35 * (middle + 3.5)), 20.0)
    metal = normal(0.0, 0.03, 1e5, u) + normal(0.29, 0.03, 5e4, u)
    molecule = normal(-3.6, 0.22, yield_counts, u)
    return drawn(floor + tunnel + metal + molecule, seed), edges


@pytest.mark.parametrize("floor", [None, Floor(2e-7, 1e-6)], ids=["floor sought", "floor known"])
def test_floor_is_never_a_peak_and_molecule_stands_beside_metal(floor):
    counts, edges = tunnelling_with_floor(5e4)
    table = fit_histogram(counts_histogram(counts, edges, "logarithmic"), chosen(), floor=floor).table
    np.testing.assert_allclose(np.log10(table.position_g0), [-3.6, 0.0, 0.29], atol=0.01)
    assert (table.fit_low_g0 > 5e-6).all()
    assert set(table.axis) == {"logarithmic"}


def test_blank_has_no_molecular_peak():
    counts, edges = tunnelling_with_floor(0.0)
    table = fit_histogram(counts_histogram(counts, edges, "logarithmic"), chosen(), floor=Floor(2e-7, 1e-6)).table
    np.testing.assert_allclose(np.log10(table.position_g0), [0.0, 0.29], atol=0.01)


@pytest.mark.parametrize("slope", [0.5, 1.0, 2.0])
def test_broad_peak_on_a_steep_background(slope):
    edges = 10 ** np.linspace(-6, -1, 251)
    u = np.log10(edges)
    middle = (u[1:] + u[:-1]) / 2
    table = fit(drawn(normal(-3.5, 0.25, 15000, u) + 100 * 10 ** (-slope * (middle + 3.5))), edges, "logarithmic").table
    assert len(table) == 1
    assert np.log10(table.position_g0[0]) == pytest.approx(-3.5, abs=0.02)


@pytest.mark.parametrize("distance", [1.3, 1.6, 2.5])
def test_overlapping_unequal_peaks_are_told_apart(distance):
    second = 1 + distance * 0.2355
    table = fit(drawn(normal(1.0, 0.1, 2e4) + normal(second, 0.1, 8e3) + 50)).table
    np.testing.assert_allclose(table.position_g0, [1.0, second], atol=0.02)


def test_peaks_asked_for_are_fitted_named_and_fixed():
    counts = drawn(normal(1.0, 0.1, 2e4) + normal(2.0, 0.2, 1e4) + 50)
    peaks = [{"position_g0": 2.1, "name": "dimer"}, {"position_g0": 0.97, "name": "held", "fixed": True}]
    table = fit(counts, peaks=peaks, fit_low_g0=0.5, fit_high_g0=3.5, names={"contact": 2.0}).table
    assert list(table.peak) == ["held", "dimer"]
    assert table.position_g0[0] == 0.97
    assert table.position_g0[1] == pytest.approx(2.0, abs=0.02)
    assert str(table.assigned[1]).startswith("contact")
    np.testing.assert_allclose(table.fit_low_g0, 0.5)
    np.testing.assert_allclose(table.fit_high_g0, 3.5)


def test_multiples_of_one_conductance_are_tied():
    counts = drawn(normal(0.96, 0.08, 3e4) + normal(1.92, 0.12, 2e4) + normal(2.88, 0.2, 1e4) + 30)
    peaks = [{"position_g0": value} for value in (1.0, 2.0, 3.0)]
    table = fit(counts, peaks=peaks, tie="multiples").table
    np.testing.assert_allclose(table.position_g0, table.position_g0[0] * np.array([1, 2, 3]), rtol=1e-9)
    assert table.position_g0[0] == pytest.approx(0.96, abs=0.005)


def test_the_axis_of_the_fit_is_stated_and_moves_the_peak():
    """The Jacobian: a peak that is normal in G has its top elsewhere in log10 G (and is skewed there)."""
    matrix, _ = count_matrix(linear(1), 1500, np.random.default_rng(0))
    histogram = histogram_of(matrix)
    straight = fit_histogram(histogram, chosen(peaks=[{"position_g0": 1.0}])).table
    bent = fit_histogram(histogram, chosen(peaks=[{"position_g0": 1.0}], axis="logarithmic")).table
    assert straight.axis[0] == "linear"
    assert bent.axis[0] == "logarithmic"
    assert bent.position_g0[0] > straight.position_g0[0] * 0.98
    assert bent.position_g0[0] != pytest.approx(straight.position_g0[0], rel=1e-4)
    assert bent.fwhm[0] == pytest.approx(straight.fwhm[0] / np.log(10), rel=0.1)


def test_mode_of_the_histogram_shows_the_jacobian():
    """Normal in G (1, 0.1): top of the log histogram at (1 + sqrt(1 + 4 * 0.1²))/2 = 1.009901951 (reference values)."""
    edges = 10 ** np.linspace(-0.5, 0.5, 101)
    counts = np.round(normal(1.0, 0.1, 5e7, edges)).astype(int)
    table = fit(counts, edges, "logarithmic", peaks=[{"position_g0": 1.0}], background="none").table
    assert table.mode_g0[0] == pytest.approx(1.009901951, abs=0.002)


@pytest.mark.parametrize("shape", ["lorentzian", "pseudo_voigt", "skewed_gaussian"])
def test_other_shapes_find_their_own(shape):
    middle = 1.8
    if shape == "skewed_gaussian":
        side = 0.15 * np.where(middle > MIDDLE, 0.6, 1.4)
        expected = 4e4 * 0.02 * np.exp(-0.5 * ((MIDDLE - middle) / side) ** 2) / (0.15 * np.sqrt(2 * np.pi)) + 40
    else:
        part = 1.0 if shape == "lorentzian" else 0.5
        wide = np.diff(stats.cauchy.cdf(EDGES, middle, 0.1))
        expected = 4e4 * (part * wide + (1 - part) * np.diff(stats.norm.cdf(EDGES, middle, 0.1 / 1.17741))) + 40
    table = fit(
        drawn(expected), shape=shape, peaks=[{"position_g0": 1.75, "width": 0.1}], fit_low_g0=0.4, fit_high_g0=4.4,
        background="constant",
    ).table  # fmt: skip
    assert table.position_g0[0] == pytest.approx(middle, abs=0.01)
    assert table.fwhm[0] == pytest.approx(0.2 if shape != "skewed_gaussian" else 0.3532, rel=0.08)


def test_a_blank_scaled_stands_for_the_background():
    shape = 2000 * np.exp(-3 * (MIDDLE - 0.4)) + 300 * np.sin(3 * MIDDLE) ** 2
    counts = drawn(normal(1.2, 0.15, 1e4) + 0.4 * shape)
    histogram = counts_histogram(counts, EDGES)
    wanted = chosen(background="template", peaks=[{"position_g0": 1.2}], fit_low_g0=0.4, fit_high_g0=4.4)
    table = fit_histogram(histogram, wanted, template=shape).table
    assert table.position_g0[0] == pytest.approx(1.2, abs=0.01)
    assert table.area_per_trace[0] * 2000 == pytest.approx(1e4, rel=0.05)
    with pytest.raises(CallError):
        fit_histogram(histogram, wanted)


def test_curves_add_up_in_the_density_of_the_histogram():
    matrix, _ = count_matrix(linear(3), 1000, np.random.default_rng(4))
    found = fit_histogram(histogram_of(matrix), chosen(), None, matrix)
    inside = np.isfinite(found.model)
    np.testing.assert_allclose(
        (found.background + found.components.sum(axis=0, where=inside))[inside], found.model[inside]
    )
    assert found.grid.bins == len(found.model) == len(found.observed)
    assert len(found.components) == len(found.table)
    assert {name for name, _ in found.systematic} >= {"bins twice as wide", "background linear"}


# -- inputs without an answer ---------------------------------------------------------------------------------------


def test_no_peak_is_no_peak():
    for counts in (drawn(3000 * np.exp(-(MIDDLE - 0.4))), drawn(np.full(200, 300.0))):
        table = fit(counts).table
        assert len(table) == 1
        assert np.isnan(table.position_g0[0])
        assert table.status[0] == "no peak found"


def test_a_peak_asked_for_where_there_is_none_is_called_weak():
    table = fit(drawn(3000 * np.exp(-(MIDDLE - 0.4))), peaks=[{"position_g0": 1.0}]).table
    assert bad(table.status[0])


@pytest.mark.parametrize("asked", [[], [{"position_g0": 1.0}]])
def test_one_bin_and_no_counts_are_told(asked):
    assert "too few" in fit([500], [0.9, 1.1], peaks=asked).table.status[0]
    assert "empty" in fit(np.zeros(200, int), peaks=asked).table.status[0]


def test_all_counts_in_one_bin_have_no_width():
    counts = np.zeros(200, int)
    counts[30] = 5000
    table = fit(counts, peaks=[{"position_g0": 1.0}]).table
    assert "bound" in table.status[0]


def test_two_peaks_where_there_is_one_are_doubtful():
    counts = drawn(normal(1.5, 0.15, 2e4) + 50)
    for starts in ((1.5, 1.5), (1.45, 1.55)):
        table = fit(counts, peaks=[{"position_g0": start} for start in starts]).table
        assert any(bad(status) for status in table.status)


@pytest.mark.parametrize(("centre", "asked"), [(0.38, 0.45), (4.42, 4.3), (0.5, 0.5)])
def test_a_peak_cut_by_the_range_is_called_so(centre, asked):
    table = fit(drawn(normal(centre, 0.15, 2e4) + 50), peaks=[{"position_g0": asked}]).table
    assert bad(table.status[0])


def test_few_traces_are_warned_of():
    matrix, _ = count_matrix(linear(1), 200, np.random.default_rng(1))
    table = fit_histogram(histogram_of(matrix), chosen(), bootstrap(matrix, 100, 1), matrix).table
    assert "fewer than 500 traces" in table.status[0]


def test_a_histogram_alone_has_no_intervals_and_says_so():
    table = fit(drawn(normal(1.5, 0.15, 2e4) + 50)).table
    assert np.isnan(table.position_low_g0[0])
    assert "no interval" in table.status[0]


def test_a_shape_that_does_not_fit_is_told():
    table = fit(drawn(normal(1.0, 0.1, 2e5) + normal(1.19, 0.1, 1e5) + 50), peaks=[{"position_g0": 1.05}]).table
    assert "fits poorly" in table.status[0]


@settings(max_examples=60, deadline=None)
@given(
    counts=st.lists(st.integers(0, 2000), min_size=1, max_size=60),
    axis=st.sampled_from(["linear", "logarithmic"]),
    asked=st.booleans(),
    background=st.sampled_from(["none", "constant", "linear", "exponential", "power_law"]),
)
def test_no_histogram_breaks_the_fit(counts, axis, asked, background):
    edges = np.linspace(0.1, 3, len(counts) + 1)
    edges = 10 ** (edges - 3) if axis == "logarithmic" else edges
    peaks = [{"position_g0": float(edges[len(edges) // 2])}] if asked else []
    found = fit(counts, edges, axis, peaks=peaks, background=background)
    assert len(found.table) >= 1
    assert all(str(status) for status in found.table.status)
    assert len(found.components) == len(found.table)


@pytest.mark.parametrize("scale", [1e-6, 1e3])
def test_positions_follow_the_unit_of_conductance(scale):
    """The same histogram on a logarithmic axis shifted by decades gives shifted positions below one quantum."""
    edges = 10 ** np.linspace(-5, -2, 151)
    u = np.log10(edges)
    counts = drawn(normal(-3.5, 0.2, 3e4, u) + 100)
    here = fit(counts, edges, "logarithmic", peaks=[{"position_g0": 3e-4}]).table
    there = fit(counts, edges * scale, "logarithmic", peaks=[{"position_g0": 3e-4 * scale}]).table
    assert there.position_g0[0] == pytest.approx(scale * here.position_g0[0], rel=1e-6)


def test_a_record_with_drift_is_fitted_at_its_mean():
    matrix, _ = count_matrix(logarithmic(1), 2000, np.random.default_rng(6), Record(drift=0.05))
    table = fit_histogram(histogram_of(matrix), chosen(), bootstrap(matrix, 200, 1), matrix).table
    assert np.log10(table.position_g0[0]) == pytest.approx(-3.0, abs=0.03)


def test_the_result_does_not_change_from_run_to_run():
    matrix, _ = count_matrix(linear(2), 600, np.random.default_rng(8))
    once, again = (
        fit_histogram(histogram_of(matrix), chosen(), bootstrap(matrix, 60, 1), matrix).table for _ in range(2)
    )
    for name, column in once.columns().items():
        np.testing.assert_array_equal(column, again[name])


def test_a_peak_asked_for_where_there_are_too_few_bins_is_told():
    """Of two peaks asked for, the one at the end of the axis has no bins around it: a note says so."""
    counts = drawn(normal(0.96, 0.08, 3e4) + 30)
    asked = [{"position_g0": 0.96, "width": 0.08}, {"position_g0": float(EDGES[-1]) * 1.5, "width": 0.01}]
    found = fit(counts, peaks=asked)
    assert len(found.table) == 1
    assert any("asked for near" in note and "not fitted" in note for note in found.notes)
