"""Cutting by the conductance: where the contact closes and opens."""

from __future__ import annotations

import itertools

import numpy as np

from meseta.intake.calibration.calibrate import Calibration
from meseta.intake.cutting.cuts import Cut
from meseta.intake.recording import Recording
from meseta.recipe.cutting import CuttingSettings

__all__ = ["cut_by_threshold"]


def cut_by_threshold(
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
