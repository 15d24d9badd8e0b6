"""The compiled fit against a plain numpy twin, numerical integrals, and iminuit."""

from __future__ import annotations

from itertools import pairwise

import iminuit.cost
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from iminuit import Minuit
from scipy import integrate, stats

from meseta.peaks import kernels, line_kernels
from meseta.peaks.fitting import fit_model, refit
from meseta.peaks.model import Model
from meseta.work import Work

EDGES = np.linspace(0.4, 4.4, 161)
FWHM = 2 * np.sqrt(2 * np.log(2))


def model_with(position, width, background="exponential", shape="gaussian", edges=EDGES, logarithmic=False, **more):
    count = len(position)
    span = edges[-1] - edges[0]
    return Model(
        shape,
        background,
        edges[:-1].copy(),
        edges[1:].copy(),
        logarithmic,
        np.array(position, float),
        np.array(width, float),
        np.full(count, edges[0] - 1.0),
        np.full(count, edges[-1] + 1.0),
        np.full(count, 0.001),
        np.full(count, span),
        np.zeros(count, bool),
        np.zeros(count, bool),
        **more,
    )


def density(shape, u, position, width, extra):
    """Return the density of a unit peak at u, written without the kernel."""
    if shape == "gaussian":
        return stats.norm.pdf(u, position, width)
    half = width * FWHM / 2
    if shape == "lorentzian":
        return stats.cauchy.pdf(u, position, half)
    if shape == "pseudo_voigt":
        return (1 - extra) * stats.norm.pdf(u, position, width) + extra * stats.cauchy.pdf(u, position, half)
    side = width * np.where(u < position, 1 - extra, 1 + extra)
    return np.exp(-0.5 * ((u - position) / side) ** 2) / (np.sqrt(2 * np.pi) * width)


def smooth(background, u, edges, first, second):
    low, high = edges[0], edges[-1]
    t = (u - low) / (high - low)
    if background == "none":
        return 0.0 * u
    if background == "constant":
        return first + 0.0 * u
    if background == "linear":
        return first * (1 - t) + second * t
    if background == "exponential":
        return first * np.exp(-second * (t - 0.5))
    return first * (u / np.sqrt(low * high)) ** -second


@pytest.mark.parametrize("background", ["none", "constant", "linear", "exponential", "power_law"])
@pytest.mark.parametrize("shape", ["gaussian", "lorentzian", "pseudo_voigt", "skewed_gaussian"])
def test_bin_integrals_equal_numerical_integrals(shape, background):
    edges = EDGES[::20]
    model = model_with([1.3], [0.3], background, shape, edges)
    inner = np.array([500.0, 1.3, 0.3, 0.35, 40.0, 1.4])

    def whole(u):
        return 500 * density(shape, u, 1.3, 0.3, 0.35) + smooth(background, u, edges, 40.0, 1.4)

    expected = [
        integrate.quad(whole, a, b, points=[1.3] if a < 1.3 < b else None, epsabs=1e-11)[0] for a, b in pairwise(edges)
    ]
    np.testing.assert_allclose(model.curves(inner).total, expected, rtol=1e-9, atol=1e-10)


@pytest.mark.parametrize(
    ("shape", "background", "logarithmic", "more"),
    [
        ("gaussian", "exponential", False, {}),
        ("lorentzian", "power_law", False, {}),
        ("pseudo_voigt", "linear", False, {}),
        ("skewed_gaussian", "constant", False, {}),
        ("gaussian", "exponential", False, {"position_tie": "multiples", "equal_relative_widths": True}),
        ("gaussian", "exponential", False, {"position_tie": "ladder"}),
        ("gaussian", "exponential", True, {"position_tie": "ladder", "equal_relative_widths": True}),
        ("skewed_gaussian", "linear", True, {"position_tie": "multiples"}),
    ],
)
def test_analytic_gradients_equal_differences(shape, background, logarithmic, more):
    edges = np.linspace(-0.4, 0.9, 66) if logarithmic else EDGES
    model = model_with([1, 2, 3], [0.1, 0.2, 0.2], background, shape, edges, logarithmic, **more)
    base = 0.02 if logarithmic else 0.98
    inner = np.array([900, base, 0.12, 0.2, 500, 1.9, 0.15, 0.4, 300, 2.8, 0.2, 0.3, 25.0, 1.2])
    if more.get("position_tie") == "ladder":
        inner[5] = 0.03
    elif logarithmic and "position_tie" not in more:
        inner[5], inner[9] = 0.3, 0.5
    arguments = (model.layout(), model.numbers(), model.low, model.high, model.template_counts())
    _, slopes, _, chain = line_kernels.expected_counts(*arguments, inner)
    analytic = slopes @ chain
    for index in model.free():
        step = np.zeros(len(inner))
        step[index] = 1e-6 * max(abs(inner[index]), 0.1)
        above, below = (line_kernels.expected_counts(*arguments, inner + sign * step)[0] for sign in (1, -1))
        numeric = (above - below) / (2 * step[index])
        np.testing.assert_allclose(analytic[:, index], numeric, atol=2e-7 * max(np.abs(numeric).max(), 1.0))


