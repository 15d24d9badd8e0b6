"""Cutting: from recorded pieces to single traces with direction, phases and partners."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

import numpy as np

from meseta.errors import InputError
from meseta.intake.calibration.calibrate import Calibration
from meseta.intake.cutting.ahead import read_ahead
from meseta.intake.cutting.by_ramps import cut_by_ramps
from meseta.intake.cutting.by_threshold import cut_by_threshold
from meseta.intake.cutting.cuts import HOLD, PULL, PUSH, SWEEP, Cut, apart, between_traces, stated_direction
from meseta.intake.cutting.marks import counting_channel, steps_of, trigger_edges, trigger_level
from meseta.intake.cutting.ramps import find_ramps
from meseta.intake.recording import RawChannel, Recording
from meseta.recipe.cutting import CuttingSettings

__all__ = ["HOLD", "PULL", "PUSH", "SWEEP", "Cut", "cut"]

MARKED_BY: Final = {"number": "trace_number", "time": "time", "trigger": "trigger"}
"""Method of cutting -> role of the channel that says where one trace ends and the next begins."""
CUT_OFF: Final = 0.8
"""A last triggered trace shorter than this share of the usual one was cut off by the end of the record."""


def cut(recording: Recording, settings: CuttingSettings, calibration: Calibration) -> Cut:
    """Cut every piece of a recording into traces.

    Of itself by the trace-number channel where there is one, else, in a record without a drive, by resets of the time
    or edges of a trigger, and within these by the ramp of the drive; a piece with nothing to cut at is one trace.

    Raises
    ------
    InputError
        Where the channel that the settings cut by is not there.
    """
    result = Cut()
    drive = recording.channel("piezo", "displacement")
    drive = None if drive is None or drive.shared else read_ahead(drive)
    mark = _mark(recording, settings, drive)
    between = between_traces(recording)
    for piece in np.flatnonzero(between).tolist():
        span = int(recording.offsets[piece]), int(recording.offsets[piece + 1])
        result.apart.append(apart(*span, "the index of the file gives it to no trace"))
    if settings.method != "threshold" and drive is None and mark is None:
        return replace(_uncut(recording), apart=result.apart)
    level = trigger_level(recording, mark, settings) if mark is not None and mark.role == "trigger" else (0.0, 0.0)
    for piece in np.flatnonzero(~between).tolist():
        first, last = int(recording.offsets[piece]), int(recording.offsets[piece + 1])
        for start, stop in _parts(recording, settings, mark, level, result, (first, last)):
            _cut_part(recording, settings, calibration, drive, result, (piece, start, stop))
    return result


def _mark(recording: Recording, settings: CuttingSettings, drive: RawChannel | None) -> RawChannel | None:
    """Return the channel whose marks part one trace from the next; None where none does."""
    role = MARKED_BY.get(settings.method)
    if role is not None:
        channel = recording.channel(role)
        if channel is None or channel.shared:
            raise InputError(
                f"is to be cut by its {role.replace('_', ' ')}, but no channel has that role",
                recording.source.name,
                f'name it: --set intake.channels."..."=\'{{role = "{role}"}}\', or set cutting.method',
            )
        return channel
    if settings.method != "auto":
        return None
    for role in ("trace_number", "time", "trigger"):
        channel = recording.channel(role)
        if channel is not None and not channel.shared and (drive is None or role == "trace_number"):
            return channel
    return counting_channel(recording) if drive is None else None


def _uncut(recording: Recording) -> Cut:
    """Return every piece that holds samples as one trace."""
    start, stop = recording.offsets[:-1], recording.offsets[1:]
    filled = np.flatnonzero((stop > start) & ~between_traces(recording))
    if "direction" in recording.table:
        directions = [stated_direction(recording, piece) for piece in filled.tolist()]
    else:
        directions = [stated_direction(recording, 0)] * len(filled)
    return Cut(start[filled].tolist(), stop[filled].tolist(), filled.tolist(), directions, [-1] * len(filled))


def _parts(
    recording: Recording,
    settings: CuttingSettings,
    mark: RawChannel | None,
    level: tuple[float, float],
    result: Cut,
    span: tuple[int, int],
) -> list[tuple[int, int]]:
    """Return the ranges of a piece between the marks."""
    first, last = span
    if mark is None:
        return [span]
    if mark.role == "trace_number":
        return steps_of(mark, first, last, lambda step: step != 0)
    if mark.role == "other":
        parts = steps_of(mark, first, last, lambda step: step < 0)
        if len(parts) > 1:
            result.notes.append(f"'{mark.name}' counts the rows and starts anew: taken as {len(parts)} traces")
        return parts
    if mark.role == "time":
        parts = steps_of(mark, first, last, lambda step: step < 0)
        trigger = recording.channel("trigger") if settings.method == "auto" and len(parts) == 1 else None
        if trigger is None or trigger.shared:
            return parts
        mark, level = trigger, trigger_level(recording, trigger, settings)
    return _triggered(recording, settings, mark, level, result, span)


def _triggered(
    recording: Recording,
    settings: CuttingSettings,
    mark: RawChannel,
    level: tuple[float, float],
    result: Cut,
    span: tuple[int, int],
) -> list[tuple[int, int]]:
    """Return the ranges from one edge of the trigger to the next; what is cut off at the ends is kept apart."""
    first, last = span
    edges = trigger_edges(recording, mark, span, level, settings.trigger_edge)
    if not edges:
        note = f"the trigger '{mark.name}' has no edge: the record is not cut by it"
        if note not in result.notes:
            result.notes.append(note)
        return [span]
    usual = float(np.median(np.diff(edges))) if len(edges) > 1 else 0.0
    if edges[0] > first and _begins_with_trigger(recording, mark, level, settings, (first, edges[0]), usual):
        edges.insert(0, first)
    elif edges[0] > first:
        result.apart.append(apart(first, edges[0], "before the first trigger"))
    parts = list(zip(edges, [*edges[1:], last], strict=True))
    if last - edges[-1] < CUT_OFF * usual:
        result.apart.append(apart(*parts.pop(), "the record ends within the trace"))
    return parts


def _begins_with_trigger(
    recording: Recording,
    mark: RawChannel,
    level: tuple[float, float],
    settings: CuttingSettings,
    span: tuple[int, int],
    usual: float,
) -> bool:
    """Return whether a record began at an edge, whose other side it does not show: a whole trace before the next."""
    if not 0.0 < CUT_OFF * usual <= span[1] - span[0]:
        return False
    is_high = bool(recording.values(mark, span[0], span[0] + 1)[0] >= level[0])
    return settings.trigger_edge == "both" or is_high == (settings.trigger_edge == "rising")


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
    if drive is not None and settings.method not in ("none", "threshold"):
        ramps = find_ramps(
            lambda a, b: drive.values(first + a, first + b), last - first, settings.smallest_ramp_fraction
        )
    if ramps is not None and drive is not None:
        cut_by_ramps(recording, settings, calibration, drive, result, part, ramps)
    elif settings.method == "threshold":
        cut_by_threshold(recording, settings, calibration, result, part)
    else:
        result.add(first, last, piece, stated_direction(recording, piece))
