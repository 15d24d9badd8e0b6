"""The compiled fit against certified regressions: NIST Statistical Reference Datasets, www.itl.nist.gov/div898/strd.

The data are points, the fit integrates over bins; bins of a thousandth of the spacing make the two equal to 1e-9.
"""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from meseta.peaks.fitting import fit_model
from meseta.peaks.lines import fit_line
from meseta.peaks.model import Model

NIST = Path(__file__).parents[1] / "reference" / "nist"
NARROW = 1e-3


def certified(name: str):
    """Return starts (2, n), certified values, certified standard deviations, residual sum of squares, x, y."""
    text = (NIST / f"{name}.dat").read_text()
    number = r"[-+]?\d+\.?\d*(?:E[-+]?\d+)?"
    rows = re.findall(rf"^\s*b\d+ =\s+({number})\s+({number})\s+({number})\s+({number})", text, re.MULTILINE)
    table = np.array(rows, float)
    squares = float(re.search(rf"Residual Sum of Squares:\s+({number})", text).group(1))
    data = np.array([line.split() for line in text[text.rindex("Data:") :].splitlines()[1:] if line.strip()], float)
    return table[:, :2].T, table[:, 2], table[:, 3], squares, data[:, 1], data[:, 0]


def gaussians(x) -> Model:
    """Return two Gaussians on an exponential over narrow bins at the points."""
    nothing, everything = np.full(2, -1e3), np.full(2, 1e3)
    no = np.zeros(2, bool)
    return Model(
        "gaussian",
        "exponential",
        x - NARROW / 2,
        x + NARROW / 2,
        False,
        np.array([70.0, 150.0]),
        np.array([15.0, 15.0]),
        nothing,
        everything,
        np.full(2, 0.01),
        everything,
        no,
        no,
    )


def to_inner(b, model: Model):
    """Return the fit's parameters for NIST's."""
    low, high = model.range_u
    span, middle = high - low, (low + high) / 2
    inner = np.zeros(10)
    for peak, (height, centre, width) in enumerate((b[2:5], b[5:8])):
        inner[4 * peak : 4 * peak + 3] = np.sqrt(np.pi) * height * width, centre, width / np.sqrt(2)
    inner[8:] = b[0] * np.exp(-b[1] * middle), b[1] * span
    return inner


def from_inner(inner, model: Model):
    """Return NIST's parameters for the fit's."""
    low, high = model.range_u
    span, middle = high - low, (low + high) / 2
    b = [inner[8] * np.exp(inner[9] * middle / span), inner[9] / span]
    for area, centre, width in (inner[:3], inner[4:7]):
        b += [area / (np.sqrt(2 * np.pi) * width), centre, np.sqrt(2) * width]
    return np.array(b)


@pytest.mark.parametrize("start", [0, 1])
@pytest.mark.parametrize("name", ["Gauss1", "Gauss2", "Gauss3"])
def test_two_gaussians_on_an_exponential_reach_the_certified_values(name, start):
    starts, values, deviations, squares, x, y = certified(name)
    model = gaussians(x)
    fitted = fit_model(model, y * NARROW, np.full(len(x), NARROW**-2), to_inner(starts[start], model))
    assert fitted.converged
    found = from_inner(fitted.inner, model)
    np.testing.assert_allclose(found, values, rtol=1e-6)
    assert fitted.score == pytest.approx(squares, rel=1e-8)
    free = fitted.free
    change = np.empty((8, len(free)))
    for column, index in enumerate(free):
        step = np.zeros(10)
        step[index] = 1e-6 * abs(fitted.inner[index])
        change[:, column] = (from_inner(fitted.inner + step, model) - from_inner(fitted.inner - step, model)) / (
            2 * step[index]
        )
    covariance = change @ fitted.covariance @ change.T * fitted.score / fitted.degrees_of_freedom
    assert fitted.degrees_of_freedom == 242
    np.testing.assert_allclose(np.sqrt(np.diag(covariance)), deviations, rtol=1e-4)


def norris():
    text = (NIST / "Norris.dat").read_text()
    lines = text[text.rindex("Data:") :].splitlines()[1:]
    data = np.array([line.split() for line in lines if line.strip()], float)
    return data[:, 1], data[:, 0]


def test_a_straight_line_reaches_the_certified_values_of_norris():
    x, y = norris()
    line = fit_line(x, y)
    assert line.intercept == pytest.approx(-0.262323073774029, rel=1e-9)
    assert line.slope == pytest.approx(1.00211681802045, rel=1e-12)
    assert line.intercept_sigma == pytest.approx(0.232818234301152, rel=1e-9)
    assert line.slope_sigma == pytest.approx(0.429796848199937e-3, rel=1e-9)
    assert line.chi_square == pytest.approx(26.6173985294224, rel=1e-9)
    assert line.freedom == 34


def test_the_compiled_fit_of_a_linear_background_reaches_norris_too():
    x, y = norris()
    order = np.argsort(x, kind="stable")
    x, y = x[order], y[order]
    none = np.empty(0)
    model = Model(
        "gaussian", "linear", x - NARROW / 2, x + NARROW / 2, False, *(none,) * 6, np.empty(0, bool), np.empty(0, bool)
    )
    lift = 10.0  # a background is never negative, the certified line is at its lower end
    fitted = fit_model(model, (y + lift) * NARROW, np.full(len(x), NARROW**-2))
    low, high = model.range_u
    at_low, at_high = fitted.inner
    slope = (at_high - at_low) / (high - low)
    assert slope == pytest.approx(1.00211681802045, rel=1e-7)
    assert at_low - slope * low - lift == pytest.approx(-0.262323073774029, rel=1e-5)
    assert fitted.score == pytest.approx(26.6173985294224, rel=1e-6)
