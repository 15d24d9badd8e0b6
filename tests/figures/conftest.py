"""Made-up results: a metal on a linear axis, a molecule on a logarithmic one, and a small simulated recording."""

from __future__ import annotations

import numpy as np
import pytest
from figure_fakes import bell, make_displacement, make_fit, make_grid, make_histogram

from meseta.analysis import Analysis
from meseta.recipe import Recipe
from meseta.simulate import SimulationSettings, simulate


@pytest.fixture
def molecule():
    """Histogram, 2D histogram and fit of a molecule whose floor dwarfs its peak."""
    rng = np.random.default_rng(3)
    grid = make_grid("logarithmic", -7, 0, 0.02)
    u = (grid.u_edges[1:] + grid.u_edges[:-1]) / 2
    density = 0.25 * bell(u, -3.4, 0.25) + 0.02 * np.exp(-0.5 * (u + 3.5)) + 3 * bell(u, -6.2, 0.2)
    histogram = make_histogram(grid, density, 1388, "nm / trace / decade", rng)
    fit = make_fit(
        histogram, [4.0e-4], [0.25], [0.25], -5.0, -2.0, lambda c: 0.02 * np.exp(-0.5 * (c + 3.5)), relative=0.05
    )
    plane = make_displacement(
        grid,
        -0.5,
        2.0,
        250,
        lambda z, u: (
            8 * np.exp(-0.5 * ((u + 3.4 + 0.3 * z) / 0.3) ** 2) * (z > 0) * np.exp(-z / 0.6)
            + 20 * np.exp(-0.5 * ((u + 1 + 10 * z) / 0.4) ** 2) * (z > 0)
            + 50 * np.exp(-0.5 * ((u + 6.2) / 0.2) ** 2) * (z > 0.5)
        ),
        rng,
    )
    return histogram, plane, fit


@pytest.fixture
def metal():
    """Histogram, 2D histogram and fit of three peaks of a metal."""
    rng = np.random.default_rng(4)
    grid = make_grid("linear", 0.0, 5.0, 0.01)
    u = (grid.u_edges[1:] + grid.u_edges[:-1]) / 2
    density = 0.25 * bell(u, 0.97, 0.07) + 0.18 * bell(u, 1.85, 0.16) + 0.14 * bell(u, 2.75, 0.22) + 0.08 * (u > 0.2)
    histogram = make_histogram(grid, density, 9812, "nm / trace / G0", rng)
    fit = make_fit(
        histogram, [0.97, 1.85, 2.75], [0.07, 0.16, 0.22], [0.25, 0.18, 0.14], 0.5, 3.5, lambda c: np.full_like(c, 0.08)
    )
    plane = make_displacement(
        grid,
        -1.5,
        0.5,
        200,
        lambda z, u: (
            12
            * sum(
                np.exp(-0.5 * ((u - n * 0.93) / (0.1 * n)) ** 2) * np.exp(-0.5 * ((z + 0.3 * n) / 0.3) ** 2)
                for n in (1, 2, 3, 4)
            )
        ),
        rng,
    )
    return histogram, plane, fit


@pytest.fixture(scope="session")
def analysis():
    """A small simulated recording of molecular junctions, worked through."""
    traces = simulate("molecule", 160, 5, SimulationSettings(samples=1500, yield_share=0.8)).traces
    recipe = Recipe.preset("molecule").with_values("resampling", replicates=60)
    return Analysis(traces, recipe.with_values("correlation", permutations=20))
