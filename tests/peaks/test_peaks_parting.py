"""One peak or two, what is said of peaks that are not fitted, and neighbours that keep their places in refits."""

from __future__ import annotations

import numpy as np
import pytest
from peaks_synthetic import Population, Record, bootstrap, count_matrix, histogram_of, linear, logarithmic

from meseta import Recipe, TraceSet
from meseta.analysis import Analysis
from meseta.peaks import fit_histogram
from meseta.peaks.fitting import fit_model, refit
from meseta.peaks.model import Model
from meseta.work import Work

FWHM = 2.3548


def pair(distance_fwhm, axis="logarithmic"):
    width = np.hypot(0.18, 0.05)
    low, high, place = (-6.0, -1.0, -3.5) if axis == "logarithmic" else (0.2, 5.2, 2.0)
    return Population(
        axis, low, high, 250, (place, place + distance_fwhm * FWHM * width), (0.18, 0.18), (0.4, 0.4), (120, 120), 0.05,
        80, 1.5,
    )  # fmt: skip


def proposed(population, traces, seed, record=None, **settings):
    matrix, _ = count_matrix(population, traces, np.random.default_rng(seed), record)
    wanted = Recipe().with_values("peaks", **settings).peaks
    return fit_histogram(histogram_of(matrix), wanted, bootstrap(matrix, 60, seed), matrix)


@pytest.mark.parametrize("axis", ["linear", "logarithmic"])
def test_two_peaks_one_full_width_apart_are_two_and_said_to_overlap(axis):
    planted = pair(1.0, axis)
    for seed in (3, 5):  # records in which the search of hills alone sees one
        table = proposed(planted, 2000, seed).table
        place = np.log10(table.position_g0) if axis == "logarithmic" else table.position_g0
        assert len(place) == 2
        np.testing.assert_allclose(place, planted.position, atol=0.06)
    near = proposed(pair(0.9, axis), 2000, 3).table
    assert len(near) == 1 or all("overlap" in str(status) or status == "ok" for status in near.status)


@pytest.mark.parametrize(
    "record", [None, Record(memory_traces=20.0), Record(drift=0.1)], ids=["iid", "memory", "drift"]
)
def test_one_kind_of_junction_is_not_parted(record):
    assert [len(proposed(logarithmic(1), 1000, seed, record).table) for seed in range(4)] == [1] * 4
    assert [len(proposed(linear(2), 1000, seed, record).table) for seed in range(2)] == [2] * 2


def test_a_peak_too_many_is_named():
    planted = Population(
        "linear", 0.2, 5.2, 250, (0.95, 1.85, 2.75, 3.65), (0.06, 0.1, 0.13, 0.15), (0.9, 0.8, 0.7, 0.6),
        (120, 100, 90, 80), 0.03, 60, 1.0,
    )  # fmt: skip
    fit = proposed(planted, 800, 1, most=3)
    np.testing.assert_allclose(fit.table.position_g0, planted.position[:3], atol=0.03)
    assert len(fit.notes) == 1
    assert "3.6" in fit.notes[0] or "3.7" in fit.notes[0]
    assert "peaks.most" in fit.notes[0]
    assert proposed(planted, 800, 1).notes == ()


def test_a_peak_at_an_unfinished_end_is_not_taken_for_one():
    """Openings begin at 8 G0, so that every trace leaves samples below it: the fourth contact comes first."""
    planted = Population(
        "linear", 0.2, 8.2, 400, (0.98, 1.93, 2.85, 3.7, 6.8), (0.08, 0.12, 0.15, 0.18, 0.35),
        (0.9, 0.8, 0.7, 0.5, 1.0), (120, 100, 90, 70, 200), 0.03, 60, 1.0,
    )  # fmt: skip
    fit = proposed(planted, 800, 2)
    np.testing.assert_allclose(fit.table.position_g0, planted.position[:4], atol=0.05)
    assert "near 6." in fit.notes[0]


def test_neighbours_do_not_swap_in_refits():
    """A wide and a narrow peak closer than the wide one's width: every refit keeps the narrow one narrow."""
    edges = np.linspace(0.0, 4.0, 201)
    model = Model(
        "gaussian", "constant", edges[:-1].copy(), edges[1:].copy(), False, np.array([1.9, 2.1]), np.array([0.3, 0.06]),
        np.zeros(2), np.full(2, 4.0), np.full(2, 0.01), np.full(2, 2.0), np.zeros(2, bool), np.zeros(2, bool),
    )  # fmt: skip
    truth = np.array([6000.0, 2.0, 0.4, 0.0, 700.0, 2.0, 0.05, 0.0, 200.0, 0.0])
    expected = model.curves(truth).total
    many = np.random.default_rng(1).poisson(expected, (300, 200)).astype(float)
    again = refit(fit_model(model, expected), many, Work(threads=1))
    assert again.good.mean() > 0.98
    found = again.peaks[again.good]
    assert (found[:, 1, 1] - found[:, 0, 1] < 0).any()  # the narrow one lies on either side of the wide one
    assert (found[:, 0, 2] > 0.2).all()
    assert (found[:, 1, 2] < 0.15).all()


# -- recordings without an answer -------------------------------------------------------------------------------------


@pytest.mark.parametrize("preset", ["metal", "molecule"])
@pytest.mark.parametrize("kind", ["zeros", "one value", "noise"])
def test_recordings_without_a_peak_end_in_a_verdict(kind, preset):
    rng = np.random.default_rng(1)
    rows = {
        "zeros": [np.zeros(300) for _ in range(40)],
        "one value": [np.full(300, 1.0) for _ in range(40)],
        "noise": [rng.normal(0, 1e-6, 300) for _ in range(40)],
    }[kind]
    recipe = Recipe.preset(preset).with_values("resampling", replicates=40)
    fit = Analysis(TraceSet.from_arrays(rows, step_nm=0.002), recipe).result("peaks")
    table = fit.table
    assert len(table) == 1
    assert table.status[0] != "ok"
    assert np.isnan(table.position_g0[0])
