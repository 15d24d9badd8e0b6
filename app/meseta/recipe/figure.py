"""Section ``[figure]``: how figures are printed."""

from __future__ import annotations

from typing import Literal

from meseta.recipe.fields import Section, setting

__all__ = ["FigureSettings"]


class FigureSettings(Section):
    """Print."""

    width_mm: float = setting(
        178.0, "Width", "Single column 85 to 90 mm, double 170 to 180 mm.", unit="mm", ge=40, le=400
    )
    text_point: float = setting(
        7.5,
        "Text size",
        "Of all text in the figure; journals ask for 6 to 8 pt in the final width.",
        unit="pt",
        ge=5,
        le=20,
    )
    colour_map: Literal["meseta", "viridis", "cividis", "magma", "grey"] = setting(
        "meseta",
        "Colour map",
        "Of 2D histograms. All are perceptually even; a cell without a sample is the paper.",
    )
    colour_scale: Literal["linear", "square_root", "logarithmic"] = setting(
        "square_root",
        "Colour scale",
        "Of the 2D histogram: 'square_root' shows weak features without hiding strong ones; 'linear' is proportional.",
    )
    count_axis: Literal["linear", "logarithmic"] = setting(
        "linear",
        "Count axis",
        "Of the 1D histogram. On a linear axis a feature far above the fitted peaks is cut and its height written.",
    )
    smoothing_bins: float = setting(
        0.0,
        "Smoothing",
        "Of the drawn 1D histogram and its band only (standard deviation of a Gaussian): tables and fits never see it, "
        "and the axis says so. 0 draws what was counted.",
        unit="bins",
        ge=0,
        le=20,
    )
    components: bool = setting(
        True, "Single peaks", "Draw each fitted peak and the background on its own, besides the whole fit."
    )
    guides: bool = setting(True, "G0 guides", "Hairlines at whole multiples of G0.")
