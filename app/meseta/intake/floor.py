"""Offset from the floor: what the amplifier reads with the contact open, pooled and running over the record.

Only traces shown to reach the floor take part: their last stretch must agree with that of the other traces, so that a
plateau that ends a trace is never taken for an offset.  A per-trace offset is never used: it would erase such plateaus.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.rows import BLOCK_SAMPLES, StreamedRow
from meseta.intake.running_floor import LEAST_TRACES, offset_error, running_offset
from meseta.intake.spread import Value
from meseta.quantities import G0_SIEMENS

__all__ = ["remove_floor_offset"]

Floats = npt.NDArray[np.float64]
TAIL_SHARE: Final = 0.1
LEAST_TAIL: Final = 10
MAD_TO_SIGMA: Final = 1.482602218505602
SHOWN: Final = 200


def remove_floor_offset(parts: Sequence[Part]) -> dict[str, Any]:
    """Subtract the running offset from loaded parts, before the series resistance; return what was done, for notes."""
    usable = [part for part in parts if part.calibration.kind in ("linear", "current", "conductance")]
    tails, noise, bias = (np.concatenate(column) for column in zip(*map(_tails, usable), strict=True)) if usable else (
        np.empty(0), np.empty(0), np.empty(0)
    )  # fmt: skip
    offset, reaches = running_offset(tails * bias, noise * np.abs(bias))
    if not np.isfinite(offset).any():
        return {"removed": False, "why": f"fewer than {LEAST_TRACES} traces are shown to reach the floor"}
    first = 0
    for part in usable:
        rows = slice(first, first + part.traces)
        _subtract(part, offset[rows] / bias[rows])
        first += part.traces
    shown = np.unique(np.linspace(0, len(offset) - 1, min(len(offset), SHOWN)).astype(int))
    unit = "G0" if np.all(bias == 1.0) else "G0 V"
    return {
        "removed": True,
        "traces_at_floor": int(reaches.sum()),
        "traces": len(offset),
        "at_trace": shown.tolist(),
        "offset": [float(value) for value in offset[shown]],
        "unit": unit,
        "offset_error": offset_error(tails * bias, reaches),
        "offset_ampere_median": float(np.median(offset) * G0_SIEMENS) if unit == "G0 V" else None,
    }


def _tails(part: Part) -> tuple[Floats, Floats, Floats]:
    """Return (median, its standard error, bias) of the last stretch of each opening, as measured."""
    median, error = np.full(part.traces, np.nan), np.full(part.traces, np.nan)
    series = _of_traces(part, part.calibration.in_series_ohm) * G0_SIEMENS
    stops = {row: stop for row, _, stop, kind in part.cut.phases if kind == 1}
    for row, stop in sorted(stops.items()):
        begin = int(part.offsets[row])
        last = max(int(stop * TAIL_SHARE), LEAST_TAIL)
        tail = np.asarray(part.conductance[begin + max(stop - last, 0) : begin + stop], np.float64)
        tail = _as_measured(tail[np.isfinite(tail)], series[row])
        if len(tail) >= LEAST_TAIL:
            median[row] = np.median(tail)
            error[row] = MAD_TO_SIGMA * np.median(np.abs(tail - median[row])) / np.sqrt(len(tail))
    if "bias_volt" not in part.calibration.constants:
        return median, error, np.ones(part.traces)
    return median, error, _of_traces(part, part.calibration.bias_at_junction_volt)


def _of_traces(part: Part, value: Value) -> Floats:
    """Return a constant of the pieces as one number a trace."""
    pieces = np.array(part.cut.piece, np.int64)
    return np.broadcast_to(np.asarray(value, np.float64), (part.recording.pieces,))[pieces]


def _as_measured(contact: Floats, series: Floats | float) -> Floats:
    """Return the conductance as it was measured, with what is in series put back (``series`` in ohm times G0)."""
    return contact / (1.0 + series * contact) if np.any(series) else contact


def _subtract(part: Part, offset_g0: Floats) -> None:
    """Subtract the offset of each trace, now or, for samples that stay in their recording, whenever they are read."""
    series = _of_traces(part, part.calibration.in_series_ohm) * G0_SIEMENS
    recorded = part.conductance

    def corrected(low: int, high: int) -> npt.NDArray[np.float32]:
        rows = np.searchsorted(part.offsets, np.arange(low, high), side="right") - 1
        spread = series[rows]
        measured = _as_measured(np.asarray(recorded[low:high], np.float64), spread) - offset_g0[rows]
        if np.any(spread):
            rest = 1.0 - spread * measured
            with np.errstate(divide="ignore", invalid="ignore"):
                measured = np.where(rest > 0, measured / rest, np.nan)
        return measured.astype(np.float32)

    if isinstance(recorded, StreamedRow):
        part.conductance = StreamedRow(part.samples, np.float32, corrected)
        return
    blocks = range(0, part.samples, BLOCK_SAMPLES)
    part.conductance = np.concatenate([corrected(at, min(at + BLOCK_SAMPLES, part.samples)) for at in blocks])
