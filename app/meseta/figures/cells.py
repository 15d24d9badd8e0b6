"""Cells of two-dimensional histograms as an image on the page."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Colormap, Normalize

__all__ = ["draw_cells"]


def draw_cells(
    axes: Axes,
    values: np.ma.MaskedArray[tuple[int, int], np.dtype[np.float64]],
    extent: tuple[float, float, float, float],
    colours: Colormap,
    norm: Normalize,
) -> ScalarMappable:
    """Draw cells below everything else, masked ones in the colour of the map for what is bad.

    Cells get their colours before they are enlarged to the dots of the page: numbers enlarged first would take ten
    times the memory, for the same dots.

    Parameters
    ----------
    axes : Axes
    values : (rows, columns) masked float64
    extent : left, right, bottom, top in the units of the axes
    colours, norm
        What makes a colour of a number.

    Returns
    -------
    ScalarMappable
        For the colour bar.
    """
    scale = ScalarMappable(norm, colours)
    axes.imshow(scale.to_rgba(values, bytes=True), extent=extent, zorder=0.5)
    return scale
