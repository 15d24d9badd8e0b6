"""What a finished run prints for people: the peak table, the warnings, and where everything is."""

from __future__ import annotations

import itertools
import math
import re
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from meseta import typeset
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.peaks import Decay
    from meseta.segmentation import Expectation

__all__ = [
    "check_lines",
    "decay_lines",
    "expectation_answer",
    "expectation_lines",
    "result_lines",
    "study_answer",
    "study_lines",
]

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
    if any(peak["position_g0"] is not None for peak in summary["peaks"]):
        lines += [
            "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
        ]
    else:
        lines += [str(peak["status"]) for peak in summary["peaks"]] or ["no peak was found"]
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


_ALIKE = re.compile(r"[-+]?\d[\d.]*(?:[eE][-+]?\d+)?")


def check_lines(checks: Sequence[Sequence[str]]) -> list[str]:
    """Return the checks of files one below the other; of neighbours that say the same only the first is written out.

    Parameters
    ----------
    checks : sequence of sequences of str
        The lines of each file, its name first.  Neighbours say the same where they differ in names, numbers and
        findings that are in order alone.
    """
    lines: list[str] = []
    for _, group in itertools.groupby(checks, key=_sense):
        first, *others = group
        lines += first
        if others:
            names = others[0][0] if len(others) == 1 else f"{others[0][0]} to {others[-1][0]}"
            lines.append(f"the same is said of {typeset.integer(len(others))} more, but for numbers: {names}")
    return lines


def _sense(check: Sequence[str]) -> tuple[str, ...]:
    return tuple(_ALIKE.sub("", line) for line in check[1:] if not line.startswith("  ok "))


def study_answer(path: str, work: Work) -> dict[str, Any]:
    """Return what a study holds, as plain values; every block of it is checked."""
    from meseta.study import Study

    with Study.open(path, read_only=True) as study:
        traces = study.traces(work)
        return {
            "file": str(path),
            "reader": "study",
            "recordings": [
                {"name": source.name, "sha256": source.sha256, "kept": kept} for source, kept in study.sources.items()
            ],
            "traces": traces.traces,
            "samples": traces.samples,
            "channels": {name: channel.unit for name, channel in traces.channels.items()},
            "drive_unit": traces.drive.unit,
            "damage": study.check(work),
            "version_differences": study.version_differences(),
            "history": [entry.text for entry in study.history.entries],
        }


def study_lines(answer: dict[str, Any]) -> list[str]:
    """Return what a study holds, for people."""
    lines = [
        answer["file"],
        f"  study of {answer['traces']} traces, {answer['samples']} samples, drive in {answer['drive_unit']}",
    ]
    lines += [f"  channel {name} in {unit}" for name, unit in answer["channels"].items()]
    lines += [f"  recording {one['name']} ({one['kept']})" for one in answer["recordings"]]
    lines += [f"  history: {text}" for text in answer["history"]]
    lines += [f"  ? made with another version: {text}" for text in answer["version_differences"]]
    return (
        lines
        + [f"  damaged: {text}" for text in answer["damage"] or ()]
        + ([] if answer["damage"] else ["  every block is whole"])
    )


def decay_lines(result: Decay) -> list[str]:
    """Return decay constant and conductance at zero length, with both kinds of error."""
    unit = result.points.length_unit
    stated = f"{result.beta_sigma:.4g} from the stated errors, " if result.absolute else ""
    lines = [
        f"decay constant {result.beta:.6g} per {unit}; error {stated}{result.beta_sigma_scaled:.4g} from the scatter; "
        f"95 % {result.beta_low:.4g} to {result.beta_high:.4g}",
        f"conductance at zero length {typeset.conductance(result.contact_g0)}; 95 % "
        f"{typeset.interval(result.contact_low_g0, result.contact_high_g0, 'G0')}",
        f"{len(result.points.length)} points, chi-square {result.chi_square:.4g}, degrees of freedom {result.freedom}",
    ]
    return lines + [f"caution: {note}" for note in result.notes]


def expectation_answer(found: Expectation) -> dict[str, Any]:
    """Return what the plateau finder does as plain values; None where nothing can be told."""
    return found.plain()


def expectation_lines(found: Expectation) -> list[str]:
    """Return what the plateau finder does on such traces: a table of efficiencies, then false plateaus and limits."""
    unit = found.drive_unit
    what = "traces stated to be blank" if found.blank else "traces without a plateau below 0.1 G0"
    lines = [f"plateaus planted into {typeset.integer(found.traces)} {what}; share found:"]
    heads = [typeset.quantity(float(length), unit) for length in found.length]
    rows = [["conductance", *heads]]
    for level, shares in zip(found.conductance_g0, found.efficiency, strict=True):
        rows.append([typeset.conductance(float(level)), *(_share(float(share)) for share in shares)])
    rows.append(["found above", *(_limit(float(limit)) for limit in found.limit_g0)])
    widths = [max(len(row[column]) for row in rows) for column in range(len(rows[0]))]
    lines += ["  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)) for row in rows]
    lines.append("planted plateaus are straight and keep still; of molecules that drift or switch, fewer are found")
    if found.blank:
        lines.append(
            f"false plateaus a trace: {found.false_a_trace:.3g}; 95 % {found.false_low:.3g} to {found.false_high:.3g}"
        )
    else:
        lines.append("false plateaus a trace: only a blank recording tells; run this on one with --blank")
    return lines


def _share(value: float) -> str:
    return f"{100 * value:.0f} %" if math.isfinite(value) else typeset.MISSING


def _limit(value_g0: float) -> str:
    return typeset.conductance(value_g0, 2) if math.isfinite(value_g0) else typeset.MISSING