def test_the_objective_is_the_published_deviance():
    """Baker, Cousins, Nucl. Instrum. Methods 221, 437 (1984): example computed there with iminuit's poisson_chi2."""
    counts, mu = np.array([3.0, 0.0, 5.0]), np.array([2.5, 0.7, 6.1])
    assert kernels._score(kernels.LIKELIHOOD, counts, np.ones(3), 1e-300, mu) == pytest.approx(1.705420753, abs=5e-10)
    assert iminuit.cost.poisson_chi2(counts, mu) == pytest.approx(1.705420753, abs=5e-10)


def three_peaks(seed: int = 5):
    model = model_with([1.0, 1.9, 2.8], [0.1, 0.15, 0.2])
    truth = np.array([8e3, 1.0, 0.1, 0, 6e3, 1.93, 0.16, 0, 4e3, 2.85, 0.2, 0, 2500, 1.2])
    counts = np.random.default_rng(seed).poisson(model.curves(truth).total).astype(float)
    return model, truth, counts


def test_iminuit_finds_the_same_minimum_and_errors():
    model, _, counts = three_peaks()
    fitted = fit_model(model, counts)

    def cumulative(edges, a1, p1, s1, a2, p2, s2, a3, p3, s3, b, k):
        total = sum(a * stats.norm.cdf(edges, p, s) for a, p, s in ((a1, p1, s1), (a2, p2, s2), (a3, p3, s3)))
        low, high = EDGES[0], EDGES[-1]
        t = (edges - low) / (high - low)
        return total - b * (high - low) / k * (np.exp(-k * (t - 0.5)) - np.exp(0.5 * k))

    cost = iminuit.cost.ExtendedBinnedNLL(counts, EDGES, cumulative)
    minuit = Minuit(cost, 7e3, 1.02, 0.12, 7e3, 1.9, 0.2, 5e3, 2.8, 0.25, 2000, 1.0)
    minuit.limits["s1", "s2", "s3"] = (0.01, 2)
    minuit.limits["a1", "a2", "a3", "b"] = (0, None)
    minuit.strategy = 2
    minuit.migrad()
    minuit.hesse()
    assert minuit.valid
    found = fitted.inner[fitted.free]
    sigma = np.sqrt(np.diag(fitted.covariance))
    np.testing.assert_allclose(found, np.array(minuit.values), atol=2e-3 * sigma.min(), rtol=2e-4)
    np.testing.assert_allclose(np.abs(found - np.array(minuit.values)) / sigma, 0, atol=0.01)
    np.testing.assert_allclose(sigma, np.array(minuit.errors), rtol=0.03)
    assert fitted.score == pytest.approx(minuit.fval, rel=1e-5)


def test_refits_are_fits_and_do_not_depend_on_threads():
    model, truth, counts = three_peaks()
    fitted = fit_model(model, counts)
    many = np.random.default_rng(1).poisson(model.curves(truth).total, (12, len(counts)))
    once = refit(fitted, many, Work(threads=1))
    again = refit(fitted, many, Work(threads=3))
    np.testing.assert_array_equal(once.peaks, again.peaks)
    assert once.good.all()
    sigma = np.sqrt(np.diag(fitted.covariance))[[1, 4, 7]]
    for row in range(12):
        alone = fit_model(model, many[row].astype(float))
        assert (np.abs(once.peaks[row, :, 1] - alone.peaks[:, 1]) < 1e-3 * sigma).all()


