"""Cutting: from recorded pieces to single traces with direction, phases and partners."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.calibrate import Calibration
from meseta.intake.ramps import Ramps, find_ramps
from meseta.intake.recording import RawChannel, Recording
from meseta.recipe.cutting import CuttingSettings
from meseta.traces import PHASE_KINDS

__all__ = ["Cut", "cut"]

SHORTEST_RAMP: Final = 10
EDGE_SAMPLES: Final = 3
EDGE_FRACTION: Final = 0.8
"""A ramp at the edge of the record that is shorter than this share of the usual one was cut off by it."""
PULL, HOLD, PUSH, SWEEP = (PHASE_KINDS.index(kind) for kind in ("pull", "hold", "push", "sweep"))


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


def cut(recording: Recording, settings: CuttingSettings, calibration: Calibration) -> Cut:
    """Cut every piece of a recording into traces.

    By the trace-number channel where there is one, else by resets of the time, else by the ramp of the drive, else, for
    one long record without a drive, by the conductance; a piece with nothing to cut at is one trace.
    """
    result = Cut()
    drive = recording.channel("piezo", "displacement")
    drive = None if drive is None or drive.shared else drive
    if settings.method != "threshold" and drive is None and not _has_marks(recording, settings):
        return _uncut(recording)
    for piece in range(recording.pieces):
        first, last = int(recording.offsets[piece]), int(recording.offsets[piece + 1])
        for start, stop in _parts(recording, settings, first, last):
            _cut_part(recording, settings, calibration, drive, result, (piece, start, stop))
    return result


def _has_marks(recording: Recording, settings: CuttingSettings) -> bool:
    """Return whether a channel may say where one trace ends and the next begins."""
    channels = (recording.channel("trace_number"), recording.channel("time"))
    return settings.method == "auto" and any(channel is not None and not channel.shared for channel in channels)


def _uncut(recording: Recording) -> Cut:
    """Return every piece that holds samples as one trace."""
    start, stop = recording.offsets[:-1], recording.offsets[1:]
    filled = np.flatnonzero(stop > start)
    directions = [_stated_direction(recording, piece) for piece in filled.tolist()]
    return Cut(start[filled].tolist(), stop[filled].tolist(), filled.tolist(), directions, [-1] * len(filled))


def _parts(recording: Recording, settings: CuttingSettings, first: int, last: int) -> list[tuple[int, int]]:
    """Return the ranges between changes of the trace number and falls of the time."""
    if settings.method in ("none", "threshold", "ramp"):
        return [(first, last)]
    number, time = recording.channel("trace_number"), recording.channel("time")
    if number is not None and not number.shared:
        return _split(number, first, last, lambda step: step != 0)
    if time is not None and not time.shared and recording.channel("piezo") is None:
        return _split(time, first, last, lambda step: step < 0)
    return [(first, last)]


def _split(
    channel: RawChannel, first: int, last: int, is_edge: Callable[[npt.NDArray[Any]], npt.NDArray[np.bool_]]
) -> list[tuple[int, int]]:
    edges, block = [first], 4_000_000
    for start in range(first, last, block):
        stored = np.asarray(channel.samples.read(start, min(start + block + 1, last)), np.float64)
        edges += (np.flatnonzero(is_edge(np.diff(stored))) + start + 1).tolist()
    return list(zip(edges, [*edges[1:], last], strict=True))


def _cut_part(
    recording: Recording,
    settings: CuttingSettings,
    calibration: Calibration,
    drive: RawChannel | None,
    result: Cut,
    part: tuple[int, int, int],
) -> None:
    piece, first, last = part
    if last <= first:
        return
    ramps = None
    if drive is not None and settings.method in ("auto", "ramp"):
        ramps = find_ramps(
            lambda a, b: drive.values(first + a, first + b), last - first, settings.smallest_ramp_fraction
        )
    if ramps is not None:
        _by_ramps(recording, settings, calibration, result, part, ramps)
    elif settings.method == "threshold":
        _by_threshold(recording, settings, calibration, result, part)
    else:
        result.add(first, last, piece, _stated_direction(recording, piece))


def _stated_direction(recording: Recording, piece: int) -> str:
    column = recording.table.get("direction")
    stated = str(column[piece]) if column is not None else str(recording.metadata.get("direction", ""))
    return stated if stated in ("opening", "closing") else ""


# -- by the ramp ------------------------------------------------------------------------------------------------------


def _by_ramps(
    recording: Recording,
    settings: CuttingSettings,
    calibration: Calibration,
    result: Cut,
    part: tuple[int, int, int],
    ramps: Ramps,
) -> None:
    piece, first, last = part
    result.pull_sign, note = _pull_sign(recording, settings, calibration, ramps, first)
    if note and note not in result.notes:
        result.notes.append(note)
    usual = float(np.median(np.abs(ramps.swing)))
    stops = np.append(ramps.begin[1:], last - first)
    if ramps.begin[0] > 0:
        result.apart.append(_apart(first, first + int(ramps.begin[0]), "before the first ramp"))
    previous = -1
    for ramp, (begin, end, stop) in enumerate(zip(ramps.begin, ramps.end, stops, strict=True)):
        reason = _incomplete(ramps, ramp, usual, settings.smallest_ramp_fraction, last - first)
        if reason:
            result.apart.append(_apart(first + int(begin), first + int(stop), reason))
            previous = -1
            continue
        opening = ramps.swing[ramp] * result.pull_sign > 0
        row = result.add(first + int(begin), first + int(stop), piece, "opening" if opening else "closing")
        result.phases.append((row, 0, int(end - begin), PULL if opening else PUSH))
        if stop > end:
            result.phases.append((row, int(end - begin), int(stop - begin), HOLD))
        if not opening and previous >= 0:
            result.partner[row], result.partner[previous] = previous, row
        previous = row if opening else -1


def _apart(start: int, stop: int, why: str) -> dict[str, Any]:
    return {"start": start, "stop": stop, "why": why}


def _incomplete(ramps: Ramps, ramp: int, usual: float, smallest: float, samples: int) -> str:
    """Return why a ramp is no trace; empty where it is one."""
    size = abs(float(ramps.swing[ramp]))
    if size < smallest * usual:
        return "the ramp is much smaller than the usual one"
    if ramps.end[ramp] - ramps.begin[ramp] < SHORTEST_RAMP:
        return "the drive jumps back within a few samples"
    if ramps.begin[ramp] <= EDGE_SAMPLES and size < EDGE_FRACTION * usual:
        return "the record begins within the ramp"
    if ramps.end[ramp] >= samples - EDGE_SAMPLES and size < EDGE_FRACTION * usual:
        return "the record ends within the ramp"
    return ""


def _pull_sign(
    recording: Recording, settings: CuttingSettings, calibration: Calibration, ramps: Ramps, first: int
) -> tuple[float, str]:
    """Return the sign of the drive in a pull: as told, as the file says, else as the conductance falls."""
    stated = settings.pull_is or str(recording.metadata.get("pull_is", ""))
    if stated in ("rising", "falling"):
        return (1.0 if stated == "rising" else -1.0), ""
    votes = 0.0
    for ramp in np.linspace(0, len(ramps.begin) - 1, min(len(ramps.begin), 24)).astype(int):
        begin, end = first + int(ramps.begin[ramp]), first + int(ramps.end[ramp])
        if end - begin < SHORTEST_RAMP:
            continue
        share = max((end - begin) // 5, 2)
        early = np.nanmedian(np.abs(calibration.apply(recording, begin, begin + share).conductance))
        late = np.nanmedian(np.abs(calibration.apply(recording, end - share, end).conductance))
        votes += float(np.sign(early - late) * np.sign(ramps.swing[ramp]))
    sign = 1.0 if votes >= 0 else -1.0
    word = "rising" if sign > 0 else "falling"
    return sign, f"pulling is taken as {word} drive, as the conductance falls there (cutting.pull_is)"


# -- by the conductance -----------------------------------------------------------------------------------------------


def _by_threshold(
    recording: Recording, settings: CuttingSettings, calibration: Calibration, result: Cut, part: tuple[int, int, int]
) -> None:
    """Cut where the contact closes: each trace runs from one closing above ``high_g0`` to the next.

    States change with hysteresis: closed above ``high_g0``, open below ``low_g0``.  Neighbouring traces meet half way
    between two changes.
    """
    piece, first, last = part
    changes = _state_changes(recording, settings, calibration, first, last)
    if not changes:
        result.add(first, last, piece, "")
        return
    bounds = [first]
    bounds += [(at + following) // 2 for (at, _), (following, _) in itertools.pairwise(changes)]
    bounds.append(last)
    previous = -1
    for (_, is_open), start, stop in zip(changes, bounds, bounds[1:], strict=False):
        row = result.add(start, stop, piece, "opening" if is_open else "closing")
        if not is_open and previous >= 0:
            result.partner[row], result.partner[previous] = previous, row
        previous = row if is_open else -1


def _state_changes(
    recording: Recording, settings: CuttingSettings, calibration: Calibration, first: int, last: int
) -> list[tuple[int, bool]]:
    """Return (flat sample, open now) of every change between closed and open."""
    changes: list[tuple[int, bool]] = []
    state = 0
    for start in range(first, last, 2_000_000):
        values = calibration.apply(recording, start, min(start + 2_000_000, last)).conductance
        code = np.where(values >= settings.high_g0, 1, np.where(values < settings.low_g0, -1, 0))
        marks = np.flatnonzero(code)
        kinds = code[marks]
        turns = np.flatnonzero(np.diff(np.concatenate([[state], kinds])))
        for turn in turns:
            if state != 0 or turn > 0:
                changes.append((start + int(marks[turn]), bool(kinds[turn] < 0)))
            state = int(kinds[turn])
    return changes
