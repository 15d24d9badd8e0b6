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
    text_point: float = setting(7.5, "Text size", "", unit="pt", ge=5, le=20)
    colour_map: Literal["meseta", "viridis", "cividis", "magma", "grey"] = setting(
        "meseta", "Colour map", "Perceptually even, zero is the paper."
    )
    colour_scale: Literal["linear", "square_root", "logarithmic"] = setting(
        "square_root", "Colour scale", "Of the 2D histogram."
    )
