"""The colours of Meseta, as plain numbers: palettes, even ramps, and the colour and symbol of groups.

Knows neither Qt nor matplotlib, so the window and the printed figures take the same colours from here.  Every colour
has one meaning everywhere and never stands alone: fits are also dashed, groups also have a symbol, doubt also a word.

The ramps are Bézier curves in CIELAB (CIE 1976, D65 white) whose control points have evenly spaced lightness, which
makes the lightness of the ramp exactly linear; their first colour is the paper itself, so that zero is the paper.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import comb
from typing import Final

import numpy as np
import numpy.typing as npt

from meseta.errors import CallError, nearest
from meseta.resources import resource

__all__ = [
    "DARK",
    "GROUPS",
    "LIGHT",
    "RAMPS",
    "GroupStyle",
    "Palette",
    "diverging",
    "lab_of",
    "ramp",
    "rgb_of",
    "rgb_of_hex",
]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Palette:
    """Colours by meaning, as ``#rrggbb``.

    Attributes
    ----------
    ground, panel : str
        Behind everything; behind a plot (the paper).
    ink, quiet, hairline : str
        Text; text of second rank; guide lines and table lines.
    every : str
        All traces: what is not selected.
    selected : str
        Selected, current, in step.
    fit : str
        Fits and the current trace's mark; always dashed or pointed as well.
    doubtful : str
        Out of date or doubtful; always with the word.
    """

    ground: str
    panel: str
    ink: str
    quiet: str
    hairline: str
    every: str
    selected: str
    fit: str
    doubtful: str


LIGHT: Final = Palette(
    "#f6f4f0", "#ffffff", "#23272b", "#6d747a", "#d9d5cd", "#9aa1a7", "#0b6e75", "#c2541d", "#8a6a00"
)
DARK: Final = Palette("#16191c", "#1e2226", "#e4e2dd", "#9aa1a7", "#33393f", "#7d848a", "#49c0c4", "#f0894d", "#d9b13b")


@dataclass(frozen=True)
class GroupStyle:
    """Colour and symbol of one group of traces; neither is used without the other.

    Attributes
    ----------
    light, dark : str
        ``#rrggbb`` on the light and on the dark panel.
    symbol : str
        Name of the shape: "disc", "triangle", "square", "diamond", "plus", "cross", "star", "pentagon".
    character : str
        The same shape as a character of text.
    """

    light: str
    dark: str
    symbol: str
    character: str


GROUPS: Final = (
    GroupStyle("#5b3f99", "#b49af0", "disc", "●"),
    GroupStyle("#1f78c1", "#6cb4f2", "triangle", "▲"),
    GroupStyle("#76861a", "#c0cf57", "square", "■"),
    GroupStyle("#b03a72", "#ee86b7", "diamond", "◆"),
    GroupStyle("#7b5a3e", "#c9a382", "plus", "✚"),
    GroupStyle("#23272b", "#e4e2dd", "cross", "✖"),
    GroupStyle("#3d8f4d", "#7fd08e", "star", "★"),
    GroupStyle("#5f7387", "#a7bccf", "pentagon", "⬟"),
)
"""Styles of groups in the order in which groups are made; beyond the last they begin again."""


# -- CIELAB ---------------------------------------------------------------------------------------------------------

_RGB_TO_XYZ: Final = np.array(
    [[0.4124564, 0.3575761, 0.1804375], [0.2126729, 0.7151522, 0.0721750], [0.0193339, 0.1191920, 0.9503041]]
)
_WHITE: Final = _RGB_TO_XYZ.sum(axis=1)
_EDGE: Final = 6 / 29


def rgb_of_hex(colour: str) -> Floats:
    """Return (3,) sRGB in 0..1 of ``#rrggbb``."""
    return np.array([int(colour[place : place + 2], 16) for place in (1, 3, 5)]) / 255


def lab_of(rgb: npt.ArrayLike) -> Floats:
    """Return CIELAB (CIE 1976, D65) of sRGB (IEC 61966-2-1) colours in 0..1, shape (..., 3)."""
    values = np.asarray(rgb, float)
    linear = np.where(values <= 0.04045, values / 12.92, ((values + 0.055) / 1.055) ** 2.4)
    ratio = linear @ _RGB_TO_XYZ.T / _WHITE
    root = np.where(ratio > _EDGE**3, np.cbrt(ratio), ratio / (3 * _EDGE**2) + 4 / 29)
    x, y, z = np.moveaxis(root, -1, 0)
    return np.stack([116 * y - 16, 500 * (x - y), 200 * (y - z)], axis=-1)


