"""Section ``[plateaus]``: how plateaus are found."""

from __future__ import annotations

from typing import Literal

from meseta.recipe.fields import Section, setting

__all__ = ["PlateauSettings"]


class PlateauSettings(Section):
    """The plateau finder."""

    ordered = (("low_g0", "high_g0"),)

    method: Literal["change_points", "derivative", "levels"] = setting(
        "change_points",
        "Method",
        "'change_points': exact penalised change points weighted by the noise model; "
        "'derivative': threshold on the slope; 'levels': stay between conductance levels.",
    )
    sensitivity: float = setting(
        5.0,
        "Sensitivity",
        "5 asks for the evidence that the noise model calls for (3 ln n times the long-run "
        "variance for each change). Each step up halves, each step down doubles what a change must be worth.",
        ge=0,
        le=10,
    )
    minimum_length_nm: float | None = setting(
        None,
        "Shortest plateau",
        "Shorter stretches are not counted as plateaus.",
        unit="nm",
        ge=0,
        unset="0.01 nm for conductances above 0.1 G0, 0.02 nm below",
    )
    minimum_samples: int = setting(
        8, "Fewest samples", "Shortest plateau in samples, whatever its length.", unit="samples", ge=2
    )
    minimum_rise_times: float = setting(
        5.0,
        "Fewest rise times",
        "Shortest plateau in rise times of the amplifier: a slow amplifier turns a jump into a plateau.",
        ge=0,
    )
    slope_fraction: float = setting(
        1 / 3,
        "Slope bound",
        "Steepest plateau, as a share of this recording's median tunnelling slope.",
        gt=0,
        le=1,
    )
    join_decades: float = setting(
        0.15,
        "Join within",
        "Neighbouring stretches whose conductance differs by less than this and by less than 'Join within, metal', or "
        "by less than their noise, are one plateau.",
        unit="decades",
        ge=0,
        le=1,
    )
    join_g0: float = setting(
        0.25,
        "Join within, metal",
        "The same as a difference: a step of less than this is no change in the number of atoms. Matters above about "
        "0.5 G0, where it is the smaller of the two.",
        unit="G0",
        ge=0,
        le=10,
    )
    switch_decades: float = setting(
        0.35,
        "Switching within",
        "A signal that leaves its level by less and comes back is one plateau with telegraph noise "
        "(above 0.1 G0: by less than 0.3 G0).",
        unit="decades",
        ge=0,
        le=1,
    )
    low_g0: float | None = setting(
        None,
        "Lowest plateau",
        "Plateaus below are not looked for.",
        unit="G0",
        gt=0,
        unset="3 sigma above the floor",
    )
    high_g0: float | None = setting(
        None, "Highest plateau", "Plateaus above are not looked for.", unit="G0", gt=0, unset="no upper limit"
    )
    smoothing_samples: int = setting(
        9,
        "Smoothing",
        "'derivative': samples over which the slope is taken; at least two rise times.",
        unit="samples",
        ge=3,
        le=1001,
    )
    levels_g0: list[float] = setting(
        None,
        "Levels",
        "'levels': conductances that bound the windows; a plateau is a long stay between two neighbours.",
        unit="G0",
        factory=lambda: [1e-5, 1e-4, 1e-3, 1e-2, 0.5, 1.5, 2.5, 3.5],
    )
