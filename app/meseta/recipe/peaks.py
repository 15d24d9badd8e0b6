"""Section ``[peaks]``: how the peaks of the histogram are fitted."""

from __future__ import annotations

from typing import Literal

from pydantic import BaseModel, ConfigDict

from meseta.recipe.fields import Section, setting

__all__ = ["PeakSettings", "PeakStart"]


class PeakStart(BaseModel):
    """A peak that the user asks for: a name, and where to begin.

    ``position_g0`` and ``width`` (sigma; decades on a logarithmic, G0 on a linear axis) are starting values;
    ``fixed`` holds the position, ``fixed_width`` the width, ``low_g0`` and ``high_g0`` bound the position, ``multiple``
    says which multiple a tied peak is (1, 2, 3 ... in their order where none says so).
    """

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)

    name: str = ""
    position_g0: float
    width: float | None = None
    low_g0: float | None = None
    high_g0: float | None = None
    fixed: bool = False
    fixed_width: bool = False
    multiple: float | None = None


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
    method: Literal["likelihood", "least_squares"] = setting(
        "likelihood",
        "Method",
        "'likelihood': extended binned Poisson likelihood; 'least_squares': weighted by the variance of the resampled "
        "histograms.",
    )
    tie: Literal["none", "multiples", "ladder"] = setting(
        "none",
        "Tie positions",
        "'multiples': all peaks are multiples of one conductance; 'ladder': the same behind one series resistance.",
    )
    equal_relative_widths: bool = setting(
        False, "Equal relative widths", "All peaks are equally wide relative to their position."
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
