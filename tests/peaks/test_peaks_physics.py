"""Series resistance, decay constant, channels, formation, published values: against the worked examples.

Worked values: tests/reference/reference_values.json (each entry names its source); the decay series is that of Xu, Tao,
Science 301, 1221 (2003).
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize

from meseta.errors import CallError, InputError
from meseta.peaks import (
    DecayPoints,
    assignment,
    channels_at_least,
    decay,
    formation_probability,
    published,
    read_points,
    series_resistance,
)
from meseta.peaks.lines import fit_line

REFERENCE = Path(__file__).parents[1] / "reference" / "reference_values.json"
VALUES = {entry["name"]: entry for entry in json.loads(REFERENCE.read_text())["values"]}
POSITIONS, SIGMAS = [0.97, 1.88, 2.74], [0.01, 0.02, 0.03]


def agrees(found: float, sigma: float, name: str) -> None:
    assert found == pytest.approx(VALUES[name]["value"], rel=1e-9)
    assert sigma == pytest.approx(VALUES[name]["uncertainty"], rel=1e-9)


def test_resistance_with_free_unit_unweighted():
    found = series_resistance(POSITIONS)
    agrees(found.resistance_ohm, found.sigma_ohm, "series.fit.unweighted.R_s")
    agrees(found.slope_ohm, found.slope_sigma_ohm, "series.fit.unweighted.slope")
    agrees(found.unit_g0, found.unit_sigma_g0, "series.fit.unweighted.a")
    assert not found.absolute


def test_resistance_with_free_unit_weighted():
    found = series_resistance(POSITIONS, SIGMAS)
    agrees(found.resistance_ohm, found.sigma_ohm, "series.fit.weighted.R_s")
    agrees(found.slope_ohm, found.slope_sigma_ohm, "series.fit.weighted.slope")
    assert found.unit_g0 == pytest.approx(1.000820534, abs=5e-10)
    assert found.unit_sigma_g0 == pytest.approx(0.016691627, abs=5e-10)
    assert found.chi_square == pytest.approx(VALUES["series.fit.weighted.chi2"]["value"], rel=1e-9)


def test_resistance_with_the_unit_held():
    found = series_resistance(POSITIONS, unit_held=True)
    agrees(found.resistance_ohm, found.sigma_ohm, "series.fixed_slope.unweighted.R_s")
    found = series_resistance(POSITIONS, SIGMAS, unit_held=True)
    agrees(found.resistance_ohm, found.sigma_ohm, "series.fixed_slope.weighted.R_s")
    assert found.chi_square == pytest.approx(VALUES["series.fixed_slope.weighted.chi2"]["value"], rel=1e-9)


def test_exact_positions_give_the_exact_resistance_in_every_peak():
    exact = VALUES["series.measured_of_1to3_true_400ohm"]["value"]
    found = series_resistance(exact)
    assert found.resistance_ohm == pytest.approx(400, rel=1e-9)
    assert found.unit_g0 == pytest.approx(1, rel=1e-12)
    np.testing.assert_allclose(found.per_peak_ohm, 400, rtol=1e-9)


def test_peaks_that_disagree_show_in_the_resistance_of_each():
    found = series_resistance([0.97, 1.80, 2.5], SIGMAS, unit_held=True)
    assert np.all(np.diff(found.per_peak_ohm) > 0)
    np.testing.assert_allclose(
        found.per_peak_sigma_ohm, np.array(SIGMAS) / np.array([0.97, 1.80, 2.5]) ** 2 * 12906.4037
    )


@pytest.mark.parametrize("bad", [[1.0], [1.0, -2.0], [1.0, np.nan]])
def test_resistance_refuses_what_it_cannot_use(bad):
    with pytest.raises(CallError):
        series_resistance(bad)


def xu_tao(errors: bool = True, length_error: float = np.nan) -> DecayPoints:
    ohm, sigma = np.array([10.5e6, 51e6, 630e6]), np.array([0.5e6, 5e6, 50e6])
    conductance = 12906.403729652257 / ohm
    return DecayPoints(
        np.array([6.0, 8.0, 10.0]),
        conductance,
        np.full(3, length_error),
        conductance * sigma / ohm if errors else np.full(3, np.nan),
        np.array(["hexanedithiol", "octanedithiol", "decanedithiol"]),
        "carbon",
    )


def test_decay_without_errors():
    found = decay(xu_tao(errors=False))
    agrees(found.beta, found.beta_sigma, "xu_tao.beta_N.unweighted")
    agrees(found.log_contact, found.log_contact_sigma, "xu_tao.intercept.unweighted")
    assert found.beta == pytest.approx(np.log(60) / 4, rel=1e-12)
    assert found.chi_square == pytest.approx(0.145219558, abs=5e-10)
    assert any("weigh the same" in note for note in found.notes)


def test_decay_with_errors_absolute_and_scaled():
    found = decay(xu_tao())
    agrees(found.beta, found.beta_sigma, "xu_tao.beta_N.weighted")
    agrees(found.log_contact, found.log_contact_sigma, "xu_tao.intercept.weighted")
    assert found.beta_sigma_scaled == pytest.approx(VALUES["xu_tao.beta_N.weighted.scaled_sigma"]["value"], rel=1e-9)
    assert found.log_contact_sigma_scaled == pytest.approx(0.720898675, abs=5e-10)
    assert found.chi_square == pytest.approx(VALUES["xu_tao.weighted.chi2"]["value"], rel=1e-9)
    assert found.freedom == 1
    assert any("do not lie on one line" in note for note in found.notes)
    assert abs(found.beta - VALUES["xu_tao.beta_N.published"]["value"]) < 0.1
    assert found.beta_low < found.beta < found.beta_high


def test_pairwise_slopes():
    points = xu_tao()
    for rows, slope in (((0, 1), 0.790225188), ((1, 2), 1.256947093)):
        rows = list(rows)
        pair = DecayPoints(
            points.length[rows],
            points.conductance_g0[rows],
            points.length_error[rows],
            points.conductance_error_g0[rows],
            points.label[rows],
            "carbon",
        )
        found = decay(pair)
        assert found.beta == pytest.approx(slope, abs=5e-10)
        assert any("two points" in note for note in found.notes)


def test_errors_in_both_coordinates_are_the_least_of_the_effective_chi_square():
    """scipy's general minimiser as referee, on the chi-square with variances sigma_y² + slope² sigma_x²."""
    x = np.array([0.9, 1.2, 1.5, 1.9, 2.2, 2.6])
    y = np.array([-6.1, -7.3, -8.6, -9.9, -11.4, -12.6])
    sx, sy = np.array([0.05, 0.08, 0.05, 0.1, 0.06, 0.05]), np.array([0.2, 0.15, 0.3, 0.2, 0.25, 0.2])

    def chi_square(line):
        return float((((y - line[0] - line[1] * x) ** 2) / (sy**2 + (line[1] * sx) ** 2)).sum())

    line = fit_line(x, y, sy, sx)
    referee = optimize.minimize(
        chi_square, [-3.0, -4.0], method="Nelder-Mead", options={"xatol": 1e-10, "fatol": 1e-13}
    )
    np.testing.assert_allclose([line.intercept, line.slope], referee.x, rtol=1e-6)
    assert line.chi_square == pytest.approx(referee.fun, rel=1e-9)
    random = np.random.default_rng(1)
    truth = line.intercept + line.slope * x
    many = [
        fit_line(x + sx * random.standard_normal(6), truth + sy * random.standard_normal(6), sy, sx)
        for _ in range(3000)
    ]
    assert np.std([one.slope for one in many]) == pytest.approx(line.slope_sigma, rel=0.06)
    assert np.std([one.intercept for one in many]) == pytest.approx(line.intercept_sigma, rel=0.06)


