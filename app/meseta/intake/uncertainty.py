"""How well each constant of the calibration is known: one result, made to be propagated.

The calibration moves all traces together, so more traces do not help; what is propagated from here is stated apart from
statistical intervals.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any, Final

import numpy as np

from meseta.quantities import G0_SIEMENS
from meseta.traces import TraceSet

__all__ = ["ERROR_SETTINGS", "CalibrationErrors", "calibration_errors"]

ERROR_SETTINGS: Final = (
    "gain_relative_error",
    "bias_relative_error",
    "offset_error_ampere",
    "series_resistance_error_ohm",
    "displacement_relative_error",
)
"""Settings of the recipe that state an error."""


@dataclass(frozen=True)
class CalibrationErrors:
    """Standard errors of the constants of a calibration; NaN where nothing is known.

    Attributes
    ----------
    gain_relative, bias_relative : float
        Of the amplifier's gain and of the bias; conductance moves in proportion.
    offset_g0 : float
        Of the offset, as a conductance.
    series_resistance_ohm : float
        Of all that is in series with the junction.
    displacement_relative : float
        Of nm; lengths and slopes move in proportion.
    grounds : mapping
        Name of an error -> where it was taken from.
    """

    gain_relative: float = float("nan")
    bias_relative: float = float("nan")
    offset_g0: float = float("nan")
    series_resistance_ohm: float = float("nan")
    displacement_relative: float = float("nan")
    grounds: Mapping[str, str] = field(default_factory=dict)

    @property
    def unknown(self) -> tuple[str, ...]:
        """Names of the constants of which no error is known."""
        named = [one.name for one in fields(self) if one.name != "grounds"]
        return tuple(name for name in named if not np.isfinite(getattr(self, name)))

    def of_positions(self) -> dict[str, float]:
        """Return what moves a conductance, by the argument names of ``peaks.calibration_shifts``; 0 where unknown."""
        names = ("gain_relative", "bias_relative", "offset_g0", "series_resistance_ohm")
        return {name: float(np.nan_to_num(getattr(self, name))) for name in names}


def calibration_errors(traces: TraceSet) -> CalibrationErrors:
    """Return how well the calibration of these traces is known: as the recipe states, else as the recording shows.

    The recording shows an error of the gain where two amplifiers overlap, and one of the offset where it is estimated
    from the floor.  The gain's is that of the fitted ratio where it is used.  Where it is not, either gain may be the
    right one, or any between: the standard deviation of that is their difference over the root of 12 (JCGM 100:2008,
    4.3.7).
    """
    notes = traces.notes
    constants = notes.get("calibration", {})
    found: dict[str, tuple[float, str]] = {}
    for name, setting in (
        ("gain_relative", "gain_relative_error"),
        ("bias_relative", "bias_relative_error"),
        ("series_resistance_ohm", "series_resistance_error_ohm"),
        ("displacement_relative", "displacement_relative_error"),
    ):
        if setting in constants:
            found[name] = (float(constants[setting]["value"]), str(constants[setting]["from"]))
    _add_overlap(found, constants)
    _add_offset(found, constants, notes.get("floor_offset", {}), _bias(traces))
    return CalibrationErrors(
        **{name: value for name, (value, _) in found.items()}, grounds={name: why for name, (_, why) in found.items()}
    )


def _add_overlap(found: dict[str, tuple[float, str]], constants: Mapping[str, Any]) -> None:
    """Add what the overlap of two amplifiers says of the gain."""
    if "overlap_ratio" not in constants:
        return
    ratio, error = (float(constants[name]["value"]) for name in ("overlap_ratio", "overlap_ratio_error"))
    stated, why = found.get("gain_relative", (0.0, ""))
    if "not used" in constants["overlap_ratio"]["from"]:
        if not stated:  # who states an error of the gain has the disagreement in it
            found["gain_relative"] = (float(np.hypot((ratio - 1.0) / np.sqrt(12.0), error)), "overlap of the two gains")
        return
    own = error / abs(ratio)
    found["gain_relative"] = (float(np.hypot(stated, own)), f"{why} and overlap" if why else "overlap of the two gains")


def _add_offset(
    found: dict[str, tuple[float, str]], constants: Mapping[str, Any], floor: Mapping[str, Any], bias_volt: float
) -> None:
    """Add the error of the offset: as stated in ampere, else of the estimate from the floor."""
    if "offset_error_ampere" in constants:
        if bias_volt:
            ampere = float(constants["offset_error_ampere"]["value"])
            found["offset_g0"] = (ampere / (abs(bias_volt) * G0_SIEMENS), "recipe")
    elif floor.get("removed") and floor.get("offset_error") is not None:
        error = float(floor["offset_error"])
        if floor.get("unit") == "G0":
            found["offset_g0"] = (error, "offset from the floor")
        elif bias_volt:
            found["offset_g0"] = (error / abs(bias_volt), "offset from the floor")


def _bias(traces: TraceSet) -> float:
    """Return the median bias of the traces; 0 where none is known."""
    bias = np.abs(np.asarray(traces.table["bias_volt"], np.float64)) if "bias_volt" in traces.table else np.empty(0)
    bias = bias[np.isfinite(bias)]
    return float(np.median(bias)) if len(bias) else 0.0
