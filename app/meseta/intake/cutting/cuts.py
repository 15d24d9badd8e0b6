"""What cutting gives: traces as ranges of a recording, with directions, phases and partners."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.recording import BETWEEN_TRACES, Recording
from meseta.traces import PHASE_KINDS

__all__ = ["HOLD", "PULL", "PUSH", "SWEEP", "Cut", "apart", "between_traces", "stated_direction"]

PULL, HOLD, PUSH, SWEEP = (PHASE_KINDS.index(kind) for kind in ("pull", "hold", "push", "sweep"))
DIRECTIONS: Final = ("opening", "closing")


@dataclass
class Cut:
    """Traces as ranges of a recording's flat samples, in order.

    Attributes
    ----------
    start, stop, piece : list of int
        Flat range of each trace, and the piece it lies in.
    direction : list of str
        "opening", "closing", or "" where it is not known yet.
    partner : list of int
        Row of the other direction in the same cycle; -1 without one.
    phases : list of (trace, start, stop, kind)
        Ranges count from the trace's start.
    pull_sign : float
        +1 where the drive rises in a pull, -1 where it falls.
    apart : list of mapping
        What was kept apart, and why.
    """

    start: list[int] = field(default_factory=list)
    stop: list[int] = field(default_factory=list)
    piece: list[int] = field(default_factory=list)
    direction: list[str] = field(default_factory=list)
    partner: list[int] = field(default_factory=list)
    phases: list[tuple[int, int, int, int]] = field(default_factory=list)
    pull_sign: float = 1.0
    apart: list[dict[str, Any]] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    def add(self, start: int, stop: int, piece: int, direction: str = "") -> int:
        """Add a trace; return its row."""
        self.start.append(start)
        self.stop.append(stop)
        self.piece.append(piece)
        self.direction.append(direction)
        self.partner.append(-1)
        return len(self.start) - 1


def apart(start: int, stop: int, why: str) -> dict[str, Any]:
    """Return what there is to say of a range that is no trace."""
    return {"start": start, "stop": stop, "why": why}


def between_traces(recording: Recording) -> npt.NDArray[np.bool_]:
    """(pieces,) bool, whether the file says of a piece that it belongs to no trace."""
    column = recording.table.get(BETWEEN_TRACES)
    return np.zeros(recording.pieces, np.bool_) if column is None else np.asarray(column, np.bool_)


def stated_direction(recording: Recording, piece: int) -> str:
    """Return the direction that the recording states of a piece; empty where it states none."""
    column = recording.table.get("direction")
    stated = str(column[piece]) if column is not None else str(recording.metadata.get("direction", ""))
    return stated if stated in DIRECTIONS else ""
