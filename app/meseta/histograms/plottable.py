"""Histograms for other tools: the plottable-histogram protocol of the Scikit-HEP tools (UHI).

The protocol is structural: an object with ``axes``, ``kind``, ``values()``, ``variances()`` and ``counts()`` is a
histogram for every tool that speaks it.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["PlottableAxis", "PlottableHistogram", "PlottableTraits"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class PlottableTraits:
    """What kind of axis it is: neither closed to a ring nor of separate categories."""

    circular: bool = False
    discrete: bool = False


@dataclass(frozen=True, eq=False)
class PlottableAxis:
    """A binned axis: iterating gives (low, high) of each bin."""

    edges: Floats
    label: str = ""
    traits: PlottableTraits = PlottableTraits()

    def __len__(self) -> int:
        return len(self.edges) - 1

    def __getitem__(self, index: int) -> tuple[float, float]:
        place = range(len(self))[index]
        return float(self.edges[place]), float(self.edges[place + 1])

    def __iter__(self) -> Iterator[tuple[float, float]]:
        return (self[place] for place in range(len(self)))

    def __eq__(self, other: object) -> bool:
        return isinstance(other, PlottableAxis) and np.array_equal(self.edges, other.edges)

    def __hash__(self) -> int:
        return hash(self.edges.tobytes())


@dataclass(frozen=True, eq=False)
class PlottableHistogram:
    """A histogram as other tools expect it.

    Attributes
    ----------
    axes : tuple of PlottableAxis
    kind : str
        "COUNT".
    """

    axes: tuple[PlottableAxis, ...]
    content: npt.NDArray[np.float64]
    spread: npt.NDArray[np.float64] | None = None
    number: npt.NDArray[np.float64] | None = None
    kind: str = "COUNT"

    def values(self) -> Floats:
        """Return the density of every bin."""
        return self.content

    def variances(self) -> Floats | None:
        """Return the variance of every value, from resampling traces; None where not resampled."""
        return self.spread

    def counts(self) -> Floats | None:
        """Return the samples in every bin."""
        return self.number
