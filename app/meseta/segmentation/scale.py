"""The variable in which the noise is the same everywhere."""

from __future__ import annotations

import numpy as np

from meseta.segmentation.results import NoiseModel
from meseta.segmentation.stretch_kernels import Scale

__all__ = ["scale_of"]


def scale_of(noise: NoiseModel, points: int = 1024) -> Scale:
    """Return the variance-stabilised variable y(g) of a noise model: dy/dg = 1 / long-run sigma(g), odd in g.

    Where the noise is a constant plus a share of g this is the asinh of g over the floor's sigma (up to factors); in
    general it is integrated from the noise model.  g = conductance - floor, so negative readings stay, and one unit of
    y is one long-run standard deviation at every conductance.

    Returns
    -------
    Scale
        y on ``points`` even steps of asinh(g / sigma), and the variance of a single sample over the long-run variance.
    """
    sigma = noise.floor_sigma_g0
    top = np.arcsinh(1e3 * max(float(noise.level_g0[-1]), sigma) / sigma)
    at, pitch = np.linspace(0.0, top, points, retstep=True)
    g = np.sinh(at) * sigma
    slope = np.sqrt(g**2 + sigma**2) / noise.long_run(g)
    table = np.concatenate([[0.0], np.cumsum(0.5 * (slope[1:] + slope[:-1]) * pitch)])
    shares = np.minimum((noise.sigma(g) / noise.long_run(g)) ** 2 + 0.1, 1.0)
    return Scale(noise.floor_g0, sigma, float(noise.long_run_g0[0]), float(pitch), table, shares)
