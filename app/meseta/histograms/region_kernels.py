"""Compiled kernels of the region: where a trace has settled in the floor, and where its drive is in a window."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["drive_at", "find_window", "settle_region"]


@kernel
def settle_region(
    values: npt.NDArray[np.float32],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    below: npt.NDArray[np.float32],
    stay: npt.NDArray[np.int64],
    settled: npt.NDArray[np.int64],
) -> None:
    """Find where each row has first stayed below ``below[row]`` for ``stay[row]`` samples on end; else its end."""
    for row in range(len(begin)):
        run = 0
        settled[row] = end[row]
        for at in range(begin[row], end[row]):
            run = run + 1 if values[at] < below[row] else 0
            if run > stay[row]:
                settled[row] = at
                break


@kernel
def drive_at(relative: npt.NDArray[np.float32], at: int, origin: int, start: float, step: float) -> float:
    """Return the drive of a sample: explicit where ``relative`` has any, else in equal steps from its origin."""
    return start + (np.float64(relative[at]) if len(relative) > 0 else step * (at - origin))


@kernel
def find_window(
    origin: npt.NDArray[np.int64],
    begin: npt.NDArray[np.int64],
    end: npt.NDArray[np.int64],
    start: npt.NDArray[np.float64],
    step: npt.NDArray[np.float64],
    relative: npt.NDArray[np.float32],
    zero: npt.NDArray[np.float64],
    low: float,
    high: float,
    first: npt.NDArray[np.int64],
    last: npt.NDArray[np.int64],
) -> None:
    """Find the samples ``first`` to ``last`` of each row whose drive lies from ``low`` to ``high``, from its zero.

    ``first`` is the first sample in the window, ``last`` the first after it that is beyond the end which the drive
    goes to.  Empty ranges end at the row's end.
    """
    for row in range(len(begin)):
        first[row] = last[row] = end[row]
        if end[row] <= begin[row] or np.isnan(zero[row]):
            continue
        if len(relative) > 0:
            rising = relative[end[row] - 1] >= relative[begin[row]]
        else:
            rising = step[row] >= 0.0
        for at in range(begin[row], end[row]):
            shifted = drive_at(relative, at, origin[row], start[row], step[row]) - zero[row]
            if first[row] == end[row]:
                if shifted >= low and shifted < high:
                    first[row] = at
            elif (rising and shifted >= high) or (not rising and shifted < low):
                last[row] = at
                break


@warm_up
def _warm_up() -> None:
    values, first, whole = np.ones(5, np.float32), np.zeros(1, np.int64), np.array([5], np.int64)
    settle_region(values, first, whole, values[:1], whole, first.copy())
    unit = np.ones(1)
    for drive in (np.zeros(0, np.float32), values):
        find_window(first, first, whole, unit, unit, drive, unit, 0.0, 1.0, first.copy(), first.copy())
