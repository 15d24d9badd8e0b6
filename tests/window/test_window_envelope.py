"""Envelopes cover what they stand for; tables of images keep empty cells empty."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from meseta.window.envelope import gapped, heights, reduced
from meseta.window.pictures import scaled_image


@given(st.integers(1, 3000), st.integers(4, 400), st.integers(0, 2**32 - 1))
def test_an_envelope_has_the_extremes_of_every_bin_and_few_points(samples, points, seed):
    random = np.random.default_rng(seed)
    g = random.normal(size=samples)
    curve = reduced(np.arange(samples, dtype=float), g, points)
    assert np.nanmin(curve.g0) == g.min()
    assert np.nanmax(curve.g0) == g.max()
    assert len(curve.g0) == len(curve.x)
    assert np.all(np.diff(curve.x) >= 0)
    assert len(curve.g0) <= 2 * points + 4


def test_bins_are_aligned_to_absolute_samples():
    g = np.sin(np.arange(1000) / 7.0)
    whole, part = reduced(np.arange(1000.0), g, 100), reduced(np.arange(800.0), g[:800], 80)
    assert np.array_equal(whole.g0[:60], part.g0[:60])


def test_missing_samples_break_the_line_only_where_all_are_missing():
    g = np.ones(1000)
    g[3], g[400:440] = np.nan, np.nan
    curve = reduced(np.arange(1000.0), g, 100)
    assert not np.isnan(curve.g0[:10]).any()
    assert np.isnan(curve.g0[40:44]).any()


def test_readings_at_or_below_zero_stand_at_the_bottom_of_the_logarithmic_axis():
    u = heights([1.0, 0.0, -1.0, np.nan, 1e-3], "logarithmic", -8.0)
    assert u[0] == 0 and u[1] == -8 and u[2] == -8 and np.isnan(u[3]) and abs(u[4] + 3) < 1e-12
    assert np.array_equal(heights([1.0, -1.0], "linear", 0.0), [1.0, -1.0])


def test_many_curves_become_one_with_gaps():
    one = gapped([reduced([0.0, 1.0], [1.0, 2.0], 10)] * 3)
    assert np.isnan(one.x).sum() == 3 and len(one.x) == 9
    assert len(gapped([]).x) == 0


@given(st.sampled_from(["linear", "square_root", "logarithmic"]), st.floats(1e-6, 1e6))
def test_zero_is_the_paper_and_anything_else_is_not(scale, factor):
    density = np.array([[0.0, 1e-4, 0.5], [1.0, np.nan, 2.0]]) * factor
    image = scaled_image(density, scale)
    assert np.array_equal(image == 0, ~(np.nan_to_num(density) > 0))
    assert image.max() == 255
    flat = image[density > 0]
    assert np.array_equal(np.argsort(flat, kind="stable"), np.argsort(density[density > 0], kind="stable"))
