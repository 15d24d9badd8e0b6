"""Traces that an index of starts and stops cuts out of a flat record, and what lies between them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["Spans", "spans_of"]

Whole = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Spans:
    """A record cut at every start and stop of an index.

    Attributes
    ----------
    offsets : (pieces + 1,) int64
    between : (pieces,) bool
        The piece belongs to no trace.
    trace : (pieces,) int64
        Entry of the index; for a piece between traces that of the trace before, or of the first.
    """

    offsets: Whole
    between: npt.NDArray[np.bool_]
    trace: Whole

    def of_each(self, column: npt.NDArray[Any]) -> npt.NDArray[Any]:
        """Return a column with one entry a trace as one with one entry a piece."""
        taken: npt.NDArray[Any] = column[self.trace]
        return taken

    def words(self, name: str) -> tuple[str, ...]:
        """Return what there is to say of samples that belong to no trace."""
        count, total = int(np.count_nonzero(self.between)), int(self.offsets[-1])
        if not count:
            return ()
        samples = int(np.diff(self.offsets)[self.between].sum())
        ranges = "1 range" if count == 1 else f"{count} ranges"
        return (
            f"by {name}, {ranges} of {samples} samples in all ({samples / total:.1%} of the record) "
            f"{'belongs' if count == 1 else 'belong'} to no trace: kept apart",
        )


def spans_of(starts: Whole, stops: Whole, samples: int) -> Spans | None:
    """Return how an index cuts a record of so many samples; None where it cannot be its index.

    ``stops`` are the samples behind each trace, or, where every trace then touches the next and the last one ends the
    record, the last samples of each.
    """
    if len(starts) != len(stops) or not len(starts):
        return None
    if stops[-1] == samples - 1 and np.array_equal(stops[:-1] + 1, starts[1:]):
        stops = stops + 1
    if starts[0] < 0 or stops[-1] > samples or np.any(stops <= starts) or np.any(stops[:-1] > starts[1:]):
        return None
    edges, owners = np.empty(2 * len(starts) + 2, np.int64), np.empty(2 * len(starts) + 1, np.int64)
    edges[0], edges[1:-1:2], edges[2:-1:2], edges[-1] = 0, starts, stops, samples
    owners[1::2] = owners[2::2] = np.arange(len(starts))
    owners[0] = 0
    between = np.ones(len(owners), np.bool_)
    between[1::2] = False
    filled = np.diff(edges) > 0
    return Spans(np.concatenate([[0], edges[1:][filled]]), between[filled], owners[filled])
