"""The outline of chosen cells of a map: what stands out is told by a line, not by colour."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["outline"]

Floats = npt.NDArray[np.float64]


def outline(chosen: npt.NDArray[np.bool_], edges: Floats) -> tuple[Floats, Floats]:
    """Return the border of chosen cells as pairs of points.

    Parameters
    ----------
    chosen : (n, n) bool
        First index along x.
    edges : (n + 1,) float64
        Of the cells along either axis.

    Returns
    -------
    x, y : (2 k,) float64
        End points of k pieces, two by two.
    """
    padded = np.pad(chosen, 1)
    across = np.argwhere(padded[1:, 1:-1] != padded[:-1, 1:-1])  # between a cell and its neighbour along x
    along = np.argwhere(padded[1:-1, 1:] != padded[1:-1, :-1])
    x = np.concatenate([np.repeat(edges[across[:, 0]], 2), np.column_stack(
        [edges[along[:, 0]], edges[along[:, 0] + 1]]).ravel()])  # fmt: skip
    y = np.concatenate([np.column_stack([edges[across[:, 1]], edges[across[:, 1] + 1]]).ravel(),
                        np.repeat(edges[along[:, 1]], 2)])  # fmt: skip
    return x, y
