"""What a run prints of the physics of its peaks."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from meseta import typeset

__all__ = ["physics_lines", "spread_lines"]


def spread_lines(spread: Sequence[dict[str, Any]]) -> list[str]:
    """Return, one line a peak, what all defensible analyses gave.

    Parameters
    ----------
    spread : sequence of dict
        ``summary["all_analyses"]``.
    """
    lines = []
    for row in spread:
        low, high, lowest, highest, chosen = (
            math.nan if row[name] is None else float(row[name])
            for name in ("low_g0", "high_g0", "lowest_g0", "highest_g0", "chosen_g0")
        )
        lines.append(
            f"peak {row['peak']}: {typeset.conductance(chosen, 4)} as chosen; {row['analyses']} analyses can be "
            f"defended, nine tenths {typeset.interval(low, high, 'G0', 4)}, all "
            f"{typeset.interval(lowest, highest, 'G0', 4)}"
        )
    return lines


def physics_lines(summary: dict[str, Any]) -> list[str]:
    """Return what a run prints beside the peak table: three numbers for each peak, and what follows from positions.

    Parameters
    ----------
    summary : dict
        The content of ``summary.json``.
    """
    physics = summary["physics"]
    lines = []
    for peak, near, formed in zip(summary["peaks"], physics["published"], physics["formation"], strict=True):
        if peak["position_g0"] is not None:
            lines.append(_peak_line(peak))
            lines += [f"    {line}" for line in (*_formation_lines(formed), *_published_lines(near))]
    return lines + _resistance_lines(physics["series_resistance"])


def _peak_line(peak: dict[str, Any]) -> str:
    """Return the three numbers that are often quoted for one another, the area, and the smallest number of channels."""
    median = "no plateaus there"
    if peak["plateaus"]:
        number = f"{typeset.integer(peak['plateaus'])} plateaus"
        median = f"median of {number} {typeset.conductance(_number(peak['plateau_median_g0']))}"
    channels = peak["channels_at_least"]
    parts = [
        f"fitted centre {typeset.conductance(_number(peak['position_g0']))} on the {peak['axis']} axis",
        f"highest point {typeset.conductance(_number(peak['mode_g0']))}",
        median,
        f"area {typeset.number(_number(peak['area_per_trace']), 3)} {peak['area_unit']}",
        f"at least {channels} channel{'' if channels == 1 else 's'}",
    ]
    return f"peak {peak['peak']}: {'; '.join(parts)}" + (f"; {peak['assigned']}" if peak["assigned"] else "")


def _formation_lines(formed: dict[str, Any] | None) -> list[str]:
    if formed is None:
        return []
    low, high = (100 * _number(formed[name]) for name in ("share_low", "share_high"))
    return [
        f"{100 * _number(formed['share']):.1f} % of the traces have a plateau there (95 %: {low:.1f} to {high:.1f} %), "
        f"a share of traces and not yet a formation probability: {formed['corrected']}"
    ]


def _published_lines(near: Sequence[dict[str, Any]]) -> list[str]:
    """Return published values as context."""
    lines = []
    for value in near:
        low, high = _number(value["low_g0"]), _number(value["high_g0"])
        range_ = typeset.conductance(low) if low == high else typeset.interval(low, high, "G0")
        lines.append(f"published, no identification: {value['system']}, {value['what']}: {range_} ({value['source']})")
    return lines


def _resistance_lines(found: dict[str, Any] | None) -> list[str]:
    if found is None:
        return []
    each = "; ".join(
        f"peak {name} as {typeset.number(number, 3)} G0: {_ohm(alone, sigma)}"
        for name, number, alone, sigma in zip(
            found["peaks"], found["multiples"], found["per_peak_ohm"], found["per_peak_sigma_ohm"], strict=True
        )
    )
    lines = []
    if len(found["peaks"]) > 1:
        origin = "errors of the positions" if found["absolute"] else "scatter of the peaks"
        lines.append(
            f"series resistance {_ohm(found['resistance_ohm'], found['sigma_ohm'])} with a unit of "
            f"{typeset.number(_number(found['unit_g0']), 4)} G0, from the {origin}; not applied"
        )
    return [*lines, f"resistance in series that each peak alone would ask for, if it lay at a multiple of G0: {each}"]


def _ohm(value: float | None, sigma: float | None) -> str:
    error = _number(sigma)
    return f"{_number(value):.0f} ohm" + (f" ± {error:.0f} ohm" if math.isfinite(error) else "")


def _number(value: float | None) -> float:
    return math.nan if value is None else float(value)
