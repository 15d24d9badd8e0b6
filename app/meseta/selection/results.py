"""What selection hands on: decisions by hand, and which traces take part and why not."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.selection.decisions import Decisions, Event, Group, RemovedRange, Verdict
from meseta.tables import Table

__all__ = ["Decisions", "Event", "Group", "RemovedRange", "Selection", "SelectionTable", "Verdict"]


@dataclass(frozen=True)
class SelectionTable(Table):
    """What each rule took: alone, and in sequence.

    ``dropped_alone`` counts the traces that the rule would drop if it were the only one, ``dropped_in_sequence`` those
    that no rule before it had dropped, ``left`` those that are left after it.  No rule drops a trace kept by hand.
    """

    rule: npt.NDArray[np.str_]
    dropped_alone: npt.NDArray[np.int64]
    dropped_in_sequence: npt.NDArray[np.int64]
    left: npt.NDArray[np.int64]


@dataclass(frozen=True)
class Selection:
    """Which traces take part.

    Attributes
    ----------
    kept : (traces,) bool
    reason : (traces,) str
        First rule that dropped the trace; empty for kept ones.
    group : (traces,) str
        Names of the trace's groups, joined by ";"; empty where in none.
    steps : SelectionTable
    unmatched : tuple of str
        Identities in the decisions that no trace has (after re-cutting); listed, never moved.
    """

    kept: npt.NDArray[np.bool_]
    reason: npt.NDArray[np.str_]
    group: npt.NDArray[np.str_]
    steps: SelectionTable
    unmatched: tuple[str, ...] = ()
