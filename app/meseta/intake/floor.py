"""Offset from the floor: what the amplifier reads with the contact open, pooled and running over the record.

Only traces shown to reach the floor take part: their last stretch must agree with that of the other traces, so that a
plateau that ends a trace is never taken for an offset.  A per-trace offset is never used: it would erase such plateaus.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.assembly import Part
from meseta.intake.calibration.running_floor import LEAST_TRACES, offset_error, running_offset
from meseta.intake.calibration.spread import Value
from meseta.intake.rows import BLOCK_SAMPLES, StreamedRow
from meseta.quantities import G0_SIEMENS

__all__ = ["PooledFloor", "pooled_floor", "remove_floor_offset", "tails_of"]

Floats = npt.NDArray[np.float64]
TAIL_SHARE: Final = 0.1
LEAST_TAIL: Final = 10
MAD_TO_SIGMA: Final = 1.482602218505602
SHOWN: Final = 200


Tails = tuple[Floats, Floats, Floats]


@dataclass(frozen=True)
class PooledFloor:
    """The offset that several recordings show together.

    Attributes
    ----------
    offset_g0 : mapping
        Name of a recording -> (traces,) offset of each of its traces; empty where none is removed.
    notes : dict
        What was found, for notes.
    """

    offset_g0: Mapping[str, Floats]
    notes: dict[str, Any]

    def remove(self, parts: Mapping[str, Part]) -> dict[str, Any]:
        """Subtract the offset from parts by their names, before the series resistance; return the notes."""
        for name, part in parts.items():
            if name in self.offset_g0:
                _subtract(part, self.offset_g0[name])
        return self.notes


def remove_floor_offset(parts: Sequence[Part]) -> dict[str, Any]:
    """Subtract the running offset from loaded parts, before the series resistance; return what was done, for notes."""
    named = {str(place): part for place, part in enumerate(parts)}
    return pooled_floor({name: tails_of(part) for name, part in named.items()}).remove(named)


def pooled_floor(tails: Mapping[str, Tails | None]) -> PooledFloor:
    """Return the offset that recordings show together, in their order, of what :func:`tails_of` gives of each."""
    usable = {name: one for name, one in tails.items() if one is not None}
    empty = np.empty(0)
    ends, noise, bias = (np.concatenate(column) for column in zip(*usable.values(), (empty, empty, empty), strict=True))
    offset, reaches = running_offset(ends * bias, noise * np.abs(bias))
    if not np.isfinite(offset).any():
        why = f"fewer than {LEAST_TRACES} traces are shown to reach the floor"
        return PooledFloor({}, {"removed": False, "why": why})
    stops = np.cumsum([len(one[0]) for one in usable.values()])
    of_each = dict(zip(usable, np.split(offset / bias, stops[:-1]), strict=True))
    shown = np.unique(np.linspace(0, len(offset) - 1, min(len(offset), SHOWN)).astype(int))
    unit = "G0" if np.all(bias == 1.0) else "G0 V"
    notes = {
        "removed": True,
        "traces_at_floor": int(reaches.sum()),
        "traces": len(offset),
        "at_trace": shown.tolist(),
        "offset": [float(value) for value in offset[shown]],
        "unit": unit,
        "offset_error": offset_error(ends * bias, reaches, offset),
        "offset_ampere_median": float(np.median(offset) * G0_SIEMENS) if unit == "G0 V" else None,
    }
    return PooledFloor(of_each, notes)


def tails_of(part: Part) -> Tails | None:
    """Return (median, its standard error, bias) of the last stretch of each opening, as measured.

    None where the amplifier has no offset that adds to the current.
    """
    if part.calibration.kind not in ("linear", "current", "conductance"):
        return None
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