def test_errors_of_length_widen_the_decay_constant():
    assert decay(xu_tao(length_error=0.2)).beta_sigma > decay(xu_tao()).beta_sigma


def test_the_band_is_narrowest_at_the_points_and_holds_the_line():
    found = decay(xu_tao())
    middle, low, high = found.band([0.0, 7.0, 20.0])
    assert (low < middle).all()
    assert (middle < high).all()
    ratio = np.log(high / low)
    assert ratio[1] < ratio[0] < ratio[2]
    assert middle[0] == pytest.approx(found.contact_g0, rel=1e-12)
    assert low[0] == pytest.approx(found.contact_low_g0, rel=1e-12)


@settings(max_examples=40, deadline=None)
@given(beta=st.floats(0.05, 3), contact=st.floats(-4, 2), unit=st.sampled_from([1.0, 0.1, 10.0]))
def test_exact_series_give_the_exact_constant_in_any_unit(beta, contact, unit):
    length = np.array([2.0, 4.0, 6.0, 8.0]) * unit
    conductance = np.exp(contact - beta * length / unit)
    nan = np.full(4, np.nan)
    found = decay(DecayPoints(length, conductance, nan, 0.1 * conductance, np.array(["", "", "", ""]), "nm"))
    assert found.beta * unit == pytest.approx(beta, rel=1e-9)
    assert found.log_contact == pytest.approx(contact, abs=1e-9)


