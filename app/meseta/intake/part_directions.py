"""Which traces open and which close, where nothing states it, and the phase of each that has none."""

from __future__ import annotations

from itertools import repeat
from typing import TYPE_CHECKING, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.cutting.cut import PULL, PUSH
from meseta.intake.rows import BLOCK_SAMPLES
from meseta.work import blocks_of

if TYPE_CHECKING:
    from meseta.intake.part import Part

__all__ = ["settle_directions"]

ENDS: Final = 16
"""Samples at either end of a trace that are compared."""
RISE_FACTOR: Final = 10.0


@np.errstate(all="ignore")
def settle_directions(part: Part) -> None:
    """Give every trace without a stated direction one: closing where its conductance rises from end to end."""
    unknown = [row for row, direction in enumerate(part.cut.direction) if not direction]
    if unknown:
        rising = _rises(part, np.array(unknown, np.int64))
        for row, closing in zip(unknown, rising.tolist(), strict=True):
            part.cut.direction[row] = "closing" if closing else "opening"
    lengths = np.diff(part.offsets).tolist()
    if not part.cut.phases:
        kinds = [PUSH if direction == "closing" else PULL for direction in part.cut.direction]
        part.cut.phases = list(zip(range(part.traces), repeat(0), lengths, kinds, strict=False))
        return
    has_phase = {phase[0] for phase in part.cut.phases}
    if len(has_phase) == part.traces:
        return
    part.cut.phases += [
        (row, 0, length, PUSH if direction == "closing" else PULL)
        for row, (length, direction) in enumerate(zip(lengths, part.cut.direction, strict=True))
        if row not in has_phase
    ]
    part.cut.phases.sort()


def _rises(part: Part, rows: npt.NDArray[np.int64]) -> npt.NDArray[np.bool_]:
    """Return for each row whether its conductance ends much higher than it begins."""
    from meseta.intake.kernels import rising_rows

    rising = np.empty(len(rows), np.bool_)
    if isinstance(part.conductance, np.ndarray):
        rising_rows(part.conductance, part.offsets, rows, ENDS, RISE_FACTOR, rising)
        return rising
    for first, last in blocks_of(part.offsets, BLOCK_SAMPLES):
        wanted = slice(*np.searchsorted(rows, [first, last]))
        offsets = part.offsets[first : last + 1] - part.offsets[first]
        low, high = int(part.offsets[first]), int(part.offsets[last])
        if len(rows[wanted]) == 0:
            continue
        if high - low > BLOCK_SAMPLES:  # a long trace: its ends will do
            ends = [part.conductance[low : low + ENDS], part.conductance[high - ENDS : high]]
            values, offsets = np.concatenate(ends), np.array([0, 2 * ENDS], np.int64)
        else:
            values = np.asarray(part.conductance[low:high])
        rising_rows(values, offsets, rows[wanted] - first, ENDS, RISE_FACTOR, rising[wanted])
    return rising