def rgb_of(lab: npt.ArrayLike) -> Floats:
    """Return sRGB in 0..1 of CIELAB colours, shape (..., 3); values outside the gamut are clipped."""
    lightness, a, b = np.moveaxis(np.asarray(lab, float), -1, 0)
    y = (lightness + 16) / 116
    root = np.stack([y + a / 500, y, y - b / 200], axis=-1)
    ratio = np.where(root > _EDGE, root**3, 3 * _EDGE**2 * (root - 4 / 29))
    linear = np.clip(ratio * _WHITE @ np.linalg.inv(_RGB_TO_XYZ).T, 0, 1)
    return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)


# -- ramps ----------------------------------------------------------------------------------------------------------

RAMPS: Final = ("meseta", "viridis", "cividis", "magma", "grey")
"""Names of the sequential ramps; all but "meseta" and "grey" are published maps, kept in the resources."""

# Chroma and hue (degrees) between the paper and the far end, at evenly spaced lightness, all inside the sRGB gamut.
_LIGHT_PATH: Final = ((0, 130), (22, 128), (42, 158), (28, 190), (22, 222), (14, 262))
_DARK_PATH: Final = ((0, 230), (20, 220), (36, 196), (44, 168), (40, 128), (18, 105))
_LIGHT_END, _DARK_END = 14.0, 96.0
_LIGHT_WINGS: Final = (((0, 200), (18, 200), (32, 200), (20, 210)), ((0, 60), (22, 62), (58, 58), (54, 52)))
_DARK_WINGS: Final = (((0, 200), (18, 200), (34, 200), (30, 205)), ((0, 60), (22, 62), (50, 60), (34, 65)))


def _curve(start: Floats, path: tuple[tuple[float, float], ...], end_lightness: float, count: int) -> Floats:
    """Return (count, 3) CIELAB along the Bézier curve from the paper to the far end."""
    chroma, hue = np.array(path, float).T
    lightness = np.linspace(start[0], end_lightness, len(path))
    points = np.stack([lightness, chroma * np.cos(np.radians(hue)), chroma * np.sin(np.radians(hue))], axis=1)
    points[0] = start
    t = np.linspace(0, 1, count)[:, None]
    last = len(path) - 1
    weights = np.concatenate([comb(last, k) * t**k * (1 - t) ** (last - k) for k in range(last + 1)], axis=1)
    return weights @ points


def ramp(name: str = "meseta", dark: bool = False, count: int = 256) -> Floats:
    """Return a sequential ramp, from zero to the highest value.

    Parameters
    ----------
    name : str
        One of :data:`RAMPS`.  "meseta" and "grey" begin with the panel's own colour; published maps do not, there zero
        must be drawn as the paper by whoever draws.
    dark : bool
        For the dark panel (dark to light) instead of the light one (light to dark).
    count : int
        Number of colours.

    Returns
    -------
    (count, 3) float64
        sRGB in 0..1.

    Raises
    ------
    CallError
        Where there is no such ramp.
    """
    paper = lab_of(rgb_of_hex((DARK if dark else LIGHT).panel))
    end = _DARK_END if dark else _LIGHT_END
    if name == "meseta":
        return rgb_of(_curve(paper, _DARK_PATH if dark else _LIGHT_PATH, end, count))
    if name == "grey":
        return rgb_of(np.linspace(paper, [end, 0, 0], count))
    if name not in RAMPS:
        raise CallError(f"there is no colour map '{name}'", "colours", nearest(name, RAMPS))
    stored = np.loadtxt(resource("figures", "maps", f"{name}.csv"), delimiter=",") / 255
    places = np.linspace(0, 1, count)
    return np.stack([np.interp(places, np.linspace(0, 1, len(stored)), column) for column in stored.T], axis=1)


def diverging(dark: bool = False, count: int = 257) -> Floats:
    """Return (count, 3) sRGB (count odd) from deep teal (lowest) over the paper (zero) to burnt orange (highest).

    Lightness is linear on either side and the same at equal distance from zero.
    """
    paper = lab_of(rgb_of_hex((DARK if dark else LIGHT).panel))
    below, above = _DARK_WINGS if dark else _LIGHT_WINGS
    end, half = 82.0 if dark else 32.0, count // 2 + 1
    low, high = (_curve(paper, path, end, half) for path in (below, above))
    return rgb_of(np.concatenate([low[::-1], high[1:]]))
