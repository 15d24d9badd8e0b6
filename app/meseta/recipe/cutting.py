"""Section ``[cutting]``: how a continuous recording is cut into traces."""

from __future__ import annotations

from typing import Literal

from meseta.recipe.fields import Section, setting

__all__ = ["CuttingSettings"]


class CuttingSettings(Section):
    """Continuous recordings to single traces."""

    method: Literal["auto", "ramp", "threshold", "trigger", "number", "time", "none"] = setting(
        "auto",
        "Cut by",
        "'ramp': the ramp of the piezo; 'threshold': the conductance; 'trigger': the edges of a trigger channel; "
        "'number': changes of a trace-number channel; 'time': falls of the time; 'none': the recording is one trace; "
        "'auto': the trace number where there is one, else the ramp, else time or trigger.",
    )
    trigger_edge: Literal["rising", "falling", "both"] = setting(
        "rising", "Trigger edge", "Edge of the trigger at which a trace begins."
    )
    trigger_level: float | None = setting(
        None,
        "Trigger level",
        "Reading that an edge crosses, in the unit of the trigger channel.",
        unset="half way between its least and largest reading",
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
