"""The drive of a recording's traces: where each begins, its steps, and the drive relative to its begin."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

import numpy as np
import numpy.typing as npt

from meseta.intake.rows import LARGEST_BLOCK, SharedAxis

if TYPE_CHECKING:
    from meseta.intake.part import Part

__all__ = ["begin_drive", "drive_block", "relative_of"]

LINEAR_TOLERANCE: Final = 1.2e-7
"""Steps are equal where no value is off by more than the rounding of float32."""


def begin_drive(part: Part) -> bool:
    """Make room for starts and steps; return whether they are to be found in a channel, block by block."""
    part.drive_start, part.drive_step = np.zeros(part.traces), np.full(part.traces, part.axis.factor)
    channel = part.axis.channel
    if channel is None:
        return False
    if channel.shared and _is_uncut(part):
        _share_drive(part)
        return False
    for row in np.flatnonzero(np.diff(part.offsets) > LARGEST_BLOCK).tolist():  # it comes in several blocks
        begin, end = int(part.start[row]), int(part.stop[row])
        first, last = (float(part.axis.values(part.recording, at, at + 1)[0]) for at in (begin, end - 1))
        part.drive_start[row], part.drive_step[row] = first, (last - first) / (end - begin - 1)
    return True


def _is_uncut(part: Part) -> bool:
    """Return whether every piece is one trace."""
    return np.array_equal(part.start, part.recording.offsets[:-1]) and np.array_equal(
        part.stop, part.recording.offsets[1:]
    )


@np.errstate(all="ignore")
def _share_drive(part: Part) -> None:
    """Take one axis for all traces, each as long as it is."""
    longest = int(np.max(np.diff(part.offsets)))
    piece = int(np.argmax(np.diff(part.offsets)))
    begin = int(part.recording.offsets[piece])
    values = part.axis.values(part.recording, begin, begin + longest)
    step = (values[-1] - values[0]) / max(longest - 1, 1)
    relative = values - values[0]
    part.drive_start[:], part.drive_step[:] = values[0], step
    bound = LINEAR_TOLERANCE * float(np.max(np.abs(values)))
    if not np.all(np.abs(relative - step * np.arange(longest)) <= bound):
        part.relative = SharedAxis(relative.astype(np.float32), part.offsets)


def drive_block(part: Part, low: int, high: int, relative: npt.NDArray[np.float32]) -> bool:
    """Fill the drive relative to each trace's start; return whether its steps are equal."""
    from meseta.intake.kernels import drive_piece, drive_steps

    values = part.gathered(lambda a, b: part.axis.values(part.recording, a, b), low, high)
    values = np.ascontiguousarray(values)
    first, last = (int(np.searchsorted(part.offsets, at, side="right")) - 1 for at in (low, high - 1))
    if int(part.offsets[first + 1] - part.offsets[first]) > LARGEST_BLOCK:
        base = low - int(part.offsets[first])
        begin, step = float(part.drive_start[first]), float(part.drive_step[first])
        return bool(drive_piece(values, base, begin, step, LINEAR_TOLERANCE, relative))
    rows = slice(first, last + 1)
    offsets = part.offsets[first : last + 2] - low
    start, step_of = part.drive_start[rows], part.drive_step[rows]
    return bool(drive_steps(values, offsets, LINEAR_TOLERANCE, start, step_of, relative))


def relative_of(part: Part, low: int, high: int) -> npt.NDArray[np.float32]:
    """Return the drive relative to each trace's start behind flat samples ``low`` to ``high``."""
    values = part.gathered(lambda a, b: part.axis.values(part.recording, a, b), low, high)
    first, last = np.searchsorted(part.offsets, [low, high - 1], side="right") - 1
    bounds = np.clip(part.offsets[first : last + 2], low, high)
    return (values - np.repeat(part.drive_start[first : last + 1], np.diff(bounds))).astype(np.float32)
