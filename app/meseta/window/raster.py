"""Compiled kernel of the overlay: how many traces pass through every pixel, whatever the number of traces."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from meseta.kernels import kernel, warm_up

__all__ = ["count_lines"]


@kernel
def count_lines(x: npt.NDArray[np.float64], y: npt.NDArray[np.float64], hits: npt.NDArray[np.uint16]) -> None:
    """Count, for every pixel, the lines that pass through it; each line once, however often it comes back.

    Parameters
    ----------
    x, y : (n,) float64
        Points in pixels; NaN in ``y`` ends a line.
    hits : (columns, rows) uint16
        Raised in place.
    """
    columns, rows = hits.shape
    seen = np.zeros((columns, rows), np.int32)
    line = 1
    for at in range(len(x) - 1):
        if np.isnan(y[at]) or np.isnan(x[at]):
            line += 1
            continue
        if np.isnan(y[at + 1]) or np.isnan(x[at + 1]):
            continue
        x0, y0 = x[at], y[at]
        dx, dy = x[at + 1] - x0, y[at + 1] - y0
        # the part of the stroke inside the picture, as shares of its length (Liang and Barsky, 1984)
        begin, end = 0.0, 1.0
        for side in range(4):
            if side == 0:
                slope, room = -dx, x0
            elif side == 1:
                slope, room = dx, columns - 1e-9 - x0
            elif side == 2:
                slope, room = -dy, y0
            else:
                slope, room = dy, rows - 1e-9 - y0
            if slope == 0.0:
                if room < 0.0:
                    begin = 2.0
            elif slope < 0.0:
                begin = max(begin, room / slope)
            else:
                end = min(end, room / slope)
        if begin > end:
            continue
        steps = int(max(abs(dx), abs(dy)) * (end - begin)) + 1
        for step in range(steps + 1):
            share = begin + (end - begin) * step / steps
            column = min(max(int(x0 + share * dx), 0), columns - 1)
            row = min(max(int(y0 + share * dy), 0), rows - 1)
            if seen[column, row] != line:
                seen[column, row] = line
                hits[column, row] += 1


@warm_up
def _warm_up() -> None:
    points = np.array([0.5, 1.5, np.nan])
    count_lines(points, points, np.zeros((3, 3), np.uint16))
