"""What selection hands on: decisions by hand, and which traces take part and why not."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field

import numpy as np
import numpy.typing as npt

from meseta.tables import Table

__all__ = ["Decisions", "Event", "Group", "Selection", "SelectionTable", "Verdict"]


@dataclass(frozen=True)
class Verdict:
    """A decision by hand on one trace: keep or reject it whatever the rules say, and why."""

    keep: bool
    reason: str = ""


@dataclass(frozen=True)
class Group:
    """A named set of traces, by identity, with its colour (``#rrggbb``) and symbol."""

    members: frozenset[str]
    colour: str = ""
    symbol: str = ""


@dataclass(frozen=True)
class Event:
    """Something that happened during the record: before which trace (identity), and what."""

    identity: str
    text: str


@dataclass(frozen=True)
class Decisions:
    """All that was decided by hand, by the identity of traces (text form)."""

    verdicts: Mapping[str, Verdict] = field(default_factory=dict)
    groups: Mapping[str, Group] = field(default_factory=dict)
    events: tuple[Event, ...] = ()
    removed_sources: frozenset[str] = frozenset()

    def key(self) -> str:
        """Return a hash of the content."""
        plain = {
            "verdicts": {name: asdict(verdict) for name, verdict in sorted(self.verdicts.items())},
            "groups": {name: [sorted(group.members)] for name, group in sorted(self.groups.items())},
            "events": [asdict(event) for event in self.events],
            "removed": sorted(self.removed_sources),
        }
        return hashlib.sha256(json.dumps(plain, sort_keys=True).encode()).hexdigest()


@dataclass(frozen=True)
class SelectionTable(Table):
    """What each rule took: alone, and in sequence."""

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