def test_points_are_read_from_a_file(tmp_path):
    path = tmp_path / "series.csv"
    path.write_text(
        "# alkanes\nlabel,length,conductance_g0,conductance_error_g0,length_error\n"
        "six,6,1.229e-3,5.9e-5,\neight,8,2.53e-4,2.5e-5,\n\nten,10,2.05e-5,1.6e-6,\n"
    )
    points = read_points(path, "carbon")
    np.testing.assert_array_equal(points.length, [6, 8, 10])
    assert list(points.label) == ["six", "eight", "ten"]
    assert np.isnan(points.length_error).all()
    assert decay(points).beta == pytest.approx(1.0, abs=0.05)


@pytest.mark.parametrize(
    ("encoding", "text"),
    [
        ("utf-16", 'length;conductance_g0;label\n1,5;0,1;a\n2;0,01;"b;c"\n'),
        ("latin-1", "# alkanes, \u00e4ltere\r\nlength\tconductance_g0\r\n1.5\t0.1\r\n2\t0.01\r\n"),
        ("utf-8-sig", "length conductance_g0\n1.5 0.1\n2 1e-2\n"),
    ],
)
def test_points_are_read_from_texts_of_any_kind(tmp_path, encoding, text):
    path = tmp_path / "series.txt"
    path.write_bytes(text.encode(encoding))
    points = read_points(path)
    np.testing.assert_array_equal(points.length, [1.5, 2.0])
    np.testing.assert_array_equal(points.conductance_g0, [0.1, 0.01])


@pytest.mark.parametrize(
    ("text", "place", "word"),
    [
        ("", "", "empty"),
        ("length,conductance_g0\n", "", "no points"),
        ("length,conductance\n1,2\n", "", "conductance_g0"),
        ("length,conductance_g0,colour\n1,2,3\n", "", "colour"),
        ("length,conductance_g0\n1,abc\n", "line 2", "abc"),
        ("length,conductance_g0\n1,1e-3\n2,\n", "line 3", "not a number"),
        ("length,conductance_g0\n1,nan\n", "line 2", "finite"),
        ("length,conductance_g0\n1,2,3\n", "line 2", "cells"),
    ],
)
def test_faulty_files_are_told_by_line(tmp_path, text, place, word):
    path = tmp_path / "points.csv"
    path.write_text(text)
    with pytest.raises(InputError) as caught:
        read_points(path)
    assert word in str(caught.value)
    assert place in caught.value.where


@pytest.mark.parametrize(
    ("lengths", "conductances"), [([1.0, 1.0], [1e-3, 2e-3]), ([1.0, 2.0], [1e-3, -2e-3]), ([1.0, 2.0], [1e-3, 0.0])]
)
def test_points_without_a_line_are_refused(lengths, conductances):
    nan = np.full(2, np.nan)
    with pytest.raises(InputError):
        decay(DecayPoints(np.array(lengths), np.array(conductances), nan, nan, np.array(["", ""]), "nm"))


