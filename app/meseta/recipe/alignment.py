"""Section ``[alignment]``: where the displacement of a trace is zero."""

from __future__ import annotations

from typing import Literal

from meseta.recipe.fields import Section, setting

__all__ = ["AlignmentSettings"]


class AlignmentSettings(Section):
    """Zero of displacement."""

    zero_at_g0: float = setting(
        0.5,
        "Zero at",
        "Displacement is zero where the conductance crosses this value, interpolated in log G.",
        unit="G0",
        gt=0,
    )
    crossing: Literal["last", "first", "jump"] = setting(
        "last",
        "Crossing",
        "'last': the last crossing that stays below; 'first': the first one; 'jump': the largest fall "
        "through half the level, for plateaus that lie near the level.",
    )
    stay_samples: int = setting(
        3,
        "Stays below for",
        "Samples that must lie below after the crossing; for a jump, samples averaged on each side.",
        unit="samples",
        ge=1,
        le=1000,
    )
