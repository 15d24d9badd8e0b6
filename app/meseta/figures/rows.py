"""The tables of the report as rows of text: the same numbers as in the CSV files, with the rounding of the figure."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from meseta import typeset
from meseta.figures.stated import value_text
from meseta.peaks import PeakFit, PeakTable
from meseta.recipe import Recipe
from meseta.segmentation import NoiseModel

__all__ = ["exclusion_rows", "noise_rows", "peak_rows", "quoted_rows", "rule_rows", "setting_rows", "systematic_rows"]

Rows = list[dict[str, str]]

_EXCLUSIONS: Final = {
    "under": "below the axis",
    "over": "at or above the top of the axis",
    "non_positive": "zero or negative, on a logarithmic axis",
    "saturated": "amplifier saturated",
    "untrusted": "not trusted (slewing, seam of two amplifiers)",
    "nan": "no conductance recorded",
    "outside": "outside the chosen region",
}


def _position(table: PeakTable, row: int, unit: str, value: float, factor: float) -> str:
    """Return a position with its interval, both multiplied by ``factor``."""
    low, high = float(table.position_low_g0[row]) * factor, float(table.position_high_g0[row]) * factor
    return typeset.value_with_uncertainty(value, low, high, unit)


def peak_rows(table: PeakTable) -> Rows:
    """Return one row a peak: position, interval, systematic part, width, area, and what is doubtful."""
    rows = []
    for row in range(len(table)):
        width_unit = "decade" if str(table.axis[row]) == "logarithmic" else "G0"
        rows.append(
            {
                "peak": str(table.peak[row]) or typeset.MISSING,
                "position": _position(table, row, "G0", float(table.position_g0[row]), 1.0),
                "interval": typeset.interval(
                    float(table.position_low_g0[row]), float(table.position_high_g0[row]), "G0"
                ),
                "systematic": _plus_minus(float(table.position_systematic_g0[row]), "G0"),
                "siemens": typeset.prefixed(float(table.position_siemens[row]), "S"),
                "ohm": typeset.prefixed(float(table.position_ohm[row]), "ohm"),
                "width": typeset.value_with_uncertainty(
                    float(table.fwhm[row]), float(table.fwhm_low[row]), float(table.fwhm_high[row]), width_unit
                ),
                "area": typeset.value_with_uncertainty(
                    float(table.area_per_trace[row]), float(table.area_low[row]), float(table.area_high[row])
                ),
                "area_unit": str(table.area_unit[row]),
                "status": str(table.status[row]),
                "fit": f"{table.shape[row]} on {table.background[row]}, {table.axis[row]} axis, "
                + typeset.interval(float(table.fit_low_g0[row]), float(table.fit_high_g0[row]), "G0"),
                "resampling": str(table.resampling[row]),
            }
        )
    return rows


def _plus_minus(value: float, unit: str) -> str:
    return f"±{typeset.THIN_SPACE}{typeset.quantity(value, unit, 2)}" if np.isfinite(value) else typeset.MISSING


def quoted_rows(table: PeakTable) -> Rows:
    """Return, one row a peak, the three numbers that are often quoted for one another."""
    return [
        {
            "peak": str(table.peak[row]) or typeset.MISSING,
            "axis": str(table.axis[row]),
            "centre": _position(table, row, "G0", float(table.position_g0[row]), 1.0),
            "mode": typeset.conductance(float(table.mode_g0[row])),
            "median": typeset.conductance(float(table.plateau_median_g0[row])),
            "plateaus": typeset.integer(int(table.plateaus[row])),
        }
        for row in range(len(table))
    ]


def systematic_rows(fit: PeakFit) -> list[tuple[str, list[str]]]:
    """Return, one row a choice, by how much each position moves if the choice is changed."""
    return [(name, [_signed(float(value)) for value in moved]) for name, moved in fit.systematic]


def _signed(value: float) -> str:
    text = typeset.quantity(value, "G0", 2)
    return f"+{text}" if value > 0 else text


def noise_rows(noise: NoiseModel, drive_unit: str) -> Rows:
    """Return the numbers of the noise model, with what each is."""
    origin = dict.fromkeys(noise.stated, "stated in the recipe")
    slope = f"{typeset.number(noise.tunnelling_slope, 3)} decades per {drive_unit}"
    entries = [
        ("Floor", "floor_g0", typeset.conductance(noise.floor_g0)),
        ("Noise at the floor, one sample", "floor_sigma_g0", typeset.conductance(noise.floor_sigma_g0)),
        ("Traces that reach the floor", "floor_traces", typeset.integer(noise.floor_traces)),
        ("Rise time, 10 to 90 %", "rise_samples", f"{typeset.number(noise.rise_samples, 2)} samples"),
        ("Converter step near the floor", "converter_step_g0", _or_none(noise.converter_step_g0)),
        ("Saturation", "saturation_g0", _or_none(noise.saturation_g0)),
        ("Median slope of the tunnelling decay", "tunnelling_slope", slope),
    ]
    return [
        {"name": name, "value": value, "origin": origin.get(key, "learnt from the recording")}
        for name, key, value in entries
    ]


def _or_none(value_g0: float) -> str:
    return typeset.conductance(value_g0) if np.isfinite(value_g0) and value_g0 else "none seen"


def rule_rows(traces: Mapping[str, Any]) -> Rows:
    """Return what each selection rule took, alone and in sequence, from ``summary["traces"]``."""
    return [
        {
            "rule": str(step["rule"]),
            "alone": typeset.integer(step["dropped_alone"]),
            "sequence": typeset.integer(step["dropped_in_sequence"]),
            "left": typeset.integer(step["left"]),
        }
        for step in traces["rules"]
    ]


def check_up_parts(check: Mapping[str, Any] | None) -> list[dict[str, Any]]:
    """Return what the check-up found of each group of recordings, from ``summary["calibration_check"]``."""
    return [] if check is None else [_check_up_part(one) for one in check["checked"] if one["findings"]]


def _check_up_part(checked: Mapping[str, Any]) -> dict[str, Any]:
    others = checked["recordings"] - 1
    more = f" and {typeset.integer(others)} like it" if others else ""
    traces = f"{typeset.integer(checked['traces'])} {'trace' if checked['traces'] == 1 else 'traces'}"
    return {"heading": f"{checked['first']}{more}, {traces}", "rows": checked["findings"]}


def check_up_notes(check: Mapping[str, Any] | None) -> list[str]:
    """Return of what the check-up saw nothing, or not all."""
    if check is None:
        return []
    looked = sum(one["recordings"] for one in check["checked"])
    said = [f"{typeset.integer(looked)} of {typeset.integer(check['recordings'])} recordings were looked at."]
    if check["missing"]:
        said.append(f"{typeset.integer(check['missing'])} that were to be are neither in the study nor at hand.")
    if check["shortened"]:
        samples = typeset.integer(check["samples_at_most"])
        said.append(f"Of {typeset.integer(check['shortened'])} only the first {samples} samples were looked at.")
    return said


def exclusion_rows(histogram: Mapping[str, Any]) -> Rows:
    """Return the samples that are in no bin, by reason, from ``summary["histogram"]``."""
    total = histogram["samples"] + sum(histogram["excluded"].values())
    counted = [("in a bin", histogram["samples"])]
    left_out = [(_EXCLUSIONS.get(name, name), number) for name, number in histogram["excluded"].items()]
    return [
        {"reason": name, "samples": typeset.integer(number), "share": typeset.percent(number, total, 2)}
        for name, number in [*counted, *left_out]
    ]


def setting_rows(recipe: Recipe) -> list[tuple[str, str, Rows]]:
    """Return every setting: (section, its title, rows of name, title, value, default, whether it differs)."""
    sections = []
    for name, section in recipe.sections():
        rows = []
        for info in section.fields():
            value = getattr(section, info.name)
            rows.append(
                {
                    "name": f"{name}.{info.name}",
                    "title": info.title,
                    "value": value_text(value, info),
                    "default": value_text(info.default, info),
                    "changed": "changed" if value != info.default else "",
                }
            )
        sections.append((name, Recipe.model_fields[name].title or name, rows))
    return sections