def test_positions_scatter_as_the_covariance_says():
    model, truth, counts = three_peaks()
    fitted = fit_model(model, counts)
    many = np.random.default_rng(2).poisson(model.curves(truth).total, (1500, len(counts)))
    found = refit(fitted, many, Work()).peaks[:, :, 1]
    sigma = np.sqrt(np.diag(fitted.covariance))[[1, 4, 7]]
    np.testing.assert_allclose(found.std(axis=0), sigma, rtol=0.08)
    assert (np.abs(found.mean(axis=0) - truth[[1, 5, 9]]) < 0.15 * sigma).all()


def test_refits_of_overlapping_peaks_keep_their_order():
    model = model_with([1.0, 1.25], [0.1, 0.25])
    truth = np.array([900, 1.0, 0.1, 0, 2500, 1.3, 0.25, 0, 20, 0.5])
    fitted = fit_model(model, model.curves(truth).total)
    many = np.random.default_rng(3).poisson(model.curves(truth).total, (300, len(model.low)))
    found = refit(fitted, many, Work())
    narrow, wide = found.peaks[found.good, 0, 2], found.peaks[found.good, 1, 2]
    assert (narrow < wide).mean() > 0.95


def test_a_tied_ladder_finds_the_resistance():
    """Positions behind 400 ohm, from g_m = g_c / (1 + rho g_c)."""
    rho = 400 / 12906.403729652257
    positions = [n / (1 + rho * n) for n in (1, 2, 3)]
    free = model_with(positions, [0.1, 0.14, 0.18])
    truth = np.array([8e5, positions[0], 0.1, 0, 6e5, positions[1], 0.14, 0, 5e5, positions[2], 0.18, 0, 1e4, 1.0])
    counts = free.curves(truth).total
    tied = model_with([1.0, 2.0, 3.0], [0.1, 0.14, 0.18], position_tie="ladder")
    fitted = fit_model(tied, counts)
    assert fitted.converged
    assert fitted.inner[1] == pytest.approx(1.0, abs=1e-6)
    assert fitted.inner[5] == pytest.approx(rho, abs=1e-6)
    np.testing.assert_allclose(fitted.peaks[:, 1], positions, atol=1e-6)


def test_fixed_and_bounded_parameters_stay_where_they_must():
    model, _, counts = three_peaks()
    from dataclasses import replace

    fixed = replace(model, fixed_position=np.array([True, False, False]), position_u=np.array([1.02, 1.9, 2.8]))
    assert fit_model(fixed, counts).peaks[0, 1] == 1.02
    bounded = replace(model, position_high=np.array([0.98, 5, 5]))
    fitted = fit_model(bounded, counts)
    assert fitted.peaks[0, 1] == pytest.approx(0.98, abs=1e-12)


@settings(max_examples=25, deadline=None)
@given(scale=st.sampled_from([1e-6, 1e-3, 1.0, 1e4]), seed=st.integers(0, 50))
def test_the_fit_does_not_know_the_unit_of_the_axis(scale, seed):
    """The same counts on an axis a millionth as long give the same fit."""
    model, _, counts = three_peaks(seed)
    from dataclasses import replace

    fitted = fit_model(model, counts)
    other = replace(
        model,
        low=model.low * scale,
        high=model.high * scale,
        position_u=model.position_u * scale,
        width_u=model.width_u * scale,
        position_low=model.position_low * scale,
        position_high=model.position_high * scale,
        width_low=model.width_low * scale,
        width_high=model.width_high * scale,
    )
    again = fit_model(other, counts)
    np.testing.assert_allclose(again.peaks[:, 1] / scale, fitted.peaks[:, 1], rtol=1e-6)
    assert again.score == pytest.approx(fitted.score, rel=1e-9)


def test_counts_are_not_written_to():
    model, _, counts = three_peaks()
    counts.setflags(write=False)
    before = counts.copy()
    fit_model(model, counts)
    np.testing.assert_array_equal(counts, before)
