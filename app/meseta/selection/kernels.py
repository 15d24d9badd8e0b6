"""Compiled kernel of the selection: samples of every trace in a window of conductance and displacement."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["count_inside"]


@kernel
def count_inside(
    values: npt.NDArray[np.float32],
    start: npt.NDArray[np.int64],
    stop: npt.NDArray[np.int64],
    first: npt.NDArray[np.int64],
    step: npt.NDArray[np.float64],
    relative: npt.NDArray[np.float32],
    zero: npt.NDArray[np.float64],
    low_g0: float,
    high_g0: float,
    low: float,
    high: float,
    counts: npt.NDArray[np.float64],
) -> None:
    """Count samples ``start[t]`` to ``stop[t]`` that lie in both half-open windows.

    The drive at sample ``i`` is ``step[t] * (i - first[t]) - zero[t]``, or ``relative[i] - zero[t]`` where ``relative``
    is not empty; a trace whose zero is NaN has no sample in any window of displacement.
    """
    explicit = len(relative) > 0
    for trace in range(len(start)):
        begin, end = start[trace], stop[trace]
        if np.isnan(zero[trace]):
            continue
        if not explicit and step[trace] != 0.0 and np.isfinite(low) and np.isfinite(high):
            # only this stretch can lie in the window; its ends are tested below like all others
            one, other = (low + zero[trace]) / step[trace], (high + zero[trace]) / step[trace]
            least, most = min(one, other) - 2.0, max(one, other) + 2.0
            length = float(end - first[trace])
            begin = max(begin, first[trace] + np.int64(min(max(least, 0.0), length)))
            end = min(end, first[trace] + np.int64(min(max(most, 0.0), length)))
        inside = 0
        for at in range(begin, end):
            if low_g0 <= values[at] < high_g0:
                drive = (relative[at] if explicit else step[trace] * (at - first[trace])) - zero[trace]
                if low <= drive < high:
                    inside += 1
        counts[trace] = inside


@warm_up
def _warm_up() -> None:
    values, place, number = np.ones(2, np.float32), np.zeros(1, np.int64), np.zeros(1)
    for relative in (np.empty(0, np.float32), values):
        count_inside(values, place, place + 2, place, number, relative, number, 0.0, 1.0, 0.0, 1.0, number.copy())
