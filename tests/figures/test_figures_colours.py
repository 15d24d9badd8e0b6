"""Ramps are even, palettes keep their meanings apart, published maps are the published ones."""

from __future__ import annotations

import matplotlib
import numpy as np
import pytest

from meseta import colours
from meseta.errors import CallError


def lab(rgb):
    """CIELAB by the formulas of CIE 15 (CIE 1976 L*a*b*) and IEC 61966-2-1, written apart from the program's own."""
    rgb = np.asarray(rgb, float)
    linear = np.where(rgb > 0.04045, ((rgb + 0.055) / 1.055) ** 2.4, rgb / 12.92)
    xyz = linear @ np.array([[0.4124, 0.2126, 0.0193], [0.3576, 0.7152, 0.1192], [0.1805, 0.0722, 0.9505]])
    relative = xyz / np.array([0.9505, 1.0, 1.089])
    f = np.where(relative > 216 / 24389, np.cbrt(relative), (24389 / 27 * relative + 16) / 116)
    return np.stack([116 * f[..., 1] - 16, 500 * (f[..., 0] - f[..., 1]), 200 * (f[..., 1] - f[..., 2])], -1)


def test_lab_of_known_colours():
    # White, black and the sRGB primaries in CIELAB (D65), to the digits commonly printed.
    known = {
        (1, 1, 1): (100, 0, 0),
        (0, 0, 0): (0, 0, 0),
        (1, 0, 0): (53.24, 80.09, 67.20),
        (0, 0, 1): (32.30, 79.19, -107.86),
    }
    for rgb, expected in known.items():
        assert np.allclose(colours.lab_of(rgb), expected, atol=0.05)
        assert np.allclose(lab(rgb), expected, atol=0.1)


@pytest.mark.parametrize("dark", [False, True])
@pytest.mark.parametrize("name", ["meseta", "grey"])
def test_lightness_is_even(name, dark):
    steps = np.diff(lab(colours.ramp(name, dark))[:, 0])
    assert np.all(steps > 0) if dark else np.all(steps < 0)
    assert np.abs(steps).max() < 1.1 * np.abs(steps).min()


@pytest.mark.parametrize("dark", [False, True])
def test_colour_differences_are_even_and_inside_the_gamut(dark):
    colour = colours.ramp("meseta", dark)
    difference = np.linalg.norm(np.diff(lab(colour), axis=0), axis=1)
    assert difference.max() < 1.6 * difference.min()
    assert np.allclose(colours.rgb_of(colours.lab_of(colour)), colour, atol=1e-6)


@pytest.mark.parametrize(("dark", "palette"), [(False, colours.LIGHT), (True, colours.DARK)])
def test_zero_is_the_paper(dark, palette):
    paper = colours.rgb_of_hex(palette.panel)
    assert np.allclose(colours.ramp("meseta", dark)[0], paper, atol=1e-6)
    assert np.allclose(colours.diverging(dark)[128], paper, atol=1e-6)


@pytest.mark.parametrize("dark", [False, True])
def test_diverging_is_symmetric_in_lightness(dark):
    colour = colours.diverging(dark)
    lightness = lab(colour)[:, 0]
    assert colour.shape == (257, 3)
    assert np.allclose(lightness, lightness[::-1], atol=0.2)
    # Blue-yellow (b*) and lightness are what red-green-blind readers keep: the ends differ there.
    assert lab(colour[-1])[2] - lab(colour[0])[2] > 35


@pytest.mark.parametrize("palette", [colours.LIGHT, colours.DARK])
def test_selected_and_fit_differ_without_red_and_green(palette):
    selected, fit = lab(colours.rgb_of_hex(palette.selected)), lab(colours.rgb_of_hex(palette.fit))
    assert abs(selected[2] - fit[2]) > 40


@pytest.mark.parametrize("palette", [colours.LIGHT, colours.DARK])
@pytest.mark.parametrize("name", ["ink", "quiet", "selected", "fit", "doubtful"])
def test_text_colours_have_contrast(palette, name):
    # WCAG 2.1, success criterion 1.4.3: contrast of text at least 4.5 to 1.
    def luminance(colour):
        rgb = colours.rgb_of_hex(colour)
        linear = np.where(rgb > 0.04045, ((rgb + 0.055) / 1.055) ** 2.4, rgb / 12.92)
        return float(linear @ [0.2126, 0.7152, 0.0722])

    one, other = sorted((luminance(getattr(palette, name)), luminance(palette.panel)))
    assert (other + 0.05) / (one + 0.05) >= 4.5


def test_groups_differ_in_symbol_and_colour():
    assert len({style.symbol for style in colours.GROUPS}) == len(colours.GROUPS)
    assert len({style.character for style in colours.GROUPS}) == len(colours.GROUPS)
    for attribute in ("light", "dark"):
        places = np.array([lab(colours.rgb_of_hex(getattr(style, attribute))) for style in colours.GROUPS])
        gaps = np.linalg.norm(places[:, None] - places[None], axis=2)[~np.eye(len(places), dtype=bool)]
        assert gaps.min() > 15


@pytest.mark.parametrize("name", ["viridis", "cividis", "magma"])
def test_published_maps_are_as_published(name):
    # Referee: the tables that matplotlib ships.
    assert np.allclose(colours.ramp(name), matplotlib.colormaps[name](np.arange(256))[:, :3], atol=0.5 / 255)


def test_ramps_of_any_length():
    assert colours.ramp("viridis", count=17).shape == (17, 3)
    assert np.allclose(colours.ramp(count=2)[-1], colours.ramp()[-1])


def test_unknown_ramp_is_named():
    with pytest.raises(CallError, match="viridis"):
        colours.ramp("viridus")
