"""What a finished run prints for people: the peak table, the warnings, and where everything is."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from meseta import typeset

__all__ = ["result_lines"]

_HEADINGS = ("peak", "position", "95 % interval", "systematic", "fit on", "status")


def result_lines(summary: dict[str, Any], folder: Path) -> list[str]:
    """Return the lines that a run prints.

    Parameters
    ----------
    summary : dict
        The content of ``summary.json``.
    folder : Path
        The result folder.
    """
    traces = summary["traces"]
    lines = [f"{typeset.integer(traces['kept'])} of {typeset.integer(traces['read'])} traces kept"]
    rows = [_HEADINGS, *(_peak_row(peak) for peak in summary["peaks"])]
    widths = [max(len(row[column]) for row in rows) for column in range(len(_HEADINGS))]
    if len(rows) > 1:
        lines += [
            "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
        ]
    else:
        lines.append("no peak was found")
    lines += [f"caution: {warning}" for warning in summary["warnings"]]
    lines.append(f"figures: {folder / 'figure.pdf'}, {folder / 'figure.svg'}, {folder / 'figure.png'}")
    lines.append(f"report: {folder / 'report.html'}; tables and study: {folder}")
    return lines


def _peak_row(peak: dict[str, Any]) -> tuple[str, ...]:
    low, high = (_number(peak[name]) for name in ("position_low_g0", "position_high_g0"))
    systematic = _number(peak["position_systematic_g0"])
    return (
        str(peak["peak"]),
        typeset.value_with_uncertainty(_number(peak["position_g0"]), low, high, "G0"),
        typeset.interval(low, high, "G0", 4),
        f"± {typeset.quantity(systematic, 'G0', 2)}" if math.isfinite(systematic) else typeset.MISSING,
        f"{peak['axis']} axis",
        str(peak["status"]),
    )


def _number(value: float | None) -> float:
    return math.nan if value is None else float(value)