@pytest.mark.parametrize(("conductance", "channels"), [(0.3, 1), (1.0, 1), (1.01, 1), (1.5, 2), (2.9, 3), (np.nan, 0)])
def test_channels_are_at_least_the_conductance(conductance, channels):
    assert channels_at_least(conductance) == channels


def test_a_name_of_the_user_comes_before_a_multiple():
    assert assignment(0.98, {}) == "1 G0 (-2.0 %)"
    assert assignment(0.98, {"chain": 1.0}) == "chain (-2.0 %)"
    assert assignment(2e-4, {"high": 2.5e-4, "low": 5e-5}) == "high (-20.0 %)"
    assert assignment(0.3, {}) == ""
    assert assignment(np.nan, {"high": 1.0}) == ""


def test_formation_is_put_right_for_blank_and_misses():
    plain = formation_probability(300, 1000)
    assert plain.probability == pytest.approx(0.3)
    assert plain.share_low < 0.3 < plain.share_high
    right = formation_probability(300, 1000, 20, 1000, efficiency=0.8)
    assert right.probability == pytest.approx((0.3 - 0.02) / (0.8 * 0.98))
    assert right.probability_high - right.probability_low > plain.probability_high - plain.probability_low
    fewer = formation_probability(300, 1000, independent_share=0.1)
    assert fewer.share_high - fewer.share_low > 2 * (plain.share_high - plain.share_low)


def test_formation_interval_is_that_of_jeffreys():
    """Brown, Cai, DasGupta, Statist. Sci. 16, 101 (2001): quantiles of Beta(x + 1/2, n - x + 1/2)."""
    from scipy import stats

    found = formation_probability(7, 40)
    assert found.share_low == pytest.approx(stats.beta.ppf(0.025, 7.5, 33.5), rel=1e-12)
    assert found.share_high == pytest.approx(stats.beta.ppf(0.975, 7.5, 33.5), rel=1e-12)
    assert formation_probability(0, 40).probability_low == 0


@pytest.mark.parametrize("call", [(5, 0), (5, 4), (-1, 4)])
def test_impossible_shares_are_refused(call):
    with pytest.raises(CallError):
        formation_probability(*call)


def test_published_values_agree_with_the_reference_file():
    """Only what the reference file marks as published may stand in the table."""
    by_name = {
        ("Ag", 0.4): "peak.Ag.RT.oxygen_low",
        ("Ag", 1.3): "peak.Ag.RT.oxygen_high",
        ("Pt", 1.5): "peak.Pt.low_bias",
        ("Pt", 1.8): "peak.Pt.bias_above_300mV",
        ("benzene-1,4-diamine, Au", 6.4e-3): "benzenediamine.g",
    }
    table = {(value.system, value.middle_g0): value for value in published()}
    for key, name in by_name.items():
        assert VALUES[name]["kind"] == "published"
        assert table[key].middle_g0 == pytest.approx(VALUES[name]["value"])
    for molecule in ("hexanedithiol", "octanedithiol", "decanedithiol", "4,4'-bipyridine"):
        (value,) = published(system=molecule)
        entry = VALUES[f"xu_tao.{molecule.removesuffix(' ').replace(chr(39), '')}.g"] if "bi" not in molecule else None
        entry = entry or VALUES["xu_tao.4,4-bipyridine.g"]
        assert value.middle_g0 == pytest.approx(entry["value"], rel=1e-8)
        assert value.sigma_g0 == pytest.approx(entry["uncertainty"], rel=1e-6)
    assert all(value.source for value in published())


def test_published_values_near_a_position_come_nearest_first():
    near = published(near_g0=1.02)
    distances = [value.decades_away(1.02) for value in near]
    assert near
    assert distances == sorted(distances)
    assert max(distances) <= 0.1
    assert published(near_g0=1e-8) == ()
    assert published(near_g0=float("nan")) == ()
