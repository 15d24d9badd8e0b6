"""How well each constant of the calibration is known: one result, made to be propagated.

The calibration moves all traces together, so more traces do not help; what is propagated from here is stated apart from
statistical intervals.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np

from meseta.quantities import G0_SIEMENS
from meseta.recipe.calibration import CalibrationSettings
from meseta.traces import TraceSet

__all__ = ["CalibrationErrors", "calibration_errors"]


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


def calibration_errors(traces: TraceSet, settings: CalibrationSettings) -> CalibrationErrors:
    """Return how well the calibration of these traces is known: as the recipe states, else as the recording does.

    The recording shows an error of the gain where two amplifiers overlap, and one of the offset where it is estimated
    from the floor.  The gain's is that of the fitted ratio where it is used.  Where it is not, either gain may be the
    right one, or any between: the standard deviation of that is their difference over the root of 12 (JCGM 100:2008,
    4.3.7).

    Parameters
    ----------
    traces : TraceSet
        Their notes hold what the recordings state and show.
    settings : CalibrationSettings
        Errors that are set here win; an error of the offset in ampere needs a known bias.
    """
    constants = traces.notes.get("calibration", {})
    found: dict[str, tuple[float, str]] = {}
    for name, setting in (
        ("gain_relative", "gain_relative_error"),
        ("bias_relative", "bias_relative_error"),
        ("series_resistance_ohm", "series_resistance_error_ohm"),
        ("displacement_relative", "displacement_relative_error"),
    ):
        stated = _stated(setting, settings, constants)
        if stated is not None:
            found[name] = stated
    _add_overlap(found, constants)
    offset = _stated("offset_error_ampere", settings, constants)
    _add_offset(found, offset, traces.notes.get("floor_offset", {}), _bias(traces, settings, constants))
    return CalibrationErrors(
        **{name: value for name, (value, _) in found.items()}, grounds={name: why for name, (_, why) in found.items()}
    )


def _stated(name: str, settings: CalibrationSettings, constants: Mapping[str, Any]) -> tuple[float, str] | None:
    """Return (error, where it was taken from): of the recipe, else of the recording, the largest of its pieces."""
    given = getattr(settings, name)
    if given is not None:
        return float(given), "recipe"
    noted = constants.get(name)
    if noted is None or noted["from"] == "recipe":  # older studies noted what their recipe said then
        return None
    return float(np.max(noted["value"])), str(noted["from"])


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
    found: dict[str, tuple[float, str]],
    stated: tuple[float, str] | None,
    floor: Mapping[str, Any],
    bias_volt: float,
) -> None:
    """Add the error of the offset: as stated in ampere, else of the estimate from the floor."""
    if stated is not None:
        if bias_volt:
            found["offset_g0"] = (stated[0] / (bias_volt * G0_SIEMENS), stated[1])
    elif floor.get("removed") and floor.get("offset_error") is not None:
        error = float(floor["offset_error"])
        if floor.get("unit") == "G0":
            found["offset_g0"] = (error, "offset from the floor")
        elif bias_volt:
            found["offset_g0"] = (error / bias_volt, "offset from the floor")


def _bias(traces: TraceSet, settings: CalibrationSettings, constants: Mapping[str, Any]) -> float:
    """Return the median size of the bias at the junction, behind a divider; 0 where none is known."""
    stated = np.asarray(traces.table.get("bias_volt", []), np.float64)
    stated = stated[np.isfinite(stated)]
    if len(stated) == 0:
        stated = np.array([settings.bias_volt or 0.0])

    def constant(name: str, unknown: float) -> float:
        return float(np.mean(constants[name]["value"])) if name in constants else unknown

    there = np.abs(stated / constant("bias_divided_by", 1.0) - constant("bias_offset_volt", 0.0))
    there = there[there > 0]
    return float(np.median(there)) if len(there) else 0.0
