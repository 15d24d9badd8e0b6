"""Cutting by the ramp of the drive: each pull and each push is a trace, holds behind it belong to it."""

from __future__ import annotations

from typing import Final

import numpy as np

from meseta.intake.calibration.calibrate import Calibration
from meseta.intake.cutting.cuts import HOLD, PULL, PUSH, Cut, apart
from meseta.intake.cutting.holds import holds_within
from meseta.intake.cutting.ramps import Ramps
from meseta.intake.recording import RawChannel, Recording
from meseta.recipe.cutting import CuttingSettings

__all__ = ["cut_by_ramps"]

SHORTEST_RAMP: Final = 10
JUMP_SHARE: Final = 0.8
"""A drive jumps where one step from sample to sample makes this share of the swing."""
AT_A_JUMP: Final = 2
"""A ramp begins with the jump before it where it is found so few samples from it."""
EDGE_SAMPLES: Final = 3
EDGE_FRACTION: Final = 0.8
"""A ramp at the edge of the record that is shorter than this share of the usual one was cut off by it."""


def cut_by_ramps(
    recording: Recording,
    settings: CuttingSettings,
    calibration: Calibration,
    drive: RawChannel,
    result: Cut,
    part: tuple[int, int, int],
    ramps: Ramps,
) -> None:
    """Add the traces of a range in which the drive ramps; what is no whole ramp is kept apart.

    Parameters
    ----------
    recording, settings, calibration
    drive : RawChannel
        The channel of the drive.
    result : Cut
        Traces are added to it.
    part : (piece, first sample, last sample)
    ramps : Ramps
        Counted from the first sample.
    """
    piece, first, last = part
    ramps = _cut_at_jumps(drive, first, last - first, ramps)
    result.pull_sign, note = _pull_sign(recording, settings, calibration, ramps, first)
    if note and note not in result.notes:
        result.notes.append(note)
    usual = float(np.median(np.abs(ramps.swing)))
    stops = np.append(ramps.begin[1:], last - first)
    if ramps.begin[0] > 0:
        result.apart.append(apart(first, first + int(ramps.begin[0]), "before the first ramp"))
    previous = -1
    for ramp, (begin, end, stop) in enumerate(zip(ramps.begin, ramps.end, stops, strict=True)):
        reason = _incomplete(ramps, ramp, usual, settings.smallest_ramp_fraction, last - first)
        if reason:
            result.apart.append(apart(first + int(begin), first + int(stop), reason))
            previous = -1
            continue
        opening = ramps.swing[ramp] * result.pull_sign > 0
        row = result.add(first + int(begin), first + int(stop), piece, "opening" if opening else "closing")
        result.phases.append((row, 0, int(end - begin), PULL if opening else PUSH))
        on_the_way = holds_within(drive.values(first + int(begin), first + int(end)), ramps.noise)
        result.phases += [(row, start, stop, HOLD) for start, stop in on_the_way]
        if stop > end:
            result.phases.append((row, int(end - begin), int(stop - begin), HOLD))
        if not opening and previous >= 0:
            result.partner[row], result.partner[previous] = previous, row
        previous = row if opening else -1


def _cut_at_jumps(drive: RawChannel, first: int, samples: int, ramps: Ramps) -> Ramps:
    """Return the ramps without those that a drive jumps back within one step: no sample lies on the way.

    The ramp before ends with the last sample before the step, the next begins with the first behind it.
    """
    begin, end, kept = ramps.begin.copy(), ramps.end.copy(), np.ones(len(ramps.begin), np.bool_)
    for ramp in np.flatnonzero(ramps.end - ramps.begin < SHORTEST_RAMP).tolist():
        if ramp == 0 or ramp == len(begin) - 1:
            continue
        low = max(int(begin[ramp]) - SHORTEST_RAMP, int(begin[ramp - 1]))
        high = min(int(end[ramp]) + SHORTEST_RAMP, int(end[ramp + 1]), samples)
        steps = np.diff(drive.values(first + low, first + high)) * np.sign(ramps.swing[ramp])
        steps = np.where(np.isfinite(steps), steps, 0.0)
        if not steps.max(initial=0.0) >= JUMP_SHARE * abs(float(ramps.swing[ramp])):
            continue
        behind = low + int(np.argmax(steps)) + 1
        holds_above, holds_below = begin[ramp] - end[ramp - 1], begin[ramp + 1] - behind
        end[ramp - 1] = end[ramp - 1] if holds_above > 0 else behind
        begin[ramp] = end[ramp] = behind
        if abs(int(holds_below)) <= AT_A_JUMP:
            begin[ramp + 1], kept[ramp] = behind, False
    return Ramps(begin[kept], end[kept], ramps.swing[kept], ramps.noise)


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
