"""Section ``[cutting]``: how a continuous recording is cut into traces."""

from __future__ import annotations

from typing import Literal

from meseta.recipe.fields import Section, setting

__all__ = ["CuttingSettings"]


class CuttingSettings(Section):
    """Continuous recordings to single traces."""

    method: Literal["auto", "ramp", "threshold", "none"] = setting(
        "auto",
        "Cut by",
        "'auto': by the ramp of the piezo where there is one; 'threshold': by the conductance; "
        "'none': the recording is one trace.",
    )
    pull_is: Literal["rising", "falling"] | None = setting(
        None,
        "Pulling is",
        "Direction of the piezo signal while the contact is stretched.",
        unset="taken from the recording, else from the fall of conductance, and said so",
    )
    smallest_ramp_fraction: float = setting(
        0.3,
        "Smallest ramp",
        "Ramps shorter than this share of the usual one are kept apart as incomplete.",
        gt=0,
        lt=1,
    )
    high_g0: float = setting(
        1.0, "Closed above", "Threshold method: the contact is closed above this.", unit="G0", gt=0
    )
    low_g0: float = setting(1e-3, "Open below", "Threshold method: the contact is open below this.", unit="G0", gt=0)
