"""Section ``[peaks]``: how the peaks of the histogram are fitted."""

from __future__ import annotations

import math
from typing import Literal, Self

from pydantic import BaseModel, ConfigDict, Field, model_validator

from meseta.recipe.fields import Section, setting

__all__ = ["PeakSettings", "PeakStart"]


class PeakStart(BaseModel):
    """A peak that the user asks for: a name, where to begin, and what is held.

    ``position_g0`` and ``width`` (sigma; decades on a logarithmic, G0 on a linear axis) are starting values;
    ``fixed`` holds the position, ``fixed_width`` the width, ``low_g0`` and ``high_g0`` bound the position.  ``tied``
    and ``tied_width`` say whether the peak takes part in the ties of positions and of relative widths, where the
    section asks for these; ``multiple`` says which multiple a tied peak is (1, 2, 3 ... in their order where none says
    so).
    """

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)

    name: str = ""
    position_g0: float = Field(gt=0)
    width: float | None = Field(None, gt=0)
    low_g0: float | None = Field(None, gt=0)
    high_g0: float | None = Field(None, gt=0)
    fixed: bool = False
    fixed_width: bool = False
    multiple: float | None = Field(None, gt=0)
    tied: bool = True
    tied_width: bool = True

    @model_validator(mode="after")
    def _position_within_bounds(self) -> Self:
        low, high = self.low_g0 or 0.0, self.high_g0 or math.inf
        if low >= high:
            raise ValueError(f"low_g0 ({low:g}) must be less than high_g0 ({high:g})")
        if not low <= self.position_g0 <= high:
            raise ValueError(f"position_g0 ({self.position_g0:g}) must lie from {low:g} to {high:g}")
        if self.fixed_width and self.width is None:
            raise ValueError("fixed_width needs a width")
        return self


class PeakSettings(Section):
    """The peak fit."""

    ordered = (("fit_low_g0", "fit_high_g0"),)

    axis: Literal["as_histogram", "linear", "logarithmic"] = setting(
        "as_histogram",
        "Axis of the fit",
        "A peak's position depends on the axis; it is stated with every position.",
    )
    shape: Literal["gaussian", "lorentzian", "pseudo_voigt", "skewed_gaussian"] = setting(
        "gaussian", "Line shape", "Shape of every peak on the axis of the fit."
    )
    background: Literal["none", "constant", "linear", "exponential", "power_law", "tunnelling", "template"] = setting(
        "exponential",
        "Background",
        "Smooth part under the peaks, on the axis of the fit; 'tunnelling': the traces without a plateau, scaled; "
        "'template': a given shape (a blank recording), scaled.",
    )
    blank: str = setting(
        "",
        "Blank traces",
        "Rule that names the traces of a blank recording, whose histogram, scaled, is the background 'template'; the "
        "traces of the blank are no part of the histogram where a rule of the selection leaves them out.",
    )
    method: Literal["likelihood", "least_squares"] = setting(
        "likelihood",
        "Method",
        "'likelihood': extended binned Poisson likelihood; 'least_squares': weighted by the variance of the resampled "
        "histograms.",
    )
    tie: Literal["none", "multiples", "ladder"] = setting(
        "none",
        "Tie positions",
        "'multiples': all tied peaks are multiples of one conductance; 'ladder': the same behind one series "
        "resistance.",
    )
    equal_relative_widths: bool = setting(
        False, "Equal relative widths", "All tied peaks are equally wide relative to their position."
    )
    intervals: Literal["percentile", "bca"] = setting(
        "percentile",
        "Intervals",
        "From the resampled fits: percentiles, or bias-corrected and accelerated ones over 200 groups of traces.",
    )
    peaks: list[PeakStart] = setting(
        None, "Peaks", "Peaks to fit, with starting values; empty: proposed from the histogram.", factory=list
    )
    most: int = setting(
        4, "Most peaks", "Largest number of peaks that is proposed above 0.4 G0, and below.", ge=1, le=20
    )
    fit_low_g0: float | None = setting(
        None,
        "Fit from",
        "Lower end of the fit.",
        unit="G0",
        gt=0,
        unset="chosen round the peaks, stated in the table",
    )
    fit_high_g0: float | None = setting(
        None,
        "Fit to",
        "Upper end of the fit.",
        unit="G0",
        gt=0,
        unset="chosen round the peaks, stated in the table",
    )
    names: dict[str, float] = setting(
        None,
        "Named values",
        "Own names for conductances in G0, written beside the nearest peak.",
        factory=dict,
    )
